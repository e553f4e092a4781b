"""Frozen data cuts: a publication kept with everything that its numbers follow from, and the proof that they still do.

    published/cuts/NAME/
      tables/ site/ burdenline.duckdb ...   the edition that stood
      inputs/                               programme.toml and the register, as they were
      manifest.json                         the edition's own: fingerprint, stamp, hash of every table
      cut.json                              name, reason, versions, and the hash of every file and of every part

The parts stay in the lake: a cut keeps them from being tidied away and names their hashes. The same publication and
inputs under the same name give the same bytes.
"""

from __future__ import annotations

import json
import os
import re
import shutil
import tempfile
from collections.abc import Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

import duckdb

from warehouse.build import TrendBuild
from warehouse.cache import complete
from warehouse.edition_database import write_database
from warehouse.edition_tables import write_tables
from warehouse.kept import KEPT
from warehouse.ledger import Damage
from warehouse.parts import Part, file_sha256, write_whole
from warehouse.published import DATABASE, MANIFEST, Published

CUT = "cut.json"
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,60}")
_LIBRARIES = ("duckdb", "polars", "numpy", "scipy", "deltalake")


class CutError(ValueError):
    """A cut cannot be made or read; the message says why and what to do."""


def freeze(published: Path, name: str, inputs: Sequence[Path], *, reason: str = "") -> Path:
    """Keep the standing publication as cut `name`, with copies of the input files; returns the cut's folder.

    Freezing the same publication under the same name again changes nothing; another one is refused.
    """
    if not _NAME.fullmatch(name):
        raise CutError(f"cut name {name!r}; expected letters, digits, dots, dashes and underscores")
    cut, staging = published / "cuts" / name, published / "cuts" / f".{name}.staging"
    try:
        _fill(staging, Published(published), inputs, name, reason)
    except (OSError, duckdb.Error) as problem:
        shutil.rmtree(staging, ignore_errors=True)
        raise CutError(
            f"{cut} could not be written: {_first_reason(problem)}; nothing was frozen. "
            "Free space or restore write access, then freeze again"
        ) from problem
    if cut.exists():
        same = (cut / CUT).read_bytes() == (staging / CUT).read_bytes()
        shutil.rmtree(staging)
        if not same:
            raise CutError(
                f"cut {name} exists and holds another publication; choose another name, cuts are never changed"
            )
        return cut
    staging.rename(cut)
    return cut


def _fill(staging: Path, standing: Published, inputs: Sequence[Path], name: str, reason: str) -> None:
    shutil.rmtree(staging, ignore_errors=True)
    shutil.copytree(standing.edition, staging, symlinks=True, ignore=shutil.ignore_patterns(KEPT))
    # That of an edition has a history of the editions before; written from the tables alone it is the same bytes.
    (staging / DATABASE).unlink()
    write_database(Published(standing.folder, edition=staging), staging / DATABASE)
    (staging / "inputs").mkdir()
    for path in inputs:
        shutil.copyfile(path, staging / "inputs" / path.name)
    write_whole(staging / CUT, _description(standing, staging, name, reason))


def _first_reason(problem: Exception) -> str:
    # Copying a folder tells every file that failed, each with its own reason.
    told = problem.args[0][0][2] if isinstance(problem, shutil.Error) else problem
    return " ".join(str(told).split())


def _description(standing: Published, staging: Path, name: str, reason: str) -> bytes:
    parts = standing.table("parts").select("part_path", "part_sha256").sort("part_path")
    described = {
        "name": name,
        "reason": reason,
        "fingerprint": standing.manifest["fingerprint"],
        "lake": Path(os.path.relpath(standing.lake, staging)).as_posix(),
        "libraries": {library: version(library) for library in _LIBRARIES},
        "files": _hashes(staging),
        "parts": dict(parts.iter_rows()),
    }
    return json.dumps(described, indent=1, sort_keys=True).encode()


def _hashes(folder: Path) -> dict[str, str]:
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return {path.relative_to(folder).as_posix(): file_sha256(path) for path in files}


def described(published: Path, name: str) -> dict[str, Any]:
    """What `freeze` wrote down about a cut. Raises CutError with the cuts that exist."""
    path = published / "cuts" / name / CUT
    if not path.is_file():
        raise CutError(f"no cut {name!r} in {published}; there are: {', '.join(cut_names(published)) or 'none'}")
    return json.loads(path.read_text(encoding="utf-8"))


def cut_names(published: Path) -> list[str]:
    """Names of the cuts of a programme."""
    return sorted(path.parent.name for path in (published / "cuts").glob(f"[!.]*/{CUT}"))


def kept_parts(published: Path) -> set[str]:
    """Paths of all parts that a cut still needs; `ledger.tidy` keeps them."""
    return {path for name in cut_names(published) for path in described(published, name)["parts"]}


def damages(published: Path, name: str) -> list[Damage]:
    """Every file of the cut and every part behind it that is missing, was changed, or was added; [] when whole."""
    cut, written = published / "cuts" / name, described(published, name)
    found = {path: digest for path, digest in _hashes(cut).items() if path != CUT}
    lake = cut / written["lake"]
    complete(lake, written["parts"])
    parts = {path: file_sha256(lake / path) for path in written["parts"] if (lake / path).is_file()}
    return [*_differences(written["files"], found), *_differences(written["parts"], parts)]


def _differences(written: dict[str, str], found: dict[str, str]) -> list[Damage]:
    problems = []
    for path in sorted({*written, *found}):
        if path not in written:
            problems.append(Damage(path, "was added after the cut"))
        elif path not in found:
            problems.append(Damage(path, "missing"))
        elif found[path] != written[path]:
            problems.append(Damage(path, "bytes changed after the cut"))
    return problems


def cut_parts(published: Path, name: str) -> list[Part]:
    """The parts behind a cut, as `TrendBuild` takes them."""
    described(published, name)
    parts = Published(published, edition=published / "cuts" / name).table("parts")
    return [Part(*row) for row in parts.iter_rows()]


def moved_tables(published: Path, name: str, build: TrendBuild) -> list[str]:
    """Tables that a build from the cut's parts and inputs does not give byte for byte; [] is the proof that it does."""
    before = json.loads((published / "cuts" / name / MANIFEST).read_text(encoding="utf-8"))["tables"]
    with tempfile.TemporaryDirectory(dir=published / "cuts", prefix=".thaw-") as folder:
        after = write_tables(build, Path(folder))
    return sorted(table for table in {*before, *after} if before.get(table) != after.get(table))
