"""Decisions of over-readers: the file that the over-read sheet saves, checked as a whole and landed as rows.

`dashboards/assets/decisions.schema.json` says what a file may hold. Families and their parts are turned into their beats
here, while the analysis that the reader saw is still in force, so that the decisions outlive it.
"""

from __future__ import annotations

import json
from datetime import UTC, datetime
from importlib import resources
from pathlib import Path
from typing import Any

import jsonschema
import polars as pl

from flows.arrivals.deliveries import Loads
from flows.arrivals.landing import typed_frame
from flows.readers.codes import Refused
from warehouse.ledger import Ledger
from warehouse.parts import Part, read_part, write_part

KIND = "burdenline-decisions"
VERSIONS = (1, 2)
FORMAT = "over-read decisions"
LARGEST_BYTES = 20_000_000
NEAR = "150ms"  # as decisions meet beats


def is_decisions(head: bytes) -> bool:
    """Whether the first bytes are those of a decisions file."""
    return head.lstrip().startswith(b"{") and f'"{KIND}"'.encode() in head


def land(lake: Path, ledger: Ledger, path: Path, delivery_id: str) -> tuple[str, Loads]:
    """Return the recording that a decisions file is about, and the loads that make its decisions count.

    Raises Refused when the file is not as described, of another version, or does not fit the analysis in force; nothing
    of it counts then.
    """
    content = read(path)
    beats = _beats_in_force(lake, ledger, content)
    loads: Loads = {}
    earlier = _earlier_reviews(lake, ledger, content)
    for table, rows in (("decisions", decisions(content, beats)), ("reviews", reviews(content, beats, earlier))):
        frame = rows.with_columns(delivery_id=pl.lit(delivery_id))
        typed = typed_frame(table, frame.rows(named=True))
        loads[table, delivery_id] = [write_part(lake, table, delivery_id, typed)] if typed.height else []
    return content["recording_id"], loads


def read(path: Path) -> dict[str, Any]:
    """Return a decisions file as it is described; raises Refused."""
    if path.stat().st_size > LARGEST_BYTES:
        raise Refused("decisions_unreadable", f"the decisions file has more than {LARGEST_BYTES // 10**6} MB.")
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except ValueError as problem:
        raise Refused("decisions_unreadable", f"the decisions file is no JSON: {problem}. Save it again.") from None
    if isinstance(content, dict) and content.get("version") not in VERSIONS:
        raise Refused(
            "decisions_of_other_version",
            f"the decisions file has version {str(content.get('version'))[:20]}, expected 1 or 2. "
            "Update burdenline, or save the decisions again from a page of this programme.",
        )
    try:
        jsonschema.validate(content, _schema(), format_checker=jsonschema.FormatChecker())
    except jsonschema.ValidationError as problem:
        where = "/".join(str(step) for step in problem.absolute_path) or "the file itself"
        raise Refused(
            "decisions_unreadable",
            f"the decisions file is not as the over-read sheet saves it, at {where}. Save it again.",
        ) from None
    return content


def _schema() -> dict[str, Any]:
    text = resources.files("dashboards").joinpath("assets/decisions.schema.json").read_text(encoding="utf-8")
    return json.loads(text)


def _beats_in_force(lake: Path, ledger: Ledger, content: dict[str, Any]) -> pl.DataFrame:
    """Beats of the analysis that the reader saw, refused when it is not there any more or never was."""
    parts = [part for part in ledger.parts("beats", content["recording_id"]) if part.fingerprint]
    if not parts:
        raise Refused(
            "decisions_do_not_fit",
            "the decisions are about a recording that was not analysed here. Put the file into its own programme.",
        )
    seen = [part for part in parts if part.fingerprint == content["fingerprint"]]
    if not seen:
        raise Refused(
            "decisions_do_not_fit",
            f"the decisions on {content['recording_id']} were taken on another analysis than the one in force. "
            "Open its over-read sheet again and decide there.",
        )
    return _fitting(content, _read(lake, seen))


def _read(lake: Path, parts: list[Part]) -> pl.DataFrame:
    wanted = ("segment", "sample", "beat_utc", "beat_class", "family")
    return pl.concat([read_part(lake, part).select(wanted) for part in parts])


def _fitting(content: dict[str, Any], beats: pl.DataFrame) -> pl.DataFrame:
    """Refuse decisions that name families, beats or begins of episodes which the analysis does not have."""
    named = {row["family"] for row in content["families"]}
    unknown = named - set(beats["family"])
    single, begins = _single(content), _begins(content)
    lost, beginless = (places.join(beats, on=("segment", "sample"), how="anti").height for places in (single, begins))
    twice = len(content["families"]) - len(named)
    twice += sum(places.height - places.unique().height for places in (single, begins))
    twice += len(_parts(content)) - _part_frame(content).select("family", "beat_class").n_unique()
    if unknown or lost or beginless or twice:
        raise Refused(
            "decisions_do_not_fit",
            f"the decisions on {content['recording_id']} name {len(unknown)} families, {lost} beats and {beginless} "
            f"runs or pauses that its analysis does not have, and {twice} twice; expected those of its over-read sheet. "
            "Save them again.",
        )
    return beats


def _earlier_reviews(lake: Path, ledger: Ledger, content: dict[str, Any]) -> pl.Series:
    """Instants of the beats on which the reader decided in files before; asked only where a family is withdrawn."""
    found = pl.Series(dtype=pl.Datetime("us"))
    if any(row["decision"] == "withdraw" for row in content["families"]):
        for part in ledger.parts("reviews"):
            rows = read_part(lake, part)
            same = (pl.col("recording_id") == content["recording_id"]) & (
                pl.col("reader_code") == content["reader_code"]
            )
            found = found.append(rows.filter(same)["beat_utc"])
    return found.unique().sort()


_PLACE = {"segment": pl.Int16, "sample": pl.Int64}


def _single(content: dict[str, Any]) -> pl.DataFrame:
    rows = [(row["segment"], row["sample"]) for row in content["beats"]]
    return pl.DataFrame(rows, schema=_PLACE, orient="row")


def _begins(content: dict[str, Any]) -> pl.DataFrame:
    """Where the episodes of the file begin: each at one of its beats, by the automatic and by the decided classes."""
    rows = [(row["segment"], row["first_sample"], row["episode_kind"]) for row in content["episodes"]]
    return pl.DataFrame(rows, schema={**_PLACE, "episode_kind": pl.String}, orient="row")


def decisions(content: dict[str, Any], beats: pl.DataFrame) -> pl.DataFrame:
    """Return one row per decision of a file, in the order of the file: families, their parts, beats, episodes, note.

    An episode gets the instant at which it begins, so that it is met again when segments are numbered anew; a beat gets
    its family.
    """
    rows = [
        {"decision_subject": "family", "automatic_class": row["automatic"], "same_as_family": row["same_as"]}
        | {name: row[name] for name in ("family", "beat_count", "decision", "is_mixed")}
        for row in content["families"]
    ]
    rows += [
        {"decision_subject": "part", "family": family, "automatic_class": part["automatic"]}
        | {name: part[name] for name in ("beat_count", "decision")}
        for family, part in _parts(content)
    ]
    rows += [
        {"decision_subject": "beat", "automatic_class": row["automatic"], "beat_count": 1}
        | {name: row[name] for name in ("segment", "sample", "decision")}
        for row in content["beats"]
    ]
    rows += [
        {"decision_subject": "episode", "sample": row["first_sample"]}
        | {name: row[name] for name in ("episode_kind", "segment", "decision")}
        for row in content["episodes"]
    ]
    if content["note"]:
        rows.append({"decision_subject": "note", "note": content["note"]})
    numbered = [row | {"decision_order": order} | _who(content) for order, row in enumerate(rows)]
    instants = (
        _begins(content).join(beats, on=("segment", "sample")).select(*_PLACE, "episode_kind", start_utc="beat_utc")
    )
    of_beats = _single(content).join(beats, on=("segment", "sample")).select(*_PLACE, of_beat="family")
    frame = typed_frame("decisions", numbered).drop("delivery_id", "start_utc")
    located = frame.join(instants, on=(*_PLACE, "episode_kind"), how="left", maintain_order="left")
    is_beat = pl.when(decision_subject="beat")
    return (
        located.join(of_beats, on=tuple(_PLACE), how="left", maintain_order="left")
        .with_columns(family=is_beat.then("of_beat").otherwise("family"))
        .drop("of_beat")
    )


def reviews(content: dict[str, Any], beats: pl.DataFrame, earlier_utc: pl.Series) -> pl.DataFrame:
    """Return one row per beat that a file decides; a single beat's decision goes before its part's or family's.

    Accepted normal beats are left out: they are most of a recording and change nothing. A withdrawn family gives a row for
    each of its beats near one of `earlier_utc`, the sorted instants on which the reader decided before.
    """
    families = pl.DataFrame(
        list(_of_families(content).items()),
        schema={"family": beats.schema["family"], "of_family": pl.String},
        orient="row",
    )
    by_beat = _single(content).with_columns(
        of_beat=pl.Series([row["decision"] for row in content["beats"]], dtype=pl.String)
    )
    said_before = earlier_utc.to_frame("beat_utc").with_columns(is_said=pl.lit(True))
    decided = (
        beats.join(families, on="family", how="left")
        .join(_part_frame(content), on=("family", "beat_class"), how="left")
        .join(by_beat, on=("segment", "sample"), how="left")
        .with_columns(decision=pl.coalesce("of_beat", "of_part", "of_family"))
        .drop_nulls("decision")
        .with_columns(decision=pl.when(decision="accept").then("beat_class").otherwise("decision"))
        .filter((pl.col("beat_class") != "N") | (pl.col("decision") != "N"))
        .sort("beat_utc")
        .join_asof(said_before, on="beat_utc", strategy="nearest", tolerance=NEAR)
        .filter((pl.col("decision") != "withdraw") | pl.col("of_beat").is_not_null() | pl.col("is_said"))
        .sort("segment", "sample")
    )
    who = {name: pl.lit(value) for name, value in _who(content).items()}
    return decided.select("segment", "sample", "beat_utc", "decision", automatic_class="beat_class").with_columns(**who)


def _parts(content: dict[str, Any]) -> list[tuple[int, dict[str, Any]]]:
    """Decided parts of the families that are split, each with the number of its family."""
    return [(row["family"], part) for row in content["families"] if row["is_mixed"] for part in row.get("parts", ())]


def _part_frame(content: dict[str, Any]) -> pl.DataFrame:
    rows = [(family, part["automatic"], part["decision"]) for family, part in _parts(content)]
    schema = {"family": pl.Int16, "beat_class": pl.String, "of_part": pl.String}
    return pl.DataFrame(rows, schema=schema, orient="row")


def _of_families(content: dict[str, Any]) -> dict[int, str]:
    """Return what is decided of each family that has a decision, its own or that of the family it looks like.

    A family that is split has none: no single class would be right for its beats.
    """
    rows = {row["family"]: row for row in content["families"] if not row["is_mixed"]}
    decided = {family: row["decision"] for family, row in rows.items() if row["decision"]}
    for family, row in rows.items():
        alike = rows.get(row["same_as"])
        if not row["decision"] and alike and alike["decision"]:
            decided[family] = alike["automatic"] if alike["decision"] == "accept" else alike["decision"]
    return decided


def _who(content: dict[str, Any]) -> dict[str, Any]:
    instant = datetime.fromisoformat(content["reviewed_utc"]).astimezone(UTC).replace(tzinfo=None)
    return {
        "recording_id": content["recording_id"],
        "read_fingerprint": content["fingerprint"],
        "reader_code": content["reader_code"],
        "reviewed_utc": instant,
    }
