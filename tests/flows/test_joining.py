"""Parts of a wear in time: seams, gaps, overlaps, clock changes and drift, on arrays and instants alone."""

from datetime import datetime, timedelta
from fractions import Fraction
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from flows.arrivals.clocks import offset_at, possible_utc
from flows.arrivals.joining import arrange
from flows.arrivals.placing import DeliveredPart, Misfit, Piece, from_ns, to_ns

FS_HZ = 100
HOUR = 3600 * FS_HZ
NOISE = np.random.default_rng(5).integers(-900, 900, 30 * HOUR).astype(np.int16)


def part(name, start, samples, *, zone="UTC", rate=Fraction(FS_HZ), end_s=None, likeness=("ECG", 0.005)):
    """A delivery with one piece; `start` is a local wall clock text."""
    starts = possible_utc(datetime.fromisoformat(start), zone)
    return DeliveredPart(
        delivery_id=name,
        possible_starts_ns=tuple(to_ns(instant) for instant in starts),
        wall_clock_ns=to_ns(datetime.fromisoformat(start)),
        resolution_ms=1000,
        rate=rate,
        pieces=(Piece(0, len(samples)),),
        end_offset_ns=round(end_s * 1e9) if end_s is not None else None,
        likeness=likeness,
        read=lambda piece, a, b: samples[a:b],
    )


def taken(arrangement):
    """Segments as (start, samples) for comparison."""
    return [(str(from_ns(segment.start_ns)), segment.n_samples) for segment in arrangement.segments]


def codes(arrangement):
    return {name: [found.code for found in findings] for name, findings in arrangement.findings.items()}


def test_hourly_parts_make_one_segment_and_a_missing_one_a_gap():
    """Twenty-four truncated hourly parts in any order, one missing, are two segments with an hour between."""
    parts = [
        part(f"h{n:02}", f"2026-03-01 {n:02}:00:00", NOISE[n * HOUR : (n + 1) * HOUR]) for n in range(24) if n != 7
    ]
    arrangement = arrange([parts[n] for n in np.random.default_rng(3).permutation(len(parts))], "UTC")
    assert taken(arrangement) == [("2026-03-01 00:00:00", 7 * HOUR), ("2026-03-01 08:00:00", 16 * HOUR)]


@pytest.mark.parametrize(("seconds_late", "segments"), [(-1.4, 1), (1.4, 1), (2.1, 1), (2.3, 2), (60, 2)])
def test_seam_tolerance(seconds_late, segments):
    """A part within 1.5 s plus 200 ppm of the hour before follows on; a later one begins a segment."""
    # 200 ppm of 3,600 s are 0.72 s. Source: common practice, no source
    second = to_ns(datetime.fromisoformat("2026-03-01T01:00")) + round(seconds_late * 1e9)
    parts = [
        part("a", "2026-03-01 00:00:00", NOISE[:HOUR]),
        part("b", str(from_ns(second)), NOISE[HOUR : 2 * HOUR]),
    ]
    assert len(arrange(parts, "UTC").segments) == segments


@pytest.mark.parametrize("held_s", [10, 30, 3599, 3600])
@pytest.mark.parametrize("stamp_error_s", [-1, 0, 1])
def test_equal_overlap_is_taken_once(held_s, stamp_error_s):
    """Samples that both parts hold count once, although the stamps are off by a second."""
    first = HOUR - held_s * FS_HZ
    start = datetime.fromisoformat("2026-03-01T01:00")
    parts = [
        part("a", "2026-03-01 00:00:00", NOISE[:HOUR]),
        part("b", str(from_ns(to_ns(start) + (stamp_error_s - held_s) * 1_000_000_000)), NOISE[first : first + HOUR]),
    ]
    arrangement = arrange(parts, "UTC")
    assert [segment.n_samples for segment in arrangement.segments] == [first + HOUR if held_s < 3600 else HOUR]
    assert list(codes(arrangement).values()) == [["overlap_trimmed"]]


def test_other_samples_in_the_overlap_refuse_the_later_arrival():
    """Of two parts that fill the same time differently the one that arrived later is refused."""
    parts = [
        part("late", "2026-03-01 00:30:00", NOISE[5 * HOUR : 6 * HOUR]),
        part("early", "2026-03-01 00:00:00", NOISE[:HOUR]),
    ]
    with pytest.raises(Misfit) as misfit:
        arrange(parts, "UTC")
    assert (misfit.value.delivery_ids, misfit.value.reason.code) == (("early",), "overlap_with_other_samples")


def test_other_rate_or_scale_is_refused():
    """Parts of one wear have one rate, lead and scale."""
    for odd in ({"rate": Fraction(200)}, {"likeness": ("V1", 0.005)}):
        with pytest.raises(Misfit) as misfit:
            arrange(
                [part("a", "2026-03-01 00:00", NOISE[:99]), part("b", "2026-03-02 00:00", NOISE[:99], **odd)], "UTC"
            )
        assert (misfit.value.delivery_ids, misfit.value.reason.code) == (("b",), "does_not_fit_recording")


@pytest.mark.parametrize("alone", [True, False])
def test_hour_that_happened_twice(alone):
    """A start at 02:30 on 25 October in Berlin is settled by the part it follows, and refused alone."""
    before = part("a", "2026-10-25 01:30:00", NOISE[:HOUR], zone="Europe/Berlin")
    middle = part("b", "2026-10-25 02:30:00", NOISE[HOUR : 2 * HOUR], zone="Europe/Berlin")
    after = part("c", "2026-10-25 02:30:00", NOISE[2 * HOUR : 3 * HOUR], zone="Europe/Berlin")
    if alone:
        with pytest.raises(Misfit) as misfit:
            arrange([middle], "Europe/Berlin")
        assert misfit.value.reason.code == "local_time_ambiguous"
    else:
        # Source: tz database, Europe/Berlin leaves summer time on 2026-10-25 at 01:00 UTC
        arrangement = arrange([before, middle], "Europe/Berlin")
        assert taken(arrangement) == [("2026-10-24 23:30:00", 2 * HOUR)]
        later = part("d", "2026-10-25 03:30:00", NOISE[3 * HOUR : 4 * HOUR], zone="Europe/Berlin")
        arrangement = arrange([later, after], "Europe/Berlin")
        assert taken(arrangement) == [("2026-10-25 01:30:00", 2 * HOUR)]


def test_two_parts_for_one_place_in_a_doubled_hour_are_refused():
    """Two hourly parts that both say 02:00 on 25 October cannot be told apart, so neither is placed."""
    parts = [
        part("a", "2026-10-25 01:00:00", NOISE[:HOUR], zone="Europe/Berlin"),
        part("b", "2026-10-25 02:00:00", NOISE[HOUR : 2 * HOUR], zone="Europe/Berlin"),
        part("c", "2026-10-25 02:00:00", NOISE[2 * HOUR : 3 * HOUR], zone="Europe/Berlin"),
    ]
    with pytest.raises(Misfit) as misfit:
        arrange(parts, "Europe/Berlin")
    assert misfit.value.reason.code == "local_time_ambiguous"
    assert misfit.value.delivery_ids == ("b", "c")


@pytest.mark.parametrize(
    ("zone", "first", "utc"),
    [
        ("Europe/Berlin", "2026-03-28 12:00:00", "2026-03-28 11:00:00"),
        ("Europe/Berlin", "2026-10-24 12:00:00", "2026-10-24 10:00:00"),
        ("America/New_York", "2026-03-07 12:00:00", "2026-03-07 17:00:00"),
    ],
)
@pytest.mark.parametrize("follows", [True, False])
def test_device_clock_across_a_clock_change(zone, first, utc, follows):
    """Two-hourly parts over a clock change are one segment, whether or not the device clock was changed."""
    step = 2 * HOUR
    begin = possible_utc(datetime.fromisoformat(first), zone)[0]
    parts = []
    for n in range(12):
        instant = begin + n * timedelta(hours=2)
        shown = instant + offset_at(instant if follows else begin, zone)
        parts.append(part(f"p{n:02}", str(shown), NOISE[n * step : (n + 1) * step], zone=zone))
    arrangement = arrange(parts, zone)
    # Source: tz database, clock changes of 2026
    assert taken(arrangement) == [(utc, 12 * step)]
    assert ("clock_not_changed" in {code for found in codes(arrangement).values() for code in found}) is not follows


def test_drift_of_the_sample_clock_is_corrected_and_said():
    """A day of samples that ends 4.32 s late by the device's stamps gives the stamped rate."""
    day = part("a", "2026-03-01 00:00:00", NOISE[: 24 * HOUR], end_s=24 * 3600 + 4.32)
    arrangement = arrange([day], "UTC")
    # Definition: 50 ppm of 86,400 s are 4.32 s
    assert arrangement.fs_hz == pytest.approx(FS_HZ / (1 + 50e-6), rel=1e-9)
    assert codes(arrangement) == {"a": ["clock_drift"]}


def test_whole_second_stamps_are_no_drift():
    """Stamps that are off by their own rounding leave the nominal rate."""
    day = part("a", "2026-03-01 00:00:00", NOISE[: 24 * HOUR], end_s=24 * 3600 + 1.5)
    assert arrange([day], "UTC").fs_hz == FS_HZ


@given(
    cuts=st.lists(st.integers(1, 20 * 6000 - 1), max_size=6, unique=True),
    order=st.randoms(use_true_random=False),
    early=st.integers(0, 2000),
)
def test_parts_of_a_cut_recording_give_it_back(cuts, order, early):
    """However a recording is cut, shuffled and overlapped by equal samples, its samples come back once each."""
    whole = NOISE[: 20 * 6000]
    borders = [0, *sorted(cut // 100 * 100 for cut in cuts), len(whole)]
    parts = []
    for n, (a, b) in enumerate(pairwise(borders)):
        first = max(a - early // 100 * 100, 0)
        if b > a:
            start = from_ns(to_ns(datetime.fromisoformat("2026-03-01")) + first // 100 * 1_000_000_000)
            parts.append(part(f"p{n}", str(start), whole[first:b]))
    order.shuffle(parts)
    arrangement = arrange(parts, "UTC")
    by_id = {each.delivery_id: each for each in parts}
    (segment,) = arrangement.segments
    joined = np.concatenate([by_id[s.delivery_id].read(s.piece, s.first, s.last) for s in segment.spans])
    assert np.array_equal(joined, whole)
