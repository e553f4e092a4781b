"""Parquet files with an ECG column and, mostly, a time column.

Source: Apache Parquet format, read by polars. Times with a zone are instants; times without one are the device's clock.
A NULL or NaN value is a missing sample.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

import polars as pl

from flows.readers.codes import Refused
from flows.readers.columns import TIME, VALUE, Layout, layout_of, opened_from, unclear
from flows.readers.recording import Opened, Site

NAME = "Parquet"
_MARK = b"PAR1"


def identify(head: bytes) -> bool:
    """The file begins with its format's mark."""
    return head.startswith(_MARK)


def open_delivery(files: Sequence[Path], site: Site) -> Opened:
    """Describe the ECG column of one file; raises Refused."""
    try:
        return _opened(pl.scan_parquet(files[0], glob=False), site)
    except (pl.exceptions.PolarsError, OSError) as problem:
        raise Refused(
            "header_cut_short", "the Parquet file is cut or damaged; expected its closing index. Deliver it again."
        ) from problem


def _opened(rows: pl.LazyFrame, site: Site) -> Opened:
    types = rows.collect_schema()
    names = [name for name, kind in types.items() if kind.is_numeric() or kind == pl.Datetime]
    if not names:
        raise Refused("no_ecg_channel", "columns: none holds numbers; expected an ECG column.")
    layout = layout_of(names, True, site)
    if not types[names[layout.value]].is_numeric():
        raise Refused("no_ecg_channel", "columns: the ECG column holds no numbers; expected millivolts or counts.")
    zone = None
    if layout.time is not None:
        kind = types[names[layout.time]]
        if isinstance(kind, pl.Datetime):
            layout = layout._replace(ns_per_time=None)
            zone = "UTC" if kind.time_zone else None
        elif layout.ns_per_time is None:
            raise unclear("the time column is a number without a unit", "time_format = seconds")
    return opened_from(_batches(rows, names, layout), layout, site, format_name=NAME, zone=zone)


def _batches(rows: pl.LazyFrame, names: list[str], layout: Layout) -> Iterator[pl.DataFrame]:
    columns = [pl.col(names[layout.value]).cast(pl.Float64).alias(VALUE)]
    if layout.time is not None:
        time = pl.col(names[layout.time])
        if layout.ns_per_time is None:
            nanoseconds = time.dt.epoch("ns")
        else:
            nanoseconds = (time.cast(pl.Float64) * layout.ns_per_time).round().cast(pl.Int64)
        columns.append(nanoseconds.alias(TIME))
    for batch in rows.select(columns).collect_batches(maintain_order=True):
        if TIME in batch.columns and batch[TIME].null_count():
            raise Refused("no_time_in_record", "columns: some rows have no time; expected one in every row.")
        yield batch
