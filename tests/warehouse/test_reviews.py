"""What over-readers decided, applied to the numbers; where they differ, and how much they agree."""

from datetime import datetime, timedelta
from typing import Any

import polars as pl
import pytest

FS_HZ = 250
START = datetime.fromisoformat("2026-05-01T00:00:00")
NOON = datetime.fromisoformat("2026-06-01T12:00:00")


@pytest.fixture
def read(lake: Any) -> Any:
    """A recording of 100 analysable beats, every tenth a V, and 5 more V that are not analysable."""
    lake.patient("P1")
    tally = {"n_beats": 90, "s_beats": 0, "v_beats": 10}
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-01T00:15", **tally)
    places = pl.int_range(105, eager=True)
    beats = pl.DataFrame(
        {
            "recording_id": "R1",
            "fingerprint": "f1",
            "segment": 0,
            "sample": places * FS_HZ,
            "beat_class": ["V" if (place % 10 == 0 and place < 100) or place >= 100 else "N" for place in places],
            "is_analysable": [place < 100 for place in places],
            "rr_before_ms": [None, *[1000.0] * 104],
            "beat_utc": [START + timedelta(seconds=place) for place in places],
        }
    )
    lake.land("beats", "R1", beats, "f1")
    bad = {"recording_id": "R1", "fingerprint": "f1", "segment": 0, "quality_reason": "noise"}
    lake.land("quality_windows", "R1", [bad | {"first_sample": 24900, "last_sample": 26249}], "f1")
    return lake


def review(
    lake: Any, delivery_id: str, decided: dict[int, str], hour: int = 0, reader: str = "A", shift: int = 0
) -> None:
    """Land decisions on single beats, by their place in the recording."""
    row = {"delivery_id": delivery_id, "recording_id": "R1", "read_fingerprint": "f1", "reader_code": reader}
    row["reviewed_utc"] = NOON.replace(hour=hour)
    beats = [
        row
        | {"segment": 0, "sample": place * FS_HZ + shift, "automatic_class": "V", "decision": decision}
        | {"beat_utc": START + timedelta(seconds=place + shift / FS_HZ)}
        for place, decision in decided.items()
    ]
    one = row | {"decision_order": 0, "decision_subject": "note", "note": "read"}
    lake.land("reviews", delivery_id, beats)
    lake.land("decisions", delivery_id, [one])


def reviewed(lake: Any) -> dict[str, Any]:
    with lake.built() as build:
        assert build.check() == []
        return build.frame("reviewed").row(0, named=True)


def test_relabelled_beats_move_the_burden(read: Any) -> None:
    """V beats called N leave the numerator, N beats called V enter it; noise leaves the denominator, too."""
    review(read, "D1", {0: "N", 10: "noise", 20: "V", 1: "V", 2: "V"})
    found = reviewed(read)
    # Source: by hand, 10 V of 100 beats: two leave, two enter, one beat is no beat
    assert (found["automatic_v_beats"], found["automatic_all_beats"]) == (10, 100)
    assert (found["v_beats"], found["all_beats"]) == (10, 99)
    assert found["v_burden_pct"] == pytest.approx(100 * 10 / 99)
    assert (found["decided_beats"], found["decided_v_pct"], found["unmet_decisions"]) == (5, 30, 0)


def test_decisions_reach_days_and_recordings(read: Any) -> None:
    """Trend tables count a beat by the class that holds, and say how many beats a reader decided."""
    review(read, "D1", {0: "N", 10: "S", 20: "V"})
    with read.built() as build:
        (day,) = build.frame("wear_days").rows(named=True)
        (recording,) = build.frame("recordings").rows(named=True)
        (hour,) = build.frame("hours").rows(named=True)
    for row in (day, hour):
        assert (row["n_beats"], row["s_beats"], row["v_beats"], row["all_beats"]) == (91, 1, 8, 100)
    assert (day["decided_beats"], recording["decided_beats"], recording["v_burden_pct"]) == (3, 3, 8)


def test_beats_that_are_not_analysable_move_nothing(read: Any) -> None:
    """A decision on a beat outside analysable time changes neither numerator nor denominator."""
    review(read, "D1", {101: "N", 102: "noise"})
    found = reviewed(read)
    assert (found["v_beats"], found["all_beats"], found["decided_beats"]) == (10, 100, 0)


def test_the_latest_decision_holds(read: Any) -> None:
    """A reader who changes their mind overrides their own earlier decision on the same beat."""
    review(read, "D2", {0: "V", 10: "V"}, hour=8)
    review(read, "D1", {0: "N", 10: "N"}, hour=9)
    review(read, "D3", {10: "V"}, hour=10)
    assert reviewed(read)["v_beats"] == 9


def test_where_readers_differ_the_automatic_class_stays(read: Any) -> None:
    """A beat that two readers call differently counts as found; one on which they agree counts as they say."""
    review(read, "D1", {0: "N", 10: "N"}, hour=9)
    review(read, "D2", {0: "S", 10: "N"}, hour=10, reader="B")
    found = reviewed(read)
    assert (found["v_beats"], found["reader_codes"]) == (9, "A B")


# Source: matching window of ANSI/AAMI EC57, 150 ms each side: 37.5 samples at 250 Hz
@pytest.mark.parametrize(("shift", "met"), [(37, True), (-37, True), (38, False), (-38, False)])
def test_decisions_meet_beats_within_150_ms(read: Any, shift: int, met: bool) -> None:
    """A detector that finds the beat a little earlier or later keeps the decision; else it is counted as unmet."""
    review(read, "D1", {0: "N", 30: "N"} if shift > 0 else {30: "N", 40: "N"}, shift=shift)
    found = reviewed(read)
    assert (found["decided_beats"], found["unmet_decisions"]) == ((2, 0) if met else (0, 2))
    assert found["v_beats"] == (8 if met else 10)


def test_decisions_follow_beats_that_are_renumbered(read: Any) -> None:
    """When a late part moves segments and samples, decisions still meet the beats at their instants."""
    review(read, "D1", {0: "N", 10: "N"})
    renumbered = pl.DataFrame(
        {
            "recording_id": ["R1"] * 2,
            "fingerprint": ["f1"] * 2,
            "segment": [3, 3],
            "sample": [50, 50 + 10 * FS_HZ],
            "beat_class": ["V", "V"],
            "is_analysable": [True, True],
            "beat_utc": [START, START + timedelta(seconds=10)],
        }
    )
    read.land("beats", "R1", renumbered, "f1")
    read.segments("R1", [(START, START + timedelta(seconds=60))] * 4)
    assert (reviewed(read)["decided_beats"], reviewed(read)["unmet_decisions"]) == (2, 0)


RUN = {"run": (20, 3), "long run": (60, 9)}  # first beat and beats


@pytest.fixture
def with_runs(lake: Any) -> Any:
    """A recording of a beat a second with a run of 3 V, a run of 9 V, a couplet and a pause of 4 s."""
    lake.patient("P1")
    lake.recording("R1", "P1", "2026-05-01T00:00", "2026-05-01T00:15")
    beat_class = ["N"] * 120
    for first, length in (*RUN.values(), (100, 2)):
        beat_class[first : first + length] = ["V"] * length
    rr_s = [0.4 if kind == "V" else 1.0 for kind in beat_class]
    rr_s[110] = 4.0
    at_s = [0.0]
    for step in rr_s[1:]:
        at_s.append(at_s[-1] + step)
    beats = {
        "recording_id": "R1", "fingerprint": "f1", "segment": 0, "is_analysable": True,
        "sample": [round(second * FS_HZ) for second in at_s], "beat_class": beat_class,
        "rr_before_ms": [None, *(1000 * step for step in rr_s[1:])],
        "beat_utc": [START + timedelta(seconds=second) for second in at_s], "family": 1,
    }  # fmt: skip
    lake.land("beats", "R1", pl.DataFrame(beats), "f1")
    lake.at_s = at_s
    return lake


def reject(lake: Any, reader: str, decided: dict[tuple[str, int], str]) -> None:
    """Land what a reader says of episodes, each known by its kind and its first beat."""
    who = {"recording_id": "R1", "read_fingerprint": "f0", "reader_code": reader, "reviewed_utc": NOON}
    rows = [
        who
        | {"delivery_id": f"D{reader}", "decision_order": order, "decision_subject": "episode", "decision": decision}
        | {"episode_kind": kind, "segment": 7, "sample": 1}
        | {"start_utc": START + timedelta(seconds=lake.at_s[first] + 0.1)}
        for order, ((kind, first), decision) in enumerate(decided.items())
    ]
    lake.land("decisions", f"D{reader}", rows)


def counted(lake: Any) -> dict[str, Any]:
    """What the only day counts after the decisions, and what is said of the recording."""
    with lake.built(attention_sustained_run_s=3.0) as build:
        assert build.check() == []
        (day,) = build.frame("wear_days").rows(named=True)
        (reviewed,) = build.frame("reviewed").rows(named=True)
        listed = set(build.frame("attention")["attention_code"])
        episodes = build.frame("episodes")
    names = ("couplets", "runs", "pauses", "longest_run_beats", "longest_pause_ms", "v_beats", "all_beats",
             "mean_rate_bpm")  # fmt: skip
    return {name: day[name] for name in names} | {"reviewed": reviewed, "listed": listed, "episodes": episodes}


def test_a_rejected_run_is_not_counted(with_runs: Any) -> None:
    """Counts, longest run and attention leave out what a reader rejects, met by its instant; its beats stay V."""
    reject(with_runs, "A", {("run", 20): "accept", ("run", 60): "reject", ("pause", 109): "reject"})
    found = counted(with_runs)
    assert (found["runs"], found["longest_run_beats"], found["couplets"], found["pauses"]) == (1, 3, 1, 0)
    assert (found["longest_pause_ms"], found["v_beats"]) == (None, 14)
    assert found["reviewed"]["rejected_episodes"] == 2
    assert "sustained_run" not in found["listed"]
    left_out = found["episodes"].filter(~pl.col("is_counted"))
    assert (left_out.height, left_out["is_automatic"].any()) == (2, False)  # no automatic episodes were landed


def test_a_run_on_which_readers_differ_stays(with_runs: Any) -> None:
    """Only what every reader of it rejects is left out."""
    reject(with_runs, "A", {("run", 20): "reject", ("run", 60): "reject"})
    reject(with_runs, "B", {("run", 20): "reject", ("run", 60): "accept"})
    found = counted(with_runs)
    assert (found["runs"], found["longest_run_beats"], found["reviewed"]["rejected_episodes"]) == (1, 9, 1)
    assert "sustained_run" in found["listed"]


def relabel(lake: Any, decided: dict[int, str]) -> None:
    """Land decisions on single beats by their number."""
    row = {"delivery_id": "D1", "recording_id": "R1", "read_fingerprint": "f1", "reader_code": "A"}
    row |= {"reviewed_utc": NOON, "segment": 0, "automatic_class": "V"}
    beats = [
        row | {"sample": number, "decision": decision, "beat_utc": START + timedelta(seconds=lake.at_s[number])}
        for number, decision in decided.items()
    ]
    lake.land("reviews", "D1", beats)
    one = {name: row[name] for name in ("delivery_id", "recording_id", "read_fingerprint", "reader_code")}
    one |= {"reviewed_utc": NOON, "decision_order": 0, "decision_subject": "note", "note": "read"}
    lake.land("decisions", "D1", [one])


def test_couplets_and_runs_follow_from_the_decided_classes(with_runs: Any) -> None:
    """A V called N shortens its run to a couplet or divides it; a V between two V makes a run of them."""
    relabel(with_runs, {20: "N", 64: "N", 102: "V"})
    found = counted(with_runs)
    # Source: by hand; run of 3 -> couplet, run of 9 -> two runs of 4, couplet and one more -> run of 3
    assert (found["couplets"], found["runs"], found["longest_run_beats"]) == (1, 3, 4)
    assert (found["reviewed"]["runs"], found["reviewed"]["couplets"]) == (3, 1)


def test_intervals_join_where_a_reader_sees_noise(with_runs: Any) -> None:
    """A beat that is none leaves a longer interval behind, here a pause, and no gap in the mean rate."""
    relabel(with_runs, {5: "noise", 6: "noise"})
    found = counted(with_runs)
    # Source: by hand; three intervals of 1 s become one of 3 s, 119 intervals 117
    assert (found["pauses"], found["all_beats"]) == (2, 118)
    assert found["mean_rate_bpm"] == pytest.approx(60 * 117 / with_runs.at_s[-1])


def test_a_family_of_different_shapes_leaves_the_burden_open(with_runs: Any) -> None:
    """A family marked as mixed is listed with its undecided beats and the burden's bounds; relabelled beats are decided."""
    relabel(with_runs, {20: "N", 21: "V"})
    mark = {
        "delivery_id": "D2", "decision_order": 0, "recording_id": "R1", "read_fingerprint": "f1", "reader_code": "A",
        "reviewed_utc": NOON, "decision_subject": "family", "family": 1, "is_mixed": True,
    }  # fmt: skip
    with_runs.land("decisions", "D2", [mark])
    with with_runs.built() as build:
        (family,) = build.frame("undecided_families").rows(named=True)
        (found,) = build.frame("reviewed").rows(named=True)
    # Source: by hand; 14 V of 120 beats of the family, two of them decided
    assert (family["undecided_v_beats"], family["undecided_other_beats"]) == (12, 106)
    assert found["undecided_families"] == 1
    assert found["v_burden_least_pct"] == pytest.approx(100 * 1 / 120)
    assert found["v_burden_most_pct"] == pytest.approx(100 * 119 / 120)


def split(lake: Any, parts: dict[str, str], reader: str = "A") -> None:
    """Land that a reader splits family 1 and decides these parts of it."""
    word = {
        "delivery_id": f"S{reader}", "recording_id": "R1", "read_fingerprint": "f1", "reader_code": reader,
        "reviewed_utc": NOON, "family": 1,
    }  # fmt: skip
    whole = word | {"decision_order": 0, "decision_subject": "family", "is_mixed": True}
    decided = [
        word | {"decision_order": order, "decision_subject": "part", "automatic_class": found, "decision": decision}
        for order, (found, decision) in enumerate(parts.items(), start=1)
    ]
    lake.land("decisions", f"S{reader}", [whole, *decided])


@pytest.mark.parametrize(
    ("parts", "v_open", "others_open"),
    [({}, 14, 106), ({"N": "accept"}, 14, 0), ({"N": "accept", "V": "accept"}, 0, 0)],
)
def test_decided_parts_close_a_split_family(
    with_runs: Any, parts: dict[str, str], v_open: int, others_open: int
) -> None:
    """What is undecided of a split family shrinks with each part decided, accepted normal beats included."""
    split(with_runs, parts)
    with with_runs.built() as build:
        assert build.check() == []
        rows = build.frame("undecided_families").rows(named=True)
        (found,) = build.frame("reviewed").rows(named=True)
    # V beats that were accepted have rows of their own; here they do not, so the parts alone close the family
    assert [(row["undecided_v_beats"], row["undecided_other_beats"]) for row in rows] == (
        [(v_open, others_open)] if v_open or others_open else []
    )
    assert found["undecided_families"] == len(rows)


def test_readers_who_decide_a_part_differently_are_listed(with_runs: Any) -> None:
    """Two readers who split a family alike and call one part differently are a conflict on that part."""
    split(with_runs, {"N": "accept", "V": "S"})
    split(with_runs, {"N": "N", "V": "F"}, reader="B")
    with with_runs.built() as build:
        assert build.check() == []
        (conflict,) = build.frame("reader_conflicts").rows(named=True)
    assert (conflict["decision_subject"], conflict["part_class"]) == ("part", "V")
    assert (conflict["decision"], conflict["other_decision"]) == ("S", "F")


def test_a_reader_who_accepts_normal_beats_differs_from_one_who_relabels_them(with_runs: Any) -> None:
    """Accepted normal beats have no rows, yet where another reader calls them V they keep the automatic class."""
    relabel(with_runs, {1: "V", 3: "V"})
    assert counted(with_runs)["v_beats"] == 16
    families(with_runs, "B", {1: ("accept", 120)})
    assert counted(with_runs)["v_beats"] == 14


def test_a_withdrawn_decision_leaves_the_other_reader_alone(read: Any) -> None:
    """Once one of two readers withdraws, the other's decision holds, and there is no conflict any more."""
    review(read, "D1", {0: "N", 10: "N"}, hour=9)
    review(read, "D2", {0: "S"}, hour=10, reader="B")
    assert reviewed(read)["v_beats"] == 9
    review(read, "D3", {0: "withdraw"}, hour=11, reader="B")
    found = reviewed(read)
    assert (found["v_beats"], found["unmet_decisions"]) == (8, 0)
    review(read, "D4", {0: "withdraw", 10: "withdraw"}, hour=12)
    assert (reviewed(read)["v_beats"], reviewed(read)["decided_beats"]) == (10, 0)


def test_a_withdrawn_rejection_counts_again(with_runs: Any) -> None:
    """An episode whose rejection is withdrawn counts as before."""
    reject(with_runs, "A", {("run", 20): "reject"})
    assert counted(with_runs)["runs"] == 1
    reject(with_runs, "A", {("run", 20): "withdraw"})
    assert counted(with_runs)["runs"] == 2


def test_decisions_that_meet_nothing_are_listed_with_the_reason(with_runs: Any) -> None:
    """Beats, runs and pauses that the analysis does not have are named, with reader, time and why; met ones are not."""
    reject(
        with_runs,
        "A",
        {("run", 20): "reject", ("run", 40): "reject", ("pause", 60): "accept", ("pause", 40): "withdraw"},
    )
    review(with_runs, "D1", {0: "N", 500: "V", 2000: "N"}, hour=9, reader="B")
    with with_runs.built() as build:
        assert build.check() == []
        rows = build.frame("unmet_decisions").rows(named=True)
        (found,) = build.frame("reviewed").rows(named=True)
    assert found["unmet_decisions"] == 4
    told = {
        (row["episode_kind"] or row["decision_subject"], row["reader_code"], row["decision"]): row["reason"]
        for row in rows
    }
    assert {key: reason.split()[-2] for key, reason in told.items()} == {
        ("run", "A", "reject"): "150", ("pause", "A", "accept"): "150", ("beat", "B", "V"): "150", ("beat", "B", "N"): "any",
    }  # fmt: skip
    gone = next(row for row in rows if row["decision"] == "N")
    # Source: the recording lasts 15 minutes, the beat was decided at 2,000 s
    assert gone["start_utc"] == START + timedelta(seconds=2000)
    assert gone["reason"] == "The recording has no signal at this time any more."


def families(lake: Any, reader: str, decided: dict[int, tuple[str, int]]) -> None:
    """Land decisions on whole families: number -> class and beats."""
    rows = [
        {
            "delivery_id": f"D{reader}", "decision_order": order, "recording_id": "R1", "read_fingerprint": "f1",
            "reader_code": reader, "reviewed_utc": NOON, "decision_subject": "family", "family": family,
            "automatic_class": "V", "beat_count": beats, "decision": decision,
        }
        for order, (family, (decision, beats)) in enumerate(decided.items())
    ]  # fmt: skip
    lake.land("decisions", f"D{reader}", rows)


def test_readers_who_differ_are_listed(read: Any) -> None:
    """A family that two readers call differently is a conflict; an accepted class is the automatic one."""
    families(read, "A", {1: ("accept", 60), 2: ("N", 40), 3: ("V", 5)})
    families(read, "B", {1: ("V", 60), 2: ("S", 40)})
    with read.built() as build:
        assert build.check() == []
        (conflict,) = build.frame("reader_conflicts").rows(named=True)
    assert (conflict["family"], conflict["decision"], conflict["other_decision"]) == (2, "N", "S")


def test_agreement_is_cohens_kappa_over_beats(read: Any) -> None:
    """Kappa counts every beat of a family that both readers decided."""
    inter_rater = pytest.importorskip("statsmodels.stats.inter_rater", reason="statsmodels is not installed")
    families(read, "A", {1: ("accept", 60), 2: ("N", 40), 3: ("V", 30), 4: ("S", 10), 5: ("V", 99)})
    families(read, "B", {1: ("V", 60), 2: ("S", 40), 3: ("V", 30), 4: ("S", 10)})
    with read.built() as build:
        (found,) = build.frame("reader_agreement").rows(named=True)
    # rows: reader A says N, S, V; columns: reader B
    table = [[0, 40, 0], [0, 10, 0], [0, 0, 90]]
    # Source: statsmodels, cohens_kappa
    assert found["kappa"] == pytest.approx(inter_rater.cohens_kappa(table).kappa, abs=1e-12)
    assert (found["beats_in_common"], found["agreed_pct"]) == (140, pytest.approx(100 * 100 / 140))


def test_readers_of_one_class_have_no_kappa(read: Any) -> None:
    """Where both readers call everything V, chance explains the agreement and kappa is not defined."""
    families(read, "A", {1: ("V", 60)})
    families(read, "B", {1: ("V", 60)})
    with read.built() as build:
        (found,) = build.frame("reader_agreement").rows(named=True)
    assert (found["agreed_pct"], found["kappa"]) == (100, None)
