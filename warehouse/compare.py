"""What moves when another detector version or other result settings are published: two builds side by side."""

from __future__ import annotations

from importlib import resources
from typing import NamedTuple

import polars as pl

from warehouse.build import TrendBuild
from warehouse.database import ArrowStream, open_database


class Comparison(NamedTuple):
    """Differences between two builds: per patient, and per verdict that changed."""

    patients: pl.DataFrame
    verdicts: pl.DataFrame


def compare(a: TrendBuild, b: TrendBuild) -> Comparison:
    """Compare two builds of the same lake and register; both must hold wear_days and changes.

    In the answer `_a` is the first build and `_b` the second; rows with the largest move come first.
    """
    connection = open_database(":memory:")
    for name, build in (("a", a), ("b", b)):
        connection.register(f"days_{name}", ArrowStream(build.frame("wear_days")))
        connection.register(f"changes_{name}", ArrowStream(build.frame("changes")))
    folder = resources.files("warehouse").joinpath("comparisons")
    frames = [
        pl.DataFrame(connection.sql(folder.joinpath(f"{name}.sql").read_text(encoding="utf-8")))
        for name in Comparison._fields
    ]
    connection.close()
    return Comparison(*frames)
