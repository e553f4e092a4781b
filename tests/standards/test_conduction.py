"""Facts of conduction: block, early beats that repeat, and changes of rate are not ventricular or supraventricular beats.

Common practice, no source, for all of them.
"""

import numpy as np
import pytest

from detectors import analyse_signal, synthetic, synthetic_beats
from tests.standards.test_trade_facts import FS_HZ, FULL_PAUSE, analysed, classes, those

NORMAL_STRETCH = [("N", 0.85)] * 60


@pytest.mark.parametrize(
    "block",
    [
        [("B", 0.72)] * 40,  # comes with a faster rate, as it often does
        [("B", 0.85)] * 40,
        [("B", 0.85), ("N", 0.85)] * 30,  # every second beat
    ],
    ids=["faster", "same rate", "alternating"],
)
def test_block_behind_its_p_wave_is_conducted(block):
    """Wide beats on time at the usual distance behind the P wave are conducted with block, neither V nor S."""
    _, analysis, _ = analysed((NORMAL_STRETCH + block) * 8)
    assert np.mean(analysis.beats.beat_class == "N") > 0.99


def test_premature_beats_are_found_in_a_blocked_rhythm():
    """Where all normal beats are wide, early wide beats with a pause are ventricular although their shapes are alike."""
    beats, analysis, found = analysed(([("B", 1.0)] * 12 + FULL_PAUSE[:1] + [("B", 1.4)]) * 20)
    assert classes(analysis, those(beats, found, "V")) == {"V"}
    assert classes(analysis, those(beats, found, "N")) == {"N"}


def test_atrial_bigeminy_is_supraventricular():
    """Every second beat early with an atrial P wave: those beats are S; strict alternation is no fibrillation."""
    beats, analysis, found = analysed(([("N", 1.0)] * 20 + [("S", 0.6), ("N", 1.15)] * 30) * 6)
    assert np.mean(analysis.beats.beat_class[those(beats, found, "S")] == "S") > 0.95
    assert np.mean(analysis.beats.beat_class[those(beats, found, "N")] == "N") > 0.98


def test_atrial_beats_in_irregular_turn_are_supraventricular():
    """After one or two sinus beats an early atrial one, by chance: irregular, yet the sinus P waves rule out fibrillation."""
    turns = np.random.default_rng(1).integers(0, 2, 150)
    beats, analysis, found = analysed([step for n in turns for step in ([("N", 0.9)] * n + [("S", 0.6), ("N", 1.0)])])
    assert np.mean(analysis.beats.beat_class[those(beats, found, "S")] == "S") > 0.9
    assert np.mean(analysis.beats.beat_class[those(beats, found, "N")] == "N") > 0.97


def test_atrial_groups_that_outnumber_the_sinus_beats_are_supraventricular():
    """Groups of atrial beats between single sinus beats after pauses are S, although the short interval is the usual one."""
    beats, analysis, found = analysed(([("N", 1.7)] + [("S", 0.65)] * 7) * 30)
    assert np.mean(analysis.beats.beat_class[those(beats, found, "S")] == "S") > 0.9
    assert np.mean(analysis.beats.beat_class[those(beats, found, "N")] == "N") > 0.9


def test_pauses_of_the_sinus_node_make_no_supraventricular_beats():
    """The same timing with the sinus P wave before every beat is sinus rhythm with pauses."""
    _, analysis, _ = analysed(([("N", 1.7)] + [("N", 0.65)] * 7) * 30)
    assert np.mean(analysis.beats.beat_class == "N") > 0.99


def test_blocked_p_waves_are_no_beats():
    """P waves that no QRS follows, alone in the pauses of a second-degree block, are neither beats nor ventricular."""
    beats = synthetic_beats.exact_beats(([("N", 0.8)] * 3 + [("N", 1.6)]) * 60)
    n_samples = int(beats.sample[-1]) + 2 * FS_HZ
    blocked_s = beats.sample[3::4] / FS_HZ - 0.8 - 0.165
    ecg_mv = 0.5 * synthetic.draw(beats, n_samples=n_samples, fs_hz=FS_HZ)  # a small QRS, so that P waves stand out
    t_s = np.arange(n_samples) / FS_HZ
    for at_s in [*blocked_s, *(beats.sample / FS_HZ - 0.165)]:
        ecg_mv += 0.1 * np.exp(-0.5 * ((t_s - at_s) / 0.016) ** 2).astype(np.float32)
    analysis = analyse_signal(ecg_mv + 0.005 * np.random.default_rng(1).standard_normal(n_samples), fs_hz=FS_HZ)
    assert analysis.beats.sample.size == beats.sample.size
    assert set(analysis.beats.beat_class.tolist()) == {"N"}


def test_end_of_a_two_to_one_block_is_no_tachycardia():
    """When every P wave is conducted again the rate doubles to 63 a minute: normal beats, not a supraventricular run."""
    _, analysis, _ = analysed(([("N", 0.95)] * 40 + [("N", 1.86)] * 20) * 6)
    assert np.mean(analysis.beats.beat_class == "N") > 0.99
