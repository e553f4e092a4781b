"""The Parquet files of an edition: a file per table, and for the largest ones a folder of slices.

    tables/therapies.parquet
    tables/hours.parquet/00.parquet, 01.parquet, ...      rows of a slice's patients, in the order of the key

Of a build over a standing edition only slices with patients built anew are written; the others are further names of
the standing edition's files. The bytes are those of a build over all.
"""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import polars as pl

from warehouse import schema
from warehouse.build import TrendBuild
from warehouse.layers import READ_IN_PLACE
from warehouse.parts import file_sha256
from warehouse.slices import slice_of

_ROW_GROUP_ROWS = 8192  # small, so that one recording's rows are read without the others'


def write_tables(build: TrendBuild, edition: Path) -> dict[str, dict[str, Any]]:
    """Write the tables of a build that are copied into `edition/tables`.

    Returns the rows of each table and, by path within the edition, the rows and the SHA-256 of its files.
    """
    (edition / "tables").mkdir(parents=True)
    described = {}
    for name in schema.PUBLISHED:
        if name not in READ_IN_PLACE:
            files = _slices(build, name, edition) if name in schema.SLICED else _whole(build, name, edition)
            found = {path.relative_to(edition).as_posix(): told for path, told in files}
            described[name] = {"rows": sum(told["rows"] for told in found.values()), "files": found}
    return described


def _whole(build: TrendBuild, name: str, edition: Path) -> Iterator[tuple[Path, dict[str, Any]]]:
    path = edition / "tables" / f"{name}.parquet"
    yield path, _write(build.frame(name), path)


def _slices(build: TrendBuild, name: str, edition: Path) -> Iterator[tuple[Path, dict[str, Any]]]:
    folder = edition / "tables" / f"{name}.parquet"
    folder.mkdir()
    anew = _rows_anew(build, name)
    standing = list(build.standing.files(name).items()) if build.standing else []
    for number in range(build.slices):
        path = folder / f"{number:02}.parquet"
        if not standing:
            yield path, _write(anew[number], path)
        elif number in build.slices_anew:
            before = _kept_rows(build, name, standing[number][0])
            yield path, _write(pl.concat([before, anew[number]]).sort(schema.PUBLISHED[name].key), path)
        else:
            file, told = standing[number]
            _further_name(file, path)
            yield path, told


def _rows_anew(build: TrendBuild, name: str) -> dict[int, pl.DataFrame]:
    """Rows of the patients built anew, by slice that is written anew, in the order of the key."""
    rows = build.frame(f"anew.{name}").sort(schema.PUBLISHED[name].key)
    if "patient_code" in rows.columns:
        owners = rows["patient_code"]
    else:
        wears = build.frame("anew.recordings").select("recording_id", "patient_code")
        owners = rows.select("recording_id").join(wears, on="recording_id", how="left", maintain_order="left")[
            "patient_code"
        ]
    codes = owners.unique().to_list()
    numbers = owners.replace_strict(
        codes, [slice_of(code, build.slices) for code in codes], return_dtype=pl.Int64, default=None
    )
    written = build.slices_anew if build.standing else range(build.slices)
    return {number: rows.filter(numbers == number) for number in written}


def _kept_rows(build: TrendBuild, name: str, file: Path) -> pl.DataFrame:
    rows = pl.read_parquet(file, glob=False, hive_partitioning=False)
    column, of = ("patient_code", "patients") if "patient_code" in rows.columns else ("recording_id", "wears")
    return rows.join(build.frame(f"kept.{of}"), on=column, how="semi", maintain_order="left")


def _further_name(file: Path, path: Path) -> None:
    try:
        os.link(file, path)
    except OSError:  # a file system without links, or one that has no more room for names of this file
        shutil.copyfile(file, path)


def _write(rows: pl.DataFrame, path: Path) -> dict[str, Any]:
    rows.rechunk().write_parquet(path, compression="zstd", row_group_size=_ROW_GROUP_ROWS)
    return {"rows": rows.height, "sha256": file_sha256(path)}
