"""Synthetic recordings keep the trade's timing rules, know their beats and are the same for the same seed."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from detectors import synthetic, synthetic_beats
from detectors.synthetic import QUIET, Noise, Rhythm

FS_HZ = 250
FREQUENT = Rhythm(
    v_share_pct=10, v_family_weights=(0.6, 0.4), s_share_pct=2, fusion_share=0.1, v_day_sd=0.0, v_day_swing=0.0
)


def whole(**options):
    """Counts and beats of a whole recording."""
    hours = list(synthetic.recording(**options))
    counts = np.concatenate([hour.counts for hour in hours])
    beats = synthetic_beats.TrueBeats(
        *(np.concatenate(column) for column in zip(*(h.beats for h in hours), strict=True))
    )
    return counts, beats


def intervals_around_single_v(beats):
    """Coupling, pause and the sinus interval before, in s, of V beats between four N beats."""
    classes = "".join(beats.beat_class)
    at_s = beats.sample / FS_HZ
    middles = [i + 3 for i in range(len(classes) - 6) if classes[i : i + 7] == "NNNVNNN"]
    return np.array([(at_s[i] - at_s[i - 1], at_s[i + 1] - at_s[i], at_s[i - 1] - at_s[i - 2]) for i in middles])


def test_the_same_seed_gives_the_same_bytes():
    """Two recordings with one seed are equal; another seed differs."""
    first, again, other = (whole(rhythm=FREQUENT, hours=0.05, seed=seed) for seed in (4, 4, 5))
    assert first[0].tobytes() == again[0].tobytes()
    assert np.array_equal(first[1].sample, again[1].sample)
    assert first[0].tobytes() != other[0].tobytes()


def test_pieces_join_without_a_seam():
    """The noise-free signal of a recording of several hours is what drawing all its beats at once gives."""
    counts, beats = whole(rhythm=FREQUENT, noise=QUIET, hours=2.2, fs_hz=50, seed=1)
    at_once = synthetic.draw(beats, n_samples=len(counts), fs_hz=50)
    # the beats after the last sample are not told, so the last second may lack a P wave
    assert np.array_equal(counts[:-50], synthetic.as_counts(at_once)[:-50])


def test_the_whole_time_is_covered():
    """Beats go on at a plausible distance from the first second to the last, across the hours."""
    counts, beats = whole(rhythm=FREQUENT, hours=2.5, fs_hz=50, seed=2)
    edges = np.concatenate([[0], beats.sample, [len(counts)]])
    gaps_s = np.diff(edges) / 50
    assert len(counts) == 2.5 * 3600 * 50
    assert gaps_s[1:-1].min() > 0.25 and gaps_s.max() < 2.5


def test_the_ventricular_share_is_met():
    """Over many hours the share of V beats is the one asked for."""
    shares = [
        np.mean(hour.beats.beat_class == "V")
        for seed in range(30)
        for hour in synthetic.recording(FREQUENT._replace(fusion_share=0.0), QUIET, fs_hz=25, seed=seed)
    ]
    assert 100 * np.mean(shares) == pytest.approx(10, abs=1.0)


def test_without_ectopy_there_is_none():
    """A rhythm without ventricular and supraventricular shares holds N beats only."""
    _, beats = whole(rhythm=Rhythm(s_share_pct=0), hours=0.5, seed=3)
    assert set(beats.beat_class) == {"N"}


def test_full_pauses_are_the_rule():
    """Most single V beats have coupling plus pause of two sinus intervals."""
    _, beats = whole(rhythm=FREQUENT, noise=QUIET, hours=1, seed=6)
    coupling_s, pause_s, sinus_s = intervals_around_single_v(beats).T
    ratio = (coupling_s + pause_s) / sinus_s
    # from memory: a full compensatory pause lasts two sinus intervals from the beat before to the beat after
    full = np.abs(ratio - 2) < 0.12
    assert 0.75 < full.mean() < 0.98
    # common practice, no source: after a reset pause the sum is less than two sinus intervals
    assert np.all(ratio[~full] < 2)


def test_bigeminy_stands_in_stretches():
    """A rhythm with bigeminy has stretches of six or more alternating V and N beats."""
    _, beats = whole(rhythm=FREQUENT._replace(bigeminy_share=0.8), hours=1, seed=7)
    # common practice, no source: one ectopic after every normal beat is bigeminy
    assert "VN" * 6 in "".join(beats.beat_class)


def test_the_rate_is_lower_at_night():
    """The sinus rate follows the local clock."""
    calm = Rhythm(rate_bpm=70, day_night_swing=0.2, s_share_pct=0)
    day, night = (len(whole(rhythm=calm, hours=1, fs_hz=25, start_clock_h=clock)[1].sample) for clock in (15, 3))
    assert day / night == pytest.approx(1.2 / 0.8, rel=0.03)


def test_irregular_rhythm_has_no_p_wave():
    """Atrial fibrillation varies RR by a fifth and leaves the stretch before the QRS flat."""
    counts, beats = whole(
        rhythm=Rhythm(atrial_fibrillation=True, s_share_pct=0, day_night_swing=0), noise=QUIET, hours=0.2, seed=8
    )
    rr = np.diff(beats.sample)
    assert 0.15 < rr.std() / rr.mean() < 0.3
    isolated = beats.sample[1:][rr > 0.9 * FS_HZ]
    assert np.abs(counts[isolated - 41]).max() * synthetic.MV_PER_COUNT < 0.02


def test_lead_off_lies_on_the_rail():
    """Time with the patch off the skin holds the rail count."""
    counts, _ = whole(noise=Noise(lead_off_per_h=60, lead_off_s=20), hours=0.2, seed=9)
    share = np.mean(counts == synthetic.RAIL_COUNT)
    assert 0.05 < share < 0.9


def test_noise_free_amplitude_and_timing():
    """The R peak stands at the told sample with the model's amplitude, the signal is flat between beats."""
    beats = synthetic_beats.exact_beats([("N", 1.0)] * 5, fs_hz=FS_HZ)
    signal_mv = synthetic.draw(beats, n_samples=6 * FS_HZ, fs_hz=FS_HZ)
    assert beats.sample.tolist() == [375, 625, 875, 1125, 1375]
    assert np.argmax(signal_mv[250:500]) + 250 == 375
    assert signal_mv[375] == pytest.approx(1.14, abs=0.03)
    assert np.abs(signal_mv[375 + 125 : 625 - 65]).max() < 0.02


def test_exact_classes():
    """Kinds with a family number keep their class letter."""
    beats = synthetic_beats.exact_beats([("N", 1.0), ("V2", 0.6), ("F1", 1.4), ("S", 0.7)])
    assert beats.beat_class.tolist() == ["N", "V", "F", "S"]


def test_unknown_kind_is_refused():
    """A kind that is not drawn is refused with the known ones."""
    with pytest.raises(ValueError, match="kind 'V7'; expected N, B, S, V0 to V3"):
        synthetic_beats.exact_beats([("V7", 1.0)])


def test_no_time_is_refused():
    """A recording without a sample is refused."""
    with pytest.raises(ValueError, match="expected at least one"):
        next(synthetic.recording(hours=0))


@given(st.integers(0, 3000), st.integers(1, 1500))
@settings(max_examples=30)
def test_any_window_is_a_cut_of_the_whole(first, length):
    """Drawing a window gives the same samples as cutting it from the whole."""
    beats = synthetic_beats.exact_beats(
        [("N", 0.9), ("V1", 0.5), ("N", 1.3), ("V0", 0.35), ("S", 0.4)] * 4, fs_hz=FS_HZ
    )
    all_of_it = synthetic.draw(beats, n_samples=5000, fs_hz=FS_HZ)
    window = synthetic.draw(beats, n_samples=length, first_sample=first, fs_hz=FS_HZ)
    assert np.allclose(window, all_of_it[first : first + length], atol=1e-6)
