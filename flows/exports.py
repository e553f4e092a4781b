"""Exports of a programme folder, whole or absent: the warehouse and the dashboards write them, here they get a place."""

from __future__ import annotations

import difflib
import shutil
from pathlib import Path

import polars as pl

from flows.data_cuts import cut_folder
from flows.strip_export import export_strips
from warehouse.exports.catalogue import EXPORTS
from warehouse.published import Published

STRIPS = {"strips": "svg", "strips-png": "png"}
"""The exports that draw, which the warehouse cannot, with their form; all others are in its catalogue."""


class ExportError(ValueError):
    """The export is not known or cannot be written; the message names the nearest, or the target and what to do."""


def export(folder: Path, what: str, to: Path, *, cut: str = "", study_code: str = "STUDY") -> list[Path]:
    """Write one export of the standing publication or of a cut; returns the files. Raises ExportError.

    The files are written beside and get their names when the last one is whole. What else lies in a target folder stays.
    """
    known = (*EXPORTS, *STRIPS)
    if what not in known:
        near = difflib.get_close_matches(what, known, n=1)
        raise ExportError(f"unknown export {what!r}; {f'did you mean {near[0]}?' if near else ', '.join(known)}")
    published = Published(folder / "published", edition=cut_folder(folder, cut) if cut else None)
    is_file = what in EXPORTS and EXPORTS[what].writes == "file"
    if to.exists() and to.is_dir() == is_file:
        raise ExportError(
            f"{to} is a {'folder' if is_file else 'file'}, but {what} is {'one file' if is_file else 'a folder of files'}; "
            "name another target"
        )
    home = to.parent if is_file else to
    was_there, beside = home.exists(), home / f".writing-{what}"
    try:
        shutil.rmtree(beside, ignore_errors=True)
        beside.mkdir(parents=True)
        files = _write(published, what, beside / to.name if is_file else beside, study_code)
        return [file.replace(home / file.name) for file in files]
    except (OSError, pl.exceptions.ComputeError) as problem:
        raise ExportError(
            f"{to} could not be written: {' '.join(str(problem).split())}; what was there before stays. "
            "Free space or restore write access, then export again"
        ) from problem
    finally:
        shutil.rmtree(beside, ignore_errors=True)
        if not was_there and home.is_dir() and not any(home.iterdir()):
            home.rmdir()


def _write(published: Published, what: str, to: Path, study_code: str) -> list[Path]:
    if what in STRIPS:
        return export_strips(published, to, STRIPS[what])
    return EXPORTS[what].export(published, to, study_code)
