"""How well the detector finds the beats of the invented programme, whose truth is known. No claim about people.

Run from the checkout: python -m tests.benchmarks.demo_accuracy
"""

from __future__ import annotations

import numpy as np

from detectors import synthetic
from detectors.analyse import analyse_recording
from detectors.annotations import beat_annotations
from detectors.results import Segment
from detectors.scoring import compare_beats, statistics
from detectors.scoring_runs import compare_runs, run_statistics
from detectors.synthetic import Rhythm
from flows import demo

FIGURES = ("qrs_se", "qrs_ppv", "veb_se", "veb_ppv", "sveb_se", "sveb_ppv")


def main() -> None:
    """Print one line per wear: EC57 figures in analysable time, true and found ventricular share, false runs."""
    print("wear      analysed", *(f"{name:>8}" for name in FIGURES), "  V% true   found  runs true  false  couplet +P")
    for number, patient in enumerate(demo.story()):
        for wear in patient.wears:
            print(f"{patient.code} {wear.day:02d}", _line(patient, wear, demo.seed_of(number, wear)))
    slurred = Rhythm(v_share_pct=9.0, v_family_weights=(0.0, 0.0, 0.0, 1.0), rate_bpm=86, run_share=0.0)
    print("slurred V", _line(demo.Patient("", "", ()), demo.Wear(0, 6, slurred), demo.SEED))


def _line(patient: demo.Patient, wear: demo.Wear, seed: int) -> str:
    windows = [window for _, window in demo.true_windows(wear, patient.fs_hz, seed)]
    length = len(windows[0].counts)
    analysis = analyse_recording(
        [Segment(length, lambda a, b, w=window: w.counts[a:b]) for window in windows],
        fs_hz=patient.fs_hz, mv_per_count=synthetic.MV_PER_COUNT, rails=(-32768, synthetic.RAIL_COUNT),
    )  # fmt: skip
    # one clock for all windows, with room between them so that no beat matches across
    step = length + patient.fs_hz
    beats, quality = analysis.beats, analysis.quality
    true = beat_annotations(
        np.concatenate([n * step + w.beats.sample for n, w in enumerate(windows)]),
        np.concatenate([w.beats.beat_class for w in windows]),
    )
    found = beat_annotations(beats.segment.astype(np.int64) * step + beats.sample, beats.beat_class)
    bad = np.stack(
        [quality.segment.astype(np.int64) * step + s for s in (quality.first_sample, quality.last_sample)], 1
    )
    options = {"fs_hz": patient.fs_hz, "n_samples": len(windows) * step, "learning_s": 0.0}
    ratios = statistics(compare_beats(true, found, left_out=bad, **options).matrix)
    good = beats.is_analysable
    runs = compare_runs(true, beat_annotations(found.sample[good], found.symbol[good]), ectopy="V", **options)
    v_found = 100 * np.mean(found.symbol[good] == "V")
    return (
        f"{100 * analysis.analysable_s * patient.fs_hz / (length * len(windows)):8.2f} "
        + " ".join(f"{ratios[name].pct:8.2f}" for name in FIGURES)
        + f" {100 * np.mean(true.symbol == 'V'):8.2f}{v_found:8.2f}"
        + f" {runs.by_reference_run[3:].sum():9d}{runs.by_test_run[:3, 3:].sum():7d}"
        + f"   {run_statistics(runs)['couplet_ppv'].pct:8.0f}"
    )


if __name__ == "__main__":
    main()
