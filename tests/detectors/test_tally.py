import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from detectors.results import Analysis, Beats, Episodes, Families, QualityWindows
from detectors.tally import QUARTER_US, family_quarters, quarter_hours

FS_HZ = 250.0


def analysis(beat_times_s=(), classes="", bad=(), episodes=(), length_s=3600.0):
    """One segment with the given beats, bad windows (from, to, reason) and episodes (kind, from, to, beats, rate)."""
    sample = (np.asarray(beat_times_s, dtype=float) * FS_HZ).astype(np.int64)
    n = len(sample)
    analysable = np.ones(n, dtype=bool)
    for begin, end, _ in bad:
        analysable &= ~((sample >= begin * FS_HZ) & (sample < end * FS_HZ))
    rr = np.full(n, np.nan, dtype=np.float32)
    rr[1:] = np.diff(sample) * 1000 / FS_HZ
    blank = np.full(n, np.nan, dtype=np.float32)
    beats = Beats(
        segment=np.zeros(n, np.int16),
        sample=sample,
        rr_before_ms=rr,
        rr_after_ms=blank,
        beat_class=np.array(list(classes) or ["N"] * n, dtype="<U1"),
        class_probability=np.ones(n, np.float32),
        family=np.zeros(n, np.int16),
        qrs_width_ms=blank,
        amplitude_mv=blank,
        polarity=np.ones(n, np.int8),
        coupling_ms=blank,
        prematurity_pct=blank,
        pause_kind=np.zeros(n, np.int8),
        r_on_t_index=blank,
        is_escape=np.zeros(n, bool),
        is_analysable=analysable,
    )
    quality = QualityWindows(
        np.zeros(len(bad), np.int16),
        np.array([int(b * FS_HZ) for b, _, _ in bad], np.int64),
        np.array([int(e * FS_HZ) - 1 for _, e, _ in bad], np.int64),
        np.array([r for _, _, r in bad], dtype="<U8"),
    )
    found = Episodes(
        np.array([k for k, *_ in episodes], dtype="<U10"),
        np.zeros(len(episodes), np.int16),
        np.array([int(e[1] * FS_HZ) for e in episodes], np.int64),
        np.array([int(e[2] * FS_HZ) - 1 for e in episodes], np.int64),
        np.array([e[3] for e in episodes], np.int64),
        np.array([e[2] - e[1] for e in episodes], float),
        np.array([e[4] for e in episodes], np.float32),
    )
    none = np.zeros(0)
    families = Families(none, none, none, none, none, none, none, np.zeros((0, 90), np.float32))
    bad_s = sum(e - b for b, e, _ in bad)
    return Analysis(beats, families, found, quality, (), FS_HZ, (int(length_s * FS_HZ),), length_s - bad_s)


def start(us=0):
    return np.array([us], dtype=np.int64)


def test_burden_counts_only_analysable_beats():
    """Beats inside a bad window leave numerator and denominator together."""
    # Source: burden definition, ectopic beats over all beats in analysable time (common practice, no source)
    result = quarter_hours(analysis([1, 2, 3, 4], "NVVN", bad=[(2.5, 3.5, "noise")], length_s=10), start())
    assert (result.v_beats[0], result.all_beats[0]) == (1, 3)
    assert result.analysable_s[0] == 9.0
    assert result.worn_s[0] == 10.0


def test_lead_off_is_not_worn():
    """A lead-off window counts neither as worn nor as analysable, but as recorded."""
    result = quarter_hours(analysis(bad=[(100, 160, "lead_off")], length_s=900), start())
    assert (result.recorded_s[0], result.worn_s[0], result.analysable_s[0]) == (900.0, 840.0, 840.0)


def test_an_interval_across_a_bad_window_gives_no_rate():
    """An RR interval that spans a bad window does not enter the mean rate."""
    result = quarter_hours(analysis([1, 2, 6, 7], bad=[(3, 5, "noise")], length_s=10), start())
    assert (result.rr_count[0], result.rr_sum_s[0]) == (2, 2.0)


def test_bigeminy_is_split_where_the_quarter_ends():
    """Seconds of an episode go to the quarters they lie in; the episode counts where it begins."""
    episodes = [("bigeminy", 890, 930, 40, 70), ("run", 895, 905, 20, 130)]
    result = quarter_hours(analysis(episodes=episodes, length_s=1800), start())
    assert result.bigeminy_s.tolist() == [10.0, 30.0]
    assert result.runs.tolist() == [1, 0]
    assert result.longest_run_beats.tolist() == [20, 0]
    assert np.isnan(result.fastest_run_bpm[1])


@given(st.integers(0, 2 * QUARTER_US), st.floats(1.0, 5000.0))
def test_recorded_seconds_add_up_wherever_the_recording_starts(start_us, length_s):
    """Splitting at quarters loses no second, whatever the start."""
    result = quarter_hours(analysis(length_s=length_s), start(start_us))
    assert result.recorded_s.sum() == pytest.approx(int(length_s * FS_HZ) / FS_HZ, abs=1e-4)
    assert (result.recorded_s <= 900.0).all()
    assert (result.quarter_us % QUARTER_US == 0).all()


def test_family_beats_are_counted_by_quarter():
    """Each family's analysable beats are counted in the quarter they lie in; beats of no family count as -1."""
    found = analysis([100, 200, 950, 960, 970, 980], bad=[(965, 975, "noise")], length_s=1800)
    family = np.array([0, -1, 1, 0, 1, 0], np.int16)
    families = found.families._replace(beat_count=np.array([3, 2]))
    found = found._replace(beats=found.beats._replace(family=family), families=families)
    rows = family_quarters(found, start(QUARTER_US))
    quarters = (rows.quarter_us // QUARTER_US).tolist()
    assert list(zip(quarters, rows.family.tolist(), rows.beat_count.tolist(), strict=True)) == [
        (1, -1, 1), (1, 0, 1), (2, 0, 2), (2, 1, 1),
    ]  # fmt: skip
    by_class = np.stack([rows.n_beats, rows.s_beats, rows.v_beats, rows.f_beats, rows.q_beats])
    assert (by_class.sum(axis=0) == rows.beat_count).all()
    assert by_class.sum(axis=1).tolist() == [
        np.count_nonzero(found.beats.is_analysable & (found.beats.beat_class == name)) for name in "NSVFQ"
    ]
    assert rows.beat_count.sum() == quarter_hours(found, start(QUARTER_US)).all_beats.sum()
