"""What a scoring says: the figures as plain values, as text, and as one HTML page."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors.annotations import CLASSES
from detectors.scoring import REFERENCE_ROWS, TEST_COLUMNS, BeatScore, Ratio, average, gross, statistics
from detectors.scoring_runs import RunScore, run_statistics
from warehouse.cautions import LABELS, PURPOSE

FIGURES = ("qrs_se", "qrs_ppv", "veb_se", "veb_ppv", "sveb_se", "sveb_ppv")
PROBABILITY_EDGES = (0.0, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.98, 1.0)
CAUTIONS = (
    PURPOSE,
    LABELS,
    "These figures hold for the records scored here and the detector version named; they are no claim about others.",
)


class Options(NamedTuple):
    """How the scoring was done."""

    escape_as: str
    learning_s: float
    channel: int
    detector_version: str


class Judged(NamedTuple):
    """Scored beats of the detector. All arrays have shape (n_beats,)."""

    probability: NDArray[np.float64]  # as stated by the detector
    is_right: NDArray[np.bool_]  # the expert gives the same class
    beat_class: NDArray[np.int64]  # index into CLASSES


@dataclass(frozen=True)
class RecordScore:
    """Outcome of one record."""

    record: str
    lead: str
    has_af: bool
    beats: BeatScore
    beats_analysable: BeatScore
    halves: tuple[BeatScore, ...]  # first and second half in analysable time, learning included
    runs: Mapping[str, RunScore]
    found_v_burden_pct: float
    true_v_burden_pct: float
    analysable_share_pct: float
    judged: Judged
    findings: tuple[str, ...]

    @property
    def v_burden_error_pct_points(self) -> float:
        """V share of the detector's analysable beats minus V share of all the expert's beats.

        Detections within marked ventricular flutter or fibrillation, where experts label no beats, are left out.
        """
        return self.found_v_burden_pct - self.true_v_burden_pct


class NoiseScore(NamedTuple):
    """Outcome of the records with one noise added at one signal-to-noise ratio."""

    noise: str
    snr_db: int
    records: tuple[RecordScore, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain values: gross figures in analysable time and over all time, and the share that was analysable."""
        share = np.mean([record.analysable_share_pct for record in self.records])
        return {
            "noise": self.noise,
            "snr_db": self.snr_db,
            "records": [record.record for record in self.records],
            "analysable_share_pct": _rounded(float(share)),
            "gross": _percentages(gross([record.beats.matrix for record in self.records])),
            "gross_analysable": _percentages(gross([record.beats_analysable.matrix for record in self.records])),
        }


@dataclass(frozen=True)
class Report:
    """Outcome of all records of a folder."""

    options: Options
    records: tuple[RecordScore, ...]
    left_out: tuple[tuple[str, str], ...]
    noise: tuple[NoiseScore, ...] = ()

    def as_dict(self) -> dict[str, Any]:
        """Plain values for --json: percentages rounded to 0.001, None where nothing is there to divide by."""
        matrices = [record.beats.matrix for record in self.records]
        without_af = [record.beats.matrix for record in self.records if not record.has_af]
        return {
            "options": self.options._asdict(),
            "gross": _percentages(gross(matrices)),
            "average": _percentages(average(matrices)),
            "gross_analysable": _percentages(gross([record.beats_analysable.matrix for record in self.records])),
            "gross_without_af": _percentages(gross(without_af)) if without_af else None,
            "records": [_record(record) for record in self.records],
            "runs": {ectopy: self._runs(ectopy) for ectopy in "VS"},
            "v_burden_error": _spread([record.v_burden_error_pct_points for record in self.records]),
            "analysable_share": _shares([record.analysable_share_pct for record in self.records]),
            "matrix": _matrix(np.sum(matrices, axis=0)),
            "reliability": {name: self._reliability(name) for name in ("all", *CLASSES)},
            "noise": [score.as_dict() for score in self.noise],
            "left_out": [{"record": record, "reason": reason} for record, reason in self.left_out],
            "cautions": list(CAUTIONS),
        }

    def _runs(self, ectopy: str) -> dict[str, Any]:
        both = RunScore(
            *(np.sum(tables, axis=0) for tables in zip(*(r.runs[ectopy] for r in self.records), strict=True))
        )
        figures: dict[str, Any] = {}
        for name, ratio in run_statistics(both).items():
            figures |= {f"{name}_pct": _rounded(ratio.pct), f"{name}_part": ratio.part, f"{name}_whole": ratio.whole}
        return figures

    def _reliability(self, name: str) -> list[dict[str, Any]]:
        """Per range of stated probability: how many beats, mean stated probability, share that was right."""
        columns = zip(*(record.judged for record in self.records), strict=True)
        judged = Judged(*(np.concatenate(column) for column in columns))
        chosen = np.ones(judged.is_right.shape, bool) if name == "all" else judged.beat_class == CLASSES.index(name)
        step = np.clip(
            np.searchsorted(PROBABILITY_EDGES, judged.probability, side="right") - 1, 0, len(PROBABILITY_EDGES) - 2
        )
        rows = []
        for number, (low, high) in enumerate(pairwise(PROBABILITY_EDGES)):
            here = chosen & (step == number)
            if here.any():
                rows.append({
                    "from": low, "to": high, "beats": int(here.sum()),
                    "stated_pct": _rounded(100 * float(judged.probability[here].mean())),
                    "right_pct": _rounded(100 * float(judged.is_right[here].mean())),
                })  # fmt: skip
        return rows

    def as_text(self) -> str:
        """Tables for a terminal."""
        return _text(self.as_dict())


def _percentages(figures: Mapping[str, float]) -> dict[str, float | None]:
    return {f"{name}_pct": _rounded(figures[name]) for name in FIGURES}


def _rounded(value: float) -> float | None:
    return round(value, 3) if math.isfinite(value) else None


def _record(score: RecordScore) -> dict[str, Any]:
    ratios: dict[str, Ratio] = statistics(score.beats.matrix)
    return {
        "record": score.record,
        "lead": score.lead,
        "beats": ratios["qrs_se"].whole,
        "v_beats": ratios["veb_se"].whole,
        "s_beats": ratios["sveb_se"].whole,
        **{f"{name}_pct": _rounded(ratios[name].pct) for name in FIGURES},
        "v_burden_found_pct": _rounded(score.found_v_burden_pct),
        "v_burden_expert_pct": _rounded(score.true_v_burden_pct),
        "v_burden_error_pct_points": _rounded(score.v_burden_error_pct_points),
        "analysable_share_pct": _rounded(score.analysable_share_pct),
        "rms_rr_error_ms": _rounded(score.beats.rms_rr_error_ms),
        "has_af": score.has_af,
        "findings": list(score.findings),
    }


def _spread(errors: Sequence[float]) -> dict[str, float | None]:
    """Median, 90th percentile and maximum of the absolute errors, and their signed mean."""
    known = np.array([error for error in errors if math.isfinite(error)])
    if not len(known):
        return dict.fromkeys(("median_abs", "p90_abs", "max_abs", "mean"))
    size = np.abs(known)
    return {
        "median_abs": _rounded(float(np.median(size))),
        "p90_abs": _rounded(float(np.quantile(size, 0.9))),
        "max_abs": _rounded(float(size.max())),
        "mean": _rounded(float(known.mean())),
    }


def _shares(shares_pct: Sequence[float]) -> dict[str, float | None]:
    """What the noise gate leaves: a gate that takes real arrhythmia away shows here."""
    return {"mean_pct": _rounded(float(np.mean(shares_pct))), "least_pct": _rounded(min(shares_pct))}


def _matrix(matrix: NDArray[np.int64]) -> dict[str, dict[str, int]]:
    return {
        row: dict(zip(TEST_COLUMNS, counts, strict=True))
        for row, counts in zip(REFERENCE_ROWS, matrix.tolist(), strict=True)
    }


def _text(report: Mapping[str, Any]) -> str:
    options = report["options"]
    parts = [
        f"{len(report['records'])} records, channel {options['channel']}, detector {options['detector_version']}; "
        f"the first {options['learning_s']:g} s of each are not scored; supraventricular escape beats are "
        f"{options['escape_as']} in the labels",
        _table(("%", *_HEADINGS), [_summary(report[key], title) for key, title in SUMMARIES.items() if report[key]]),
        "V burden error, points: " + ", ".join(f"{k} {_shown(v)}" for k, v in report["v_burden_error"].items()),
        "(V share of the detector's analysable beats, without those in marked ventricular flutter or fibrillation, "
        "minus V share of all the expert's beats)",
        "Analysable share of the records, %: "
        + ", ".join(f"{k.removesuffix('_pct')} {_shown(v)}" for k, v in report["analysable_share"].items()),
        _table(_RECORD_HEADINGS, [_record_row(row) for row in report["records"]]),
        _table(_RUN_HEADINGS, [_run_row(ectopy, runs) for ectopy, runs in report["runs"].items()]),
        _table(
            ("expert \\ detector", *TEST_COLUMNS), [(row, *cells.values()) for row, cells in report["matrix"].items()]
        ),
        _table(_RELIABILITY_HEADINGS, [_reliability_row(row) for row in report["reliability"]["all"]]),
        *([_table(_NOISE_HEADINGS, [_noise_row(row) for row in report["noise"]])] if report["noise"] else []),
        *(f"left out: {row['record']}: {row['reason']}" for row in report["left_out"]),
        *report["cautions"],
    ]
    return "\n\n".join(parts)


_HEADINGS = ("QRS Se", "+P", "V Se", "+P", "S Se", "+P")
_RUN_FIGURES = ("couplet_se", "couplet_ppv", "short_run_se", "short_run_ppv", "long_run_se", "long_run_ppv")
_RECORD_HEADINGS = ("record", "lead", "beats", "V", "S", *_HEADINGS, "V% found", "expert", "error", "analysed %")
_RUN_HEADINGS = ("runs", "couplet Se", "+P", "3-5 Se", "+P", ">5 Se", "+P")
_RELIABILITY_HEADINGS = ("stated probability", "beats", "stated %", "right %")
_NOISE_HEADINGS = ("noise, analysable time", "dB", "analysed %", *_HEADINGS)
SUMMARIES = {
    "gross": "gross",
    "average": "average",
    "gross_analysable": "gross, analysable time only",
    "gross_without_af": "gross, records without atrial fibrillation",
}


def _summary(figures: Mapping[str, Any], title: str) -> list[str]:
    return [title, *(_shown(figures[f"{name}_pct"]) for name in FIGURES)]


def _record_row(row: Mapping[str, Any]) -> list[Any]:
    figures = [_shown(row[f"{name}_pct"]) for name in FIGURES]
    burden = [_shown(row[f"v_burden_{name}"]) for name in ("found_pct", "expert_pct", "error_pct_points")]
    counts = [row[name] for name in ("beats", "v_beats", "s_beats")]
    return [row["record"], row["lead"], *counts, *figures, *burden, _shown(row["analysable_share_pct"])]


def _run_row(ectopy: str, runs: Mapping[str, Any]) -> list[str]:
    return [ectopy, *(_shown(runs[f"{name}_pct"]) for name in _RUN_FIGURES)]


def _reliability_row(row: Mapping[str, Any]) -> list[Any]:
    return [f"{row['from']:g} to {row['to']:g}", row["beats"], _shown(row["stated_pct"]), _shown(row["right_pct"])]


def _noise_row(row: Mapping[str, Any]) -> list[Any]:
    figures = [_shown(row["gross_analysable"][f"{name}_pct"]) for name in FIGURES]
    return [row["noise"], row["snr_db"], _shown(row["analysable_share_pct"]), *figures]


def _shown(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"


def _table(headings: Sequence[str], rows: Sequence[Sequence[Any]]) -> str:
    """Columns as wide as their widest cell, the first to the left, numbers to the right."""
    cells = [list(headings), *[[str(cell) for cell in row] for row in rows]]
    widths = [max(len(row[n]) for row in cells) for n in range(len(headings))]
    return "\n".join(
        "  ".join(
            cell.rjust(width) if n else cell.ljust(width)
            for n, (cell, width) in enumerate(zip(row, widths, strict=True))
        )
        for row in cells
    )


def write_page(report: Report, path: Path) -> None:
    """Write the report as one HTML page that needs no other file."""
    from dashboards.score_page import render

    path.write_text(render(report.as_dict()), encoding="utf-8")
