from itertools import pairwise

import numpy as np

from detectors.results import Analysis, Beats, Episodes, Families, QualityWindows
from detectors.strips import MAX_STRIPS, beats_within, choose_strips

FS_HZ = 100.0


def analysis(classes: str, *, families=None, probability=None, episodes=(), length_s=None) -> Analysis:
    """One beat a second; episodes as (kind, first second, beats, rate)."""
    n = len(classes)
    sample = (np.arange(n) * FS_HZ).astype(np.int64)
    blank = np.full(n, np.nan, np.float32)
    beats = Beats(
        np.zeros(n, np.int16), sample, blank, blank, np.array(list(classes), "<U1"),
        np.ones(n, np.float32) if probability is None else np.asarray(probability, np.float32),
        np.zeros(n, np.int16) if families is None else np.asarray(families, np.int16),
        blank, blank, np.ones(n, np.int8), blank, blank, np.zeros(n, np.int8), blank, np.zeros(n, bool),
        np.ones(n, bool),
    )  # fmt: skip
    first = np.array([int(e[1] * FS_HZ) for e in episodes], np.int64)
    found = Episodes(
        np.array([e[0] for e in episodes], "<U10"), np.zeros(len(episodes), np.int16), first, first,
        np.array([e[2] for e in episodes], np.int64), np.array([float(e[2]) for e in episodes]),
        np.array([e[3] for e in episodes], np.float32),
    )  # fmt: skip
    none = np.zeros(0)
    families_found = Families(none, none, none, none, none, none, none, np.zeros((0, 90), np.float32))
    quality = QualityWindows(none.astype(np.int16), none.astype(np.int64), none.astype(np.int64), none.astype("<U8"))
    length = int((length_s or n) * FS_HZ)
    return Analysis(beats, families_found, found, quality, (), FS_HZ, (length,), length / FS_HZ)


def test_the_longest_run_comes_first():
    """The longest ventricular run is on the first strip, whole within it."""
    found = choose_strips(analysis("N" * 300, episodes=[("run", 50, 3, 110), ("run", 200, 8, 130)]))
    assert found[0].strip_reason == "longest run"
    assert found[0].first_sample <= 200 * FS_HZ < 208 * FS_HZ < found[0].first_sample + found[0].n_samples


def test_each_large_family_shows_its_typical_and_its_least_certain_beat():
    """For a ventricular family the beat of median and of least probability are shown."""
    classes = "".join("V" if second % 40 == 20 else "N" for second in range(400))
    probability = np.where(np.arange(400) == 220, 0.55, np.where(np.arange(400) % 80 == 20, 0.99, 0.9))
    found = choose_strips(analysis(classes, probability=probability))
    reasons = [strip.strip_reason for strip in found]
    assert "typical ventricular beat of family 0" in reasons
    shaky = found[reasons.index("least certain ventricular beat of family 0")]
    assert shaky.first_sample < 220 * FS_HZ < shaky.first_sample + shaky.n_samples


def test_strips_do_not_overlap_and_are_few():
    """However much there is to show, strips do not overlap and stay at the limit."""
    rng = np.random.default_rng(7)
    classes = "".join(rng.choice(list("NVSF"), 5000))
    episodes = [(kind, 100 * i, 3 + i, 100 + i) for i, kind in enumerate(["run", "couplet", "bigeminy", "pause"])]
    found = choose_strips(analysis(classes, families=rng.integers(0, 12, 5000), episodes=episodes))
    assert 0 < len(found) <= MAX_STRIPS
    spans = sorted((strip.first_sample, strip.first_sample + strip.n_samples) for strip in found)
    assert all(end <= begin for (_, end), (begin, _) in pairwise(spans))


def test_a_short_recording_gives_one_strip_of_its_length():
    """A recording of three seconds is one strip with all its beats."""
    short = analysis("NNN")
    (strip,) = choose_strips(short)
    assert (strip.first_sample, strip.n_samples) == (0, 300)
    assert beats_within(short, strip).tolist() == [0, 1, 2]


def test_beats_of_no_family_are_not_typical_of_anything():
    """Beats that belong to no family are shown on no strip of their own."""
    classes = "".join("V" if second == 30 else "N" for second in range(100))
    families = np.where(np.arange(100) == 30, -1, 0)
    found = choose_strips(analysis(classes, families=families))
    assert [strip.strip_reason for strip in found] == ["the normal beat in the middle of the recording"]


def test_no_beats_give_no_strips():
    """A recording without a beat has no strip."""
    assert choose_strips(analysis("", length_s=60)) == []
