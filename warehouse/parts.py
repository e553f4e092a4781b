"""Immutable Parquet parts of the lake: written beside and renamed, named after their own bytes, never changed in place.

A part is one load of one table: the beats of a recording, a block of a segment's samples, the row of a delivery.
Its path is `<table>/<key>/<first 16 hex of its SHA-256>.parquet`, so the same rows always land under the same name and
a changed byte can be found. Where the key is a recording its folder is called `recording_id=<key>`, so that a query
over many parts for one recording opens only that recording's. Which parts are in force is the ledger's business.
"""

from __future__ import annotations

import hashlib
import io
import os
import re
import tempfile
from collections import deque
from collections.abc import Iterable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from pathlib import Path
from typing import NamedTuple

import numpy as np
import polars as pl
from numpy.typing import NDArray
from polars.datatypes import DataTypeClass

from warehouse import schema

BLOCK_SAMPLES = 2**22
"""Most samples of a signal block: 8 MB decoded, 4.7 h at 250 Hz."""

_ROW_GROUP_ROWS = 100_000
_CACHED_SAMPLES = 2**16
_KEY_PATTERN = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]{0,120}")
_TEMP_PREFIX = ".writing-"


class PartError(ValueError):
    """A part cannot be written or read; the message names table, key, what was found and what is expected."""


class Part(NamedTuple):
    """One immutable file of the lake. `path` is POSIX and relative to the lake; segment and block are for signal."""

    table: str
    key: str
    path: str
    sha256: str
    rows: int
    bytes: int
    fingerprint: str = ""
    segment: int | None = None
    block: int | None = None


def polars_type(duckdb_type: str) -> pl.DataType:
    """Polars type of a column of the dictionary; lists are written with [] behind the type of their items."""
    if duckdb_type.endswith("[]"):
        return pl.List(polars_type(duckdb_type.removesuffix("[]")))
    return _POLARS_TYPES[duckdb_type]


_POLARS_TYPES: dict[str, pl.DataType] = {
    "BOOLEAN": pl.Boolean(),
    "TINYINT": pl.Int8(),
    "SMALLINT": pl.Int16(),
    "USMALLINT": pl.UInt16(),
    "INTEGER": pl.Int32(),
    "BIGINT": pl.Int64(),
    "REAL": pl.Float32(),
    "DOUBLE": pl.Float64(),
    "VARCHAR": pl.String(),
    "DATE": pl.Date(),
    "TIMESTAMP": pl.Datetime("us"),
}


def frame_schema(table: schema.Table) -> dict[str, pl.DataType]:
    """Polars types of a table of the dictionary, in the table's column order."""
    return {name: polars_type(schema.COLUMNS[name].type) for name in table.columns}


def parts_frame(parts: Sequence[Part]) -> pl.DataFrame:
    """Rows of the published table `parts`."""
    columns = schema.PUBLISHED["parts"].columns
    types = {name: polars_type(schema.COLUMNS[name].type) for name in columns}
    values = {name: [part[n] for part in parts] for n, name in enumerate(types)}
    return pl.DataFrame(values, schema=types).sort("part_path")


def empty_frame(table: schema.Table) -> pl.DataFrame:
    """A frame without rows with the table's columns and types."""
    return pl.DataFrame(schema=frame_schema(table))


def checked_frame(table: schema.Table, frame: pl.DataFrame) -> pl.DataFrame:
    """The frame in the table's column order and types.

    Integers and floats are narrowed or widened when every value fits. Raises PartError for missing or extra columns,
    other types, values that do not fit, numbers that are NaN or infinite (missing is NULL), and for a NULL or repeated
    key.
    """
    missing = [name for name in table.columns if name not in frame.columns]
    extra = [name for name in frame.columns if name not in table.columns]
    if missing or extra:
        raise PartError(f"{table.name}: columns missing: {missing or 'none'}; columns not in the dictionary: {extra}")
    typed = frame.select([_typed(table, frame[name]) for name in table.columns])
    _check_key(table, typed)
    return typed


def _typed(table: schema.Table, values: pl.Series) -> pl.Series:
    expected = polars_type(schema.COLUMNS[values.name].type)
    if values.dtype != expected:
        if not _is_castable(values.dtype, expected):
            raise PartError(f"{table.name}.{values.name}: type {values.dtype}, expected {expected}")
        try:
            values = values.cast(expected, strict=True)
        except pl.exceptions.InvalidOperationError as problem:
            raise PartError(f"{table.name}.{values.name}: does not fit {expected}: {problem}") from None
    if values.dtype.is_float() and not values.is_finite().all():
        raise PartError(f"{table.name}.{values.name}: NaN or infinite values; a missing number is NULL")
    return values


def _is_castable(found: pl.DataType | DataTypeClass, expected: pl.DataType | DataTypeClass) -> bool:
    if isinstance(found, pl.List) and isinstance(expected, pl.List):
        return _is_castable(found.inner, expected.inner) or found.inner == expected.inner
    both_integer = found.is_integer() and expected.is_integer()
    return found == pl.Null or both_integer or (found.is_numeric() and expected.is_float())


def _check_key(table: schema.Table, frame: pl.DataFrame) -> None:
    if not table.key:
        return
    key = frame.select(table.key)
    empty = [name for name in table.key if key[name].null_count()]
    if empty:
        raise PartError(f"{table.name}: NULL in the key column {', '.join(empty)}")
    if key.is_duplicated().any():
        row = key.filter(key.is_duplicated()).row(0, named=True)
        raise PartError(f"{table.name}: {table.grain}, but two rows have {row}")


def write_part(lake: Path, table: str, key: str, frame: pl.DataFrame, *, fingerprint: str = "") -> Part:
    """Land rows of a lake table as one part; the same rows land under the same name again.

    `frame` has the columns of `schema.LAKE[table]`. `key` names the load: a recording, a delivery, a run. Where the
    table has a fingerprint column it must hold `fingerprint` in every row. Raises PartError; nothing is left then.
    """
    checked = checked_frame(_lake_table(table), frame)
    if "fingerprint" in checked.columns and not (checked["fingerprint"] == fingerprint).all():
        raise PartError(
            f"{table} {key}: rows carry {checked['fingerprint'].unique().to_list()}, expected {fingerprint!r}"
        )
    content = io.BytesIO()
    checked.rechunk().write_parquet(content, compression="zstd", row_group_size=_ROW_GROUP_ROWS)
    return _land(lake, Part(table, key, "", "", checked.height, 0, fingerprint), content.getbuffer())


def write_signal(lake: Path, recording_id: str, segment: int, block: int, samples: NDArray[np.int16]) -> Part:
    """Land one block of a segment's samples, shape (at most BLOCK_SAMPLES,), int16 counts.

    Stored are the steps between neighbours modulo 2**16, the first from 0, the sign in the lowest bit: a slow signal
    needs less than half the bytes that way, and the wrap makes it exact for every int16 value.
    """
    if samples.dtype != np.int16 or samples.ndim != 1 or not 0 < samples.size <= BLOCK_SAMPLES:
        raise PartError(
            f"signal {recording_id} segment {segment} block {block}: {samples.dtype} of shape {samples.shape}; "
            f"expected int16 of shape (1..{BLOCK_SAMPLES},)"
        )
    content = io.BytesIO()
    frame = pl.DataFrame({"step": _steps(samples)})
    frame.write_parquet(content, compression="zstd", compression_level=1, statistics=False)
    part = Part("signal", recording_id, "", "", samples.size, 0, "", segment, block)
    return _land(lake, part, content.getbuffer())


def _steps(samples: NDArray[np.int16]) -> NDArray[np.uint16]:
    steps = np.empty(samples.size, np.int16)
    steps[0] = samples[0]
    np.subtract(samples[1:], samples[:-1], out=steps[1:])
    for a in range(0, steps.size, _CACHED_SAMPLES):  # piece by piece, so that the passes stay in the cache
        piece = steps[a : a + _CACHED_SAMPLES]
        sign = piece >> 15
        np.left_shift(piece, 1, out=piece)
        np.bitwise_xor(piece, sign, out=piece)
    return steps.view(np.uint16)


def _samples(steps: pl.Series) -> NDArray[np.int16]:
    samples, end, last = np.empty(steps.len(), np.int16), 0, 0
    sums = np.empty(_CACHED_SAMPLES, np.int32)  # adding up is four times as fast in 32 bit, and the low 16 are the same
    for chunk in (chunk.to_numpy() for chunk in steps.get_chunks()):  # as Parquet was read: no copy
        for a in range(0, chunk.size, _CACHED_SAMPLES):
            step = chunk[a : a + _CACHED_SAMPLES]
            out, end = samples[end : end + step.size], end + step.size
            np.right_shift(step, 1, out=out.view(np.uint16))
            out ^= -(step & 1).view(np.int16)
            np.cumsum(out, out=sums[: out.size])
            sums[: out.size] += last
            out[:] = sums[: out.size]
            last = sums[out.size - 1]
    return samples


def _lake_table(name: str) -> schema.Table:
    if name not in schema.LAKE:
        raise PartError(f"unknown lake table {name!r}; known: {', '.join(schema.LAKE)}")
    return schema.LAKE[name]


def _land(lake: Path, part: Part, content: memoryview) -> Part:
    if not _KEY_PATTERN.fullmatch(part.key):
        raise PartError(f"{part.table}: key {part.key!r} is not safe in a path; expected {_KEY_PATTERN.pattern}")
    sha256 = hashlib.sha256(content).hexdigest()
    keyed_by_recording = schema.LAKE[part.table].key[:1] == ("recording_id",)
    folder = f"recording_id={part.key}" if keyed_by_recording else part.key
    path = f"{part.table}/{folder}/{sha256[:16]}.parquet"
    write_whole(lake / path, content)
    return part._replace(path=path, sha256=sha256, bytes=len(content))


def write_whole(path: Path, content: bytes | memoryview) -> None:
    """Write a file so that under its name there is never a half one: beside it, flushed to disk, renamed."""
    path.parent.mkdir(parents=True, exist_ok=True)
    descriptor, temporary = tempfile.mkstemp(prefix=_TEMP_PREFIX, dir=path.parent)
    try:
        with os.fdopen(descriptor, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        Path(temporary).chmod(0o644)
        Path(temporary).replace(path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise


def file_sha256(path: Path) -> str:
    """SHA-256 of a file's bytes, read piece by piece."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def read_part(lake: Path, part: Part, *, check_hash: bool = False) -> pl.DataFrame:
    """Rows of a part as landed, got from the lake's store where only that has it.

    Raises PartError for a missing file and, with `check_hash`, for a changed byte.
    """
    content = _content(lake, part, check_hash)
    return pl.read_parquet(content)


def scan_parts(lake: Path, table: schema.Table, paths: Iterable[str]) -> pl.LazyFrame:
    """Rows of many parts of a table, not read yet; `paths` are relative to the lake.

    Parts that landed under an older dictionary still fit: columns that came later are NULL, dropped ones are left out.
    """
    files, types = [lake / path for path in paths], frame_schema(table)
    if not files:
        return pl.LazyFrame(schema=types)
    rows = pl.scan_parquet(
        files, glob=False, hive_partitioning=False, schema=types, missing_columns="insert", extra_columns="ignore"
    )
    return rows.select(list(types))


def _content(lake: Path, part: Part, check_hash: bool) -> bytes:
    path = lake / part.path
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        from warehouse.cache import complete  # which lands what it gets through this module

        complete(lake, {part.path: part.sha256})
        if not path.is_file():
            raise PartError(f"{part.path} is missing in {lake}; restore the lake folder from a copy") from None
        content = path.read_bytes()
    if check_hash and hashlib.sha256(content).hexdigest() != part.sha256:
        raise PartError(f"{part.path} was changed after it landed: its SHA-256 is not {part.sha256[:16]}…")
    return content


class SignalReader:
    """Samples of one recording, read piece by piece from its signal parts.

    The blocks of a segment follow each other in the order of their number and may be of any length up to BLOCK_SAMPLES.
    The last decoded block is kept, and with `ahead`, for reading from begin to end, the last two: pieces overlap, and
    the overlap can lie across the end of a block. A thread unpacks the next block meanwhile then.
    """

    def __init__(self, lake: Path, parts: Iterable[Part], *, check_hash: bool = False, ahead: bool = False) -> None:
        self._lake = lake
        self._check_hash = check_hash
        self._blocks: dict[int, list[Part]] = {}
        for part in sorted((p for p in parts if p.table == "signal"), key=lambda part: (part.segment, part.block)):
            self._blocks.setdefault(part.segment or 0, []).append(part)
        self._ends = {segment: np.cumsum([p.rows for p in blocks]) for segment, blocks in self._blocks.items()}
        self._decoded: deque[tuple[Part, NDArray[np.int16]]] = deque(maxlen=2 if ahead else 1)
        self._helper = ThreadPoolExecutor(1) if ahead else None
        self._coming: dict[Part, Future[pl.Series]] = {}

    @property
    def segment_samples(self) -> dict[int, int]:
        """Number of samples of each segment."""
        return {segment: int(ends[-1]) for segment, ends in self._ends.items()}

    def read(self, segment: int, a: int, b: int) -> NDArray[np.int16]:
        """Samples a (included) to b (excluded) of a segment as int16 counts, shape (b - a,)."""
        length = self.segment_samples.get(segment, 0)
        if not 0 <= a <= b <= length:
            raise PartError(f"segment {segment} has {length} samples; samples {a} to {b} were asked")
        samples = np.empty(b - a, np.int16)
        at = a
        while at < b:
            number = int(np.searchsorted(self._ends[segment], at, side="right"))
            block = self._block(segment, number)
            offset = at - (int(self._ends[segment][number]) - block.size)
            piece = block[offset : offset + b - at]
            samples[at - a : at - a + piece.size] = piece
            at += piece.size
        if b == length:
            self._decoded.clear()  # read to its end: what comes next lies elsewhere
        return samples

    def _block(self, segment: int, number: int) -> NDArray[np.int16]:
        part, *following = self._blocks[segment][number : number + 2]
        for known, samples in self._decoded:
            if known == part:
                return samples
        steps = self._coming[part].result() if part in self._coming else self._steps(part)
        if self._helper:
            self._coming = {next_one: self._helper.submit(self._steps, next_one) for next_one in following}
        self._decoded.append((part, _samples(steps)))
        return self._decoded[-1][1]

    def _steps(self, part: Part) -> pl.Series:
        return pl.read_parquet(_content(self._lake, part, self._check_hash), columns=["step"]).to_series()
