"""What follows from beats whose classes somebody decided."""

import numpy as np

from detectors.analyse import Options, analyse_signal
from detectors.relabel import relabelled
from detectors.synthetic import Noise, Rhythm, recording

FS_HZ = 125


def found():
    (hour,) = recording(Rhythm(v_share_pct=12.0), Noise(), fs_hz=FS_HZ, hours=0.25, seed=5)
    return analyse_signal(hour.counts * 0.005, fs_hz=FS_HZ)


def test_nothing_decided_changes_nothing():
    """With every class kept the analysis is the same to the last bit."""
    analysis = found()
    again = relabelled(analysis, analysis.beats.beat_class, np.ones(analysis.beats.sample.size, bool), Options())
    for part in ("beats", "episodes"):
        for name, values in getattr(again, part)._asdict().items():
            equal_nan = values.dtype.kind == "f"
            assert np.array_equal(values, getattr(getattr(analysis, part), name), equal_nan=equal_nan), name


def test_a_beat_that_is_none_leaves_and_joins_its_intervals():
    """The interval over it is the sum of its two, and every other interval stays."""
    analysis = found()
    is_beat = np.ones(analysis.beats.sample.size, bool)
    is_beat[[0, 10, 11, -1]] = False
    kept = relabelled(analysis, analysis.beats.beat_class, is_beat, Options()).beats
    before = analysis.beats.rr_before_ms
    assert np.isnan(kept.rr_before_ms[0]) == np.isnan(before[0])
    assert np.isclose(kept.rr_before_ms[9], before[10:13].sum(), rtol=1e-6)
    assert np.array_equal(kept.rr_before_ms[10:], before[13:-1])
    assert np.array_equal(kept.rr_after_ms[:-1], kept.rr_before_ms[1:], equal_nan=True)


def test_episodes_follow_the_decided_classes():
    """With no ventricular beat left there is no couplet, run or bigeminy."""
    analysis = found()
    assert "couplet" in analysis.episodes.episode_kind
    everything_normal = np.full(analysis.beats.sample.size, "N")
    kinds = relabelled(analysis, everything_normal, everything_normal == "N", Options()).episodes.episode_kind
    assert not np.isin(kinds, ["couplet", "run", "bigeminy", "trigeminy"]).any()


def test_a_recording_without_any_beat_left_has_no_episode():
    """Everything called noise leaves an analysis without beats."""
    analysis = found()
    nothing = relabelled(analysis, analysis.beats.beat_class, np.zeros(analysis.beats.sample.size, bool), Options())
    assert nothing.beats.sample.size == nothing.episodes.segment.size == 0
