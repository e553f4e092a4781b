"""Facts of the trade hold on exact synthetic rhythms: pauses, bigeminy, R-on-T, fusion, escape, foci, runs."""

import numpy as np
import pytest

from detectors import analyse_signal, synthetic, synthetic_beats
from detectors.results import PAUSE_KINDS

FS_HZ = 250
SINUS = [("N", 1.0)]  # 60 beats a minute
FULL_PAUSE = [("V", 0.6), ("N", 1.4)]


def analysed(rhythm, fs_hz=FS_HZ):
    """True beats, analysis, and for each true beat the number of the found beat within 30 ms (-1 for none)."""
    beats = synthetic_beats.exact_beats(rhythm, fs_hz=fs_hz)
    n_samples = int(beats.sample[-1]) + 2 * fs_hz
    noise_mv = 0.005 * np.random.default_rng(1).standard_normal(n_samples)
    analysis = analyse_signal(synthetic.draw(beats, n_samples=n_samples, fs_hz=fs_hz) + noise_mv, fs_hz=fs_hz)
    nearest = np.abs(analysis.beats.sample[None, :] - beats.sample[:, None])
    found = np.where(nearest.min(axis=1) <= 0.03 * fs_hz, nearest.argmin(axis=1), -1)
    return beats, analysis, found


def those(beats, found, beat_class):
    """Found beats that stand for true beats of a class; fails when one is missing."""
    chosen = found[beats.beat_class == beat_class]
    assert np.all(chosen >= 0)
    return chosen


def kinds(analysis, chosen):
    return {PAUSE_KINDS[kind] for kind in analysis.beats.pause_kind[chosen]}


def classes(analysis, chosen):
    return set(analysis.beats.beat_class[chosen].tolist())


def episodes(analysis, kind):
    """Beat count, duration in s and rate of each episode of a kind."""
    chosen = analysis.episodes.episode_kind == kind
    return list(
        zip(
            analysis.episodes.beat_count[chosen].tolist(),
            analysis.episodes.duration_s[chosen].tolist(),
            analysis.episodes.rate_bpm[chosen].tolist(),
            strict=True,
        )
    )


def test_full_compensatory_pause():
    """An early wide beat that leaves the sinus node alone: the next sinus beat comes 2.0 s after the last one."""
    beats, analysis, found = analysed((SINUS * 20 + FULL_PAUSE) * 10)
    v = those(beats, found, "V")
    assert classes(analysis, v) == {"V"} and kinds(analysis, v) == {"full"}
    before, after = analysis.beats.rr_before_ms[v], analysis.beats.rr_after_ms[v]
    # common practice, no source: 2 x 1.0 s
    assert np.allclose(before + after, 2000, atol=8)
    # common practice, no source: the coupling interval is the interval to the beat before
    assert np.allclose(analysis.beats.coupling_ms[v], 600, atol=8)


def test_reset_pause():
    """An early atrial beat that resets the sinus node has a pause of less than two sinus intervals."""
    beats, analysis, found = analysed((SINUS * 20 + [("S", 0.7), ("N", 1.0)]) * 10)
    s = those(beats, found, "S")
    assert classes(analysis, s) == {"S"} and kinds(analysis, s) == {"reset"}
    # common practice, no source: 0.7 s + 1.0 s
    assert np.allclose(analysis.beats.rr_before_ms[s] + analysis.beats.rr_after_ms[s], 1700, atol=8)


def test_reset_pause_of_a_slightly_early_beat():
    """A beat that comes after 0.88 s and resets the sinus node gives 0.88 s + 1.0 s = 1.88 s."""
    beats, analysis, found = analysed((SINUS * 20 + [("S", 0.88), ("N", 1.0)]) * 10)
    s = those(beats, found, "S")
    # common practice, no source: 0.88 s + 1.0 s is less than 2 x 1.0 s
    assert classes(analysis, s) == {"S"} and kinds(analysis, s) == {"reset"}


def test_interpolated_beat():
    """An ectopic beat squeezed between two sinus beats that are on time is interpolated."""
    beats, analysis, found = analysed((SINUS * 20 + [("V", 0.45), ("N", 0.55)]) * 10)
    v = those(beats, found, "V")
    # common practice, no source: the sinus beats on both sides are one sinus interval apart
    assert classes(analysis, v) == {"V"} and kinds(analysis, v) == {"interpolated"}


def test_normal_and_wide_qrs():
    """The normal QRS is narrower than 100 ms, the wide ectopic QRS is 120 ms or more and in another family."""
    beats, analysis, found = analysed((SINUS * 20 + FULL_PAUSE) * 10)
    n, v = those(beats, found, "N"), those(beats, found, "V")
    # common practice, no source: 2.5 boxes of 40 ms
    assert analysis.beats.qrs_width_ms[n].max() < 100
    # Source: ESC definitions table (2022 guideline): QRS of ventricular premature beats typically 120 ms and more
    assert analysis.beats.qrs_width_ms[v].min() >= 120
    assert not set(analysis.beats.family[n]) & set(analysis.beats.family[v])


def test_bigeminy():
    """One ectopic after every normal beat is bigeminy, as one stretch and even when it lasts the whole recording."""
    for rhythm in (SINUS * 30 + FULL_PAUSE * 12 + SINUS * 30, SINUS * 5 + FULL_PAUSE * 60):
        beats, analysis, found = analysed(rhythm)
        assert classes(analysis, those(beats, found, "V")) == {"V"}
        ((count, duration_s, _),) = episodes(analysis, "bigeminy")
        true_v = int(np.sum(beats.beat_class == "V"))
        # common practice, no source: V and N in turn, two seconds a cycle at 60/min with full pauses
        assert abs(count - 2 * true_v) <= 2 and abs(duration_s - 2.0 * true_v) <= 3
        assert episodes(analysis, "trigeminy") == []


def test_trigeminy():
    """One ectopic after every two normal beats is trigeminy."""
    _, analysis, _ = analysed(SINUS * 30 + (SINUS + FULL_PAUSE) * 12 + SINUS * 30)
    ((count, _, _),) = episodes(analysis, "trigeminy")
    # common practice, no source: V, N, N in turn
    assert abs(count - 36) <= 3
    assert episodes(analysis, "bigeminy") == []


def test_single_ectopics_are_no_stretch():
    """Ectopic beats twenty sinus beats apart make no bigeminy, trigeminy, couplet or run."""
    _, analysis, _ = analysed((SINUS * 20 + FULL_PAUSE) * 5)
    assert set(analysis.episodes.episode_kind) == set()


def test_r_on_t():
    """An ectopic on the T wave has an R-on-T index below 1, one after the T wave above 1."""
    beats, analysis, found = analysed((SINUS * 20 + [("V", 0.33), ("N", 1.67)]) * 10)
    late_beats, late_analysis, late_found = analysed((SINUS * 20 + FULL_PAUSE) * 10)
    v, late = those(beats, found, "V"), those(late_beats, late_found, "V")
    assert classes(analysis, v) == {"V"}
    # common practice, no source: the T wave ends about 0.4 s after the QRS at 60/min
    assert np.all(analysis.beats.r_on_t_index[v] < 1)
    # common practice, no source: 0.6 s lies behind the T wave
    assert np.all(late_analysis.beats.r_on_t_index[late] > 1)


def fusion_beats(focus):
    ectopics = SINUS * 20 + [(f"V{focus}", 0.6), ("N", 1.4)]
    beats, analysis, found = analysed((SINUS * 20 + [(f"F{focus}", 1.0)]) * 10 + ectopics * 20)
    return analysis, those(beats, found, "F")


@pytest.mark.parametrize("focus", [0, 1, 2, 3])
def test_fusion_is_on_time(focus):
    """A ventricular beat that merges with the conducted beat is not premature."""
    analysis, f = fusion_beats(focus)
    # common practice, no source: it comes when the conducted beat is due
    assert np.all(np.abs(analysis.beats.prematurity_pct[f]) < 5)
    assert np.all(np.isnan(analysis.beats.coupling_ms[f]))
    assert not analysis.beats.is_escape[f].any()


@pytest.mark.parametrize(
    "focus",
    [
        0,
        pytest.param(
            1, marks=pytest.mark.xfail(strict=True, reason="the merged beat of opposite shapes has its peak elsewhere")
        ),
        2,
        3,
    ],
)
def test_fusion_is_called_fusion(focus):
    """A beat on time whose shape lies between the normal and a ventricular family is F."""
    analysis, f = fusion_beats(focus)
    # Source: ANSI/AAMI EC57, class F: fusion of a ventricular and a normal beat
    assert classes(analysis, f) == {"F"}


def test_escape_beat():
    """A wide beat that ends a long interval is a ventricular escape beat and not premature."""
    beats, analysis, found = analysed((SINUS * 20 + [("V", 1.7), ("N", 1.0)]) * 10)
    v = those(beats, found, "V")
    # Source: reference comparator bxb (WFDB), symbol map: ventricular escape beats are class V
    assert classes(analysis, v) == {"V"}
    assert np.all(analysis.beats.is_escape[v])
    # common practice, no source: late, so it has no coupling interval
    assert np.all(analysis.beats.prematurity_pct[v] < 0) and np.all(np.isnan(analysis.beats.coupling_ms[v]))


def test_premature_beats_are_no_escape_beats():
    """Early wide beats and normal beats after pauses are not escape beats."""
    _, analysis, _ = analysed((SINUS * 20 + FULL_PAUSE) * 10)
    assert not analysis.beats.is_escape.any()


def test_several_foci():
    """Ectopic beats from three foci come out as three ventricular families."""
    round_trip = [step for n in range(3) for step in (*SINUS * 10, (f"V{n}", 0.6), ("N", 1.4))]
    beats, analysis, found = analysed(round_trip * 10)
    v = those(beats, found, "V")
    assert classes(analysis, v) == {"V"}
    families = [set(analysis.beats.family[v[focus::3]].tolist()) for focus in range(3)]
    # common practice, no source: one focus, one shape
    assert [len(family) for family in families] == [1, 1, 1]
    assert len(set.union(*families)) == 3


def test_one_focus():
    """Ectopic beats of one focus at different coupling intervals stay in one family."""
    steps = [step for coupling in (0.45, 0.6, 0.75) for step in (*SINUS * 10, ("V", coupling), ("N", 2 - coupling))]
    beats, analysis, found = analysed(steps * 8)
    # common practice, no source: one focus, one shape
    assert len(set(analysis.beats.family[those(beats, found, "V")])) == 1


def test_couplets():
    """Two ectopic beats in a row are a couplet, not a run."""
    _, analysis, _ = analysed((SINUS * 20 + [("V", 0.5), ("V", 0.45), ("N", 1.2)]) * 10)
    assert [count for count, _, _ in episodes(analysis, "couplet")] == [2] * 10
    assert episodes(analysis, "run") == []


def test_a_couplet_is_not_interpolated():
    """Only a single ectopic beat between two normal beats can be interpolated."""
    beats, analysis, found = analysed((SINUS * 20 + [("V", 0.5), ("V", 0.45), ("N", 1.2)]) * 10)
    # common practice, no source
    assert "interpolated" not in kinds(analysis, those(beats, found, "V"))


@pytest.mark.parametrize(("interval_s", "rate_bpm"), [(0.75, 80), (0.55, 109), (0.4, 150)])
def test_runs_have_their_rate(interval_s, rate_bpm):
    """Slow runs, runs above 100 and runs above 120 a minute are runs with their own rate."""
    run = [("V", min(0.9, interval_s + 0.1)), *[("V", interval_s)] * 7, ("N", 1.2)]
    _, analysis, _ = analysed(SINUS * 60 + (run + SINUS * 60) * 3)
    found = episodes(analysis, "run")
    assert [count for count, _, _ in found] == [8] * 3
    # common practice, no source: 60 over the mean interval within the run
    assert np.allclose([rate for _, _, rate in found], rate_bpm, rtol=0.03)


def test_sustained_run():
    """A run of wide beats that lasts 40 s is one ventricular run of at least 30 s."""
    run = [("V", 0.5), *[("V", 0.4)] * 100, ("N", 1.2)]
    beats, analysis, found = analysed(SINUS * 120 + run + SINUS * 120)
    assert classes(analysis, those(beats, found, "V")) == {"V"}
    ((_, duration_s, rate_bpm),) = episodes(analysis, "run")
    # Source: 2017 AHA/ACC/HRS guideline: sustained ventricular tachycardia lasts more than 30 s
    assert duration_s > 30
    # common practice, no source: 60 over 0.4 s
    assert rate_bpm == pytest.approx(150, rel=0.03)


def test_supraventricular_run():
    """Early beats of normal shape in a row are a supraventricular run."""
    beats, analysis, found = analysed((SINUS * 30 + [("S", 0.6), *[("S", 0.5)] * 5, ("N", 1.1)]) * 6)
    assert classes(analysis, those(beats, found, "S")) == {"S"}
    assert [count for count, _, _ in episodes(analysis, "sv_run")] == [6] * 6
    assert episodes(analysis, "run") == []


def test_pauses():
    """A silence of 3.2 s is a pause with its length."""
    _, analysis, _ = analysed((SINUS * 30 + [("N", 3.2)]) * 4 + SINUS * 10)
    assert np.allclose([duration_s for _, duration_s, _ in episodes(analysis, "pause")], [3.2] * 4, atol=0.02)


@pytest.mark.parametrize("fs_hz", [125, 128, 200, 250, 256, 360, 500])
def test_any_common_rate(fs_hz):
    """The rules hold at every sampling rate of the trade."""
    beats, analysis, found = analysed((SINUS * 15 + FULL_PAUSE) * 8, fs_hz=fs_hz)
    v = those(beats, found, "V")
    assert len(analysis.beats.sample) == len(beats.sample)
    assert classes(analysis, v) == {"V"} and kinds(analysis, v) == {"full"}
    assert classes(analysis, those(beats, found, "N")) == {"N"}
