"""The one entry: properties that must hold on any signal, and the outputs of known rhythms."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as npst

from detectors import analyse_recording, analyse_signal, synthetic, synthetic_beats
from detectors.results import Analysis, Segment

FS_HZ = 250
NORMAL = [("N", 0.8)]
MIXED = (NORMAL * 12 + [("V", 0.5), ("N", 1.1)]) * 8 + (NORMAL * 9 + [("S", 0.6), ("N", 0.8)]) * 6
NOISY_MV = 0.005


def signal_mv(rhythm: list[tuple[str, float]] = MIXED, fs_hz: int = FS_HZ) -> np.ndarray:
    beats = synthetic_beats.exact_beats(rhythm, fs_hz=fs_hz)
    n_samples = int(beats.sample[-1]) + 2 * fs_hz
    clean = synthetic.draw(beats, n_samples=n_samples, fs_hz=fs_hz)
    return clean + NOISY_MV * np.random.default_rng(7).standard_normal(n_samples)


def as_segment(counts: np.ndarray) -> Segment:
    return Segment(counts.size, lambda begin, end: counts[begin:end])


def counts_of(rhythm: list[tuple[str, float]] = MIXED) -> np.ndarray:
    return np.rint(signal_mv(rhythm) / 0.005).astype(np.int16)


def analysed(*counts: np.ndarray, fs_hz: float = FS_HZ, **options: object) -> Analysis:
    return analyse_recording([as_segment(c) for c in counts], fs_hz=fs_hz, mv_per_count=0.005, **options)


def assert_same(one: Analysis, other: Analysis) -> None:
    for table in ("beats", "families", "episodes", "quality"):
        for column, left, right in zip(
            getattr(one, table)._fields, getattr(one, table), getattr(other, table), strict=True
        ):
            np.testing.assert_array_equal(left, right, err_msg=f"{table}.{column}")
    assert one.findings == other.findings and one.analysable_s == other.analysable_s


@pytest.mark.parametrize("fs_hz", [50, 99.9, 4001, float("nan"), "250"])
def test_refuses_a_rate_it_is_not_defined_for(fs_hz: float) -> None:
    """A rate that is no number from 100 to 4000 Hz is refused with argument, value and what was expected."""
    with pytest.raises(ValueError, match=r"fs_hz is .*; expected samples per second from 100 to 4000 Hz"):
        analyse_signal(np.zeros(1000), fs_hz=fs_hz)


def test_refuses_what_is_not_one_lead() -> None:
    """Two leads or text are refused with the shape or the type that was found."""
    with pytest.raises(ValueError, match=r"ecg_mv has shape \(2, 100\); expected one lead"):
        analyse_signal(np.zeros((2, 100)), fs_hz=250)
    with pytest.raises(ValueError, match=r"ecg_mv has dtype .*; expected numbers in mV"):
        analyse_signal(np.array(["a"]), fs_hz=250)


@pytest.mark.parametrize("mv_per_count", [0.0, float("nan"), float("inf")])
def test_refuses_a_scale_without_meaning(mv_per_count: float) -> None:
    """Millivolts per count that are zero or not finite are refused."""
    with pytest.raises(ValueError, match="mv_per_count is"):
        analyse_recording([], fs_hz=250, mv_per_count=mv_per_count)


@pytest.mark.parametrize("n_samples", [0, 1, 3, 250, 5000])
@pytest.mark.parametrize("value", [0.0, 3.0, float("nan")])
def test_says_when_nothing_is_analysable(n_samples: int, value: float) -> None:
    """A constant or missing signal of any length yields no beats, no analysable time and the finding that says so."""
    analysis = analyse_signal(np.full(n_samples, value), fs_hz=250)
    assert analysis.beats.sample.size == 0 and analysis.analysable_s == 0
    assert [finding.code for finding in analysis.findings] == ["no_analysable_time"]


def test_finds_every_beat_and_class_of_a_clean_rhythm() -> None:
    """On a clean rhythm with ventricular and supraventricular beats every beat is found with its class."""
    truth = synthetic_beats.exact_beats(MIXED, fs_hz=FS_HZ)
    beats = analyse_signal(signal_mv(), fs_hz=FS_HZ).beats
    assert np.abs(beats.sample - truth.sample).max() <= 2
    assert beats.beat_class.tolist() == truth.beat_class.tolist()


def test_all_columns_have_the_promised_types() -> None:
    """Every column has the type that the results module names and nothing is NaN that may not be."""
    beats = analysed(counts_of()).beats
    assert beats.segment.dtype == np.int16 and beats.sample.dtype == np.int64 and beats.family.dtype == np.int16
    assert beats.beat_class.dtype == np.dtype("<U1") and beats.polarity.dtype == np.int8
    for name in ("class_probability", "qrs_width_ms", "amplitude_mv"):
        column = getattr(beats, name)
        assert column.dtype == np.float32 and np.isfinite(column).all()
    assert np.isnan(beats.rr_before_ms[0]) and np.isnan(beats.rr_after_ms[-1])
    assert ((beats.class_probability > 0) & (beats.class_probability <= 1)).all()


@settings(max_examples=12, deadline=None)
@given(chunk_s=st.floats(10, 400))
def test_answer_does_not_depend_on_where_chunks_are_cut(chunk_s: float) -> None:
    """Any chunk length gives the same answer to the last bit, also around missing samples."""
    counts = np.concatenate([counts_of(), counts_of()])
    counts[9_000:12_345] = -32768
    whole = analysed(counts, missing_count=-32768)
    assert_same(whole, analysed(counts, missing_count=-32768, chunk_s=chunk_s))


@settings(max_examples=40, deadline=None)
@given(
    counts=npst.arrays(np.int16, st.integers(0, 3000)),
    stretch=st.sampled_from([1, 7, 60]),
    fs_hz=st.sampled_from([100.0, 125.0, 128.0, 250.0, 360.0, 977.3]),
)
def test_any_counts_are_answered(counts: np.ndarray, stretch: int, fs_hz: float) -> None:
    """No array of counts raises or warns; the beats are ordered and lie within the segment."""
    counts = np.repeat(counts, stretch)
    analysis = analysed(counts, fs_hz=fs_hz, rails=(-32768, 32767), missing_count=-32768)
    sample = analysis.beats.sample
    assert (np.diff(sample) > 0).all() and ((sample >= 0) & (sample < max(counts.size, 1))).all()
    assert np.isfinite(analysis.beats.amplitude_mv).all()
    assert 0 <= analysis.analysable_s <= counts.size / fs_hz + 1e-9


def test_same_input_gives_the_same_bytes() -> None:
    """Two runs on the same samples agree to the last bit."""
    assert_same(analysed(counts_of()), analysed(counts_of()))


def test_inverted_lead_changes_only_signs() -> None:
    """Turning the lead upside down changes polarity and amplitude signs and nothing else of the beats."""
    upright, inverted = analysed(counts_of()).beats, analysed(-counts_of()).beats
    assert (inverted.polarity == -upright.polarity).all()
    for name in ("sample", "beat_class", "family", "pause_kind"):
        np.testing.assert_array_equal(getattr(upright, name), getattr(inverted, name))


@pytest.mark.parametrize("factor", [0.2, 0.5, 5.0])
def test_amplitude_does_not_matter(factor: float) -> None:
    """A signal a fifth as large or five times as large gives the same beats and classes."""
    reference, scaled = (analyse_signal(signal_mv() * f, fs_hz=FS_HZ).beats for f in (1.0, factor))
    np.testing.assert_array_equal(reference.sample, scaled.sample)
    np.testing.assert_array_equal(reference.beat_class, scaled.beat_class)


def test_level_of_zero_does_not_matter() -> None:
    """Counts around another zero, so stated, give the same beats."""
    plain, lifted = analysed(counts_of()), analysed(counts_of() + 1024, count_at_zero_mv=1024.0)
    np.testing.assert_array_equal(plain.beats.sample, lifted.beats.sample)
    np.testing.assert_allclose(plain.families.shape_mv, lifted.families.shape_mv, atol=1e-3)


@pytest.mark.parametrize("fs_hz", [125, 200, 256, 360, 500])
def test_sampling_rate_does_not_matter(fs_hz: int) -> None:
    """The same rhythm drawn at another rate gives the same classes at the same instants."""
    reference = analyse_signal(signal_mv(), fs_hz=FS_HZ).beats
    other = analyse_signal(signal_mv(fs_hz=fs_hz), fs_hz=fs_hz).beats
    assert other.beat_class.tolist() == reference.beat_class.tolist()
    np.testing.assert_allclose(other.sample / fs_hz, reference.sample / FS_HZ, atol=0.012)


def test_eight_bits_are_enough() -> None:
    """A signal stored in steps of 0.04 mV keeps its beats and classes."""
    fine = analyse_signal(signal_mv(), fs_hz=FS_HZ).beats
    coarse = analyse_signal(np.rint(signal_mv() / 0.04) * 0.04, fs_hz=FS_HZ).beats
    assert coarse.beat_class.tolist() == fine.beat_class.tolist()


def test_segments_add_up() -> None:
    """Two segments give the beats of both, each counted from its own begin, with no interval across."""
    one, two = analysed(counts_of()), analysed(counts_of(), counts_of())
    assert (np.bincount(two.beats.segment) == one.beats.sample.size).all()
    np.testing.assert_array_equal(two.beats.sample[two.beats.segment == 1], one.beats.sample)
    assert np.isnan(two.beats.rr_before_ms[np.flatnonzero(two.beats.segment == 1)[0]])
    for beat_class in "NSV":
        assert (two.beats.beat_class == beat_class).sum() == 2 * (one.beats.beat_class == beat_class).sum()


@pytest.mark.parametrize("pad_s", [3, 30, 200])
def test_flat_ends_change_no_class(pad_s: int) -> None:
    """Flat time before and after shifts the beats, is not analysable and changes no class."""
    counts = counts_of()
    pad = np.zeros(pad_s * FS_HZ, dtype=np.int16)
    plain, padded = analysed(counts), analysed(np.concatenate([pad, counts, pad]))
    inner = padded.beats.sample - pad.size
    assert np.isin(plain.beats.sample, inner).mean() > 0.98
    classes = dict(zip(inner.tolist(), padded.beats.beat_class.tolist(), strict=True))
    shared = [(classes[s], c) for s, c in zip(plain.beats.sample, plain.beats.beat_class, strict=True) if s in classes]
    assert all(found == expected for found, expected in shared)
    if pad_s > 5:
        assert padded.analysable_s < plain.analysable_s + 8


def test_beats_in_bad_time_stay_but_do_not_count() -> None:
    """Samples at the rail make a window with its reason; beats inside stay as rows that are not analysable."""
    counts = counts_of()
    counts[10_000:10_400] = 4000
    analysis = analysed(counts, rails=(-4000, 4000))
    assert "rail" in analysis.quality.quality_reason.tolist()
    assert 0 < (~analysis.beats.is_analysable).sum() < 20
    assert analysis.analysable_s < counts.size / FS_HZ


def test_missing_samples_break_the_intervals() -> None:
    """No interval is reported across missing samples, and the missing time is not analysable."""
    counts = counts_of()
    counts[12_000:14_000] = -32768
    analysis = analysed(counts, missing_count=-32768)
    after = np.flatnonzero(analysis.beats.sample >= 14_000)[0]
    assert np.isnan(analysis.beats.rr_before_ms[after]) and np.isnan(analysis.beats.rr_after_ms[after - 1])
    assert "pause" not in analysis.episodes.episode_kind.tolist()
    assert counts.size / FS_HZ - 13 < analysis.analysable_s < counts.size / FS_HZ - 8


def test_sliding_lead_without_qrs_is_no_pause() -> None:
    """Four seconds in which the lead slides back from far away are lead-off; the same without sliding are a pause."""
    truth = synthetic_beats.exact_beats(NORMAL * 40 + [("N", 4.0)] + NORMAL * 40, fs_hz=FS_HZ)
    n_samples = int(truth.sample[-1]) + 2 * FS_HZ
    ecg = synthetic.draw(truth, n_samples=n_samples, fs_hz=FS_HZ).astype(float)
    ecg += NOISY_MV * np.random.default_rng(7).standard_normal(n_samples)
    assert analyse_signal(ecg, fs_hz=FS_HZ).episodes.episode_kind.tolist() == ["pause"]
    begin = int(truth.sample[39]) + FS_HZ // 2
    ecg[begin:] += 6 * np.exp(-np.arange(n_samples - begin) / (1.2 * FS_HZ))
    slid = analyse_signal(ecg, fs_hz=FS_HZ)
    assert slid.episodes.episode_kind.size == 0 and "lead_off" in slid.quality.quality_reason.tolist()


def test_white_noise_does_not_make_beats() -> None:
    """White noise of 0.1 mV keeps the share of true beats among the found ones at 98 % or more in analysable time."""
    rhythm = NORMAL * 700
    truth = synthetic_beats.exact_beats(rhythm, fs_hz=FS_HZ).sample
    ecg = signal_mv(rhythm)
    ecg += 0.1 * np.random.default_rng(3).standard_normal(ecg.size)
    beats = analyse_signal(ecg, fs_hz=FS_HZ).beats
    found = beats.sample[beats.is_analysable]
    nearest = np.abs(found[:, None] - truth[None, :]).min(axis=1)
    # the limit: issue on detection, white noise of 0.1 mV rms; common practice, no source
    assert (nearest < 0.15 * FS_HZ).mean() >= 0.98


def test_progress_counts_every_sample_once() -> None:
    """The steps reported to `progress` add up to the samples of all segments."""
    steps: list[int] = []
    analysed(counts_of(), counts_of()[:777], chunk_s=20, progress=steps.append)
    assert sum(steps) == counts_of().size + 777 and len(steps) > 4


def test_reads_no_more_than_a_chunk_with_guards_at_a_time() -> None:
    """A long segment is read in pieces of bounded length, so that memory does not grow with it."""
    counts, widest = np.tile(counts_of(), 10), []

    def read(begin: int, end: int) -> np.ndarray:
        widest.append(end - begin)
        return counts[begin:end]

    analyse_recording([Segment(counts.size, read)], fs_hz=FS_HZ, mv_per_count=0.005, chunk_s=120)
    assert max(widest) < (120 + 2 * 75) * FS_HZ < counts.size
