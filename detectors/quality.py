"""Which time is analysable: flat, rail, missing, lead-off and noisy stretches.

Noise is the product of two measures that look at different things: the slope energy between the beats, over that of the
recording's own quiet time, and how much farther than there the beats lie from the shapes of their families. Slope that
leaves the beats readable harms nothing, and odd beats in quiet time are arrhythmia, not noise. The limit is ours, set on
recordings with added noise; fixed limits do not carry over between recordings (J R Soc Interface 2022;19:20220012), so
both measures are relative.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from detectors import qrs
from detectors.chunks import Blocks
from detectors.results import QUALITY_REASONS, QualityWindows
from detectors.signal import WORKING_FS_HZ

REACH_BLOCKS = 2  # either side: 7.7 s in all
QUIET_PERCENTILE = 25
NOISY = 0.06  # times quiet noise, times distance beyond the quiet one
SUSPECT = NOISY / 2  # enough against beats whose shape lives in noise
MOST_QUIET_DISTANCE = 0.04  # more is noise throughout the recording, not its usual scatter
DISTANCE_CAP = 0.3  # one beat without any known shape must not condemn its neighbours
MARGIN_BLOCKS = 1  # noise begins and ends somewhere in the means of its first and last blocks
LEAD_OFF = 0.15  # of the recording's usual QRS level


class Seen(NamedTuple):
    """Blocks and beats of one segment, as quality needs them."""

    n_samples: int
    blocks: Blocks
    distance: NDArray[np.float32]  # shape (n_blocks,), sum over beats of 1 - correlation with the most similar family
    n_beats: NDArray[np.int16]  # shape (n_blocks,)


class Quiet(NamedTuple):
    """What is usual in a recording."""

    noise: float  # over the QRS level, in quiet time
    distance: float  # mean of the beats, in quiet time
    level: float  # of the QRS


def look(n_samples: int, blocks: Blocks, working: NDArray[np.float64], likeness: NDArray[np.float32]) -> Seen:
    """What quality keeps of one segment: its blocks, its beats per block, and how far they lie from their families."""
    n_blocks = blocks.noise.size
    block = working.astype(np.int64)
    block //= qrs.BLOCK
    np.minimum(block, n_blocks - 1, out=block)
    distance = np.bincount(block, np.minimum(1 - likeness, DISTANCE_CAP), n_blocks)
    n_beats = np.bincount(block, minlength=n_blocks)
    return Seen(n_samples, blocks, distance.astype(np.float32), n_beats.astype(np.int16))


def windows(seen: list[Seen], fs_hz: float, noisy: float = NOISY) -> QualityWindows:
    """Stretches of all segments that are not analysable, each with its reason; a lower `noisy` finds suspect time."""
    quiet = _quiet(seen)
    parts = [_stretches(_reasons(one, quiet, noisy), one.n_samples, fs_hz) for one in seen]
    number = np.repeat(np.arange(len(parts)), [reason.size for _, _, reason in parts])
    first, last, reason = (np.concatenate(column) for column in zip(*parts, strict=True)) if parts else _NOTHING
    return QualityWindows(number.astype(np.int16), first, last, reason)


_NOTHING = (np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64), np.empty(0, dtype="<U8"))


def analysable_s(n_samples: int, bad: QualityWindows, fs_hz: float) -> float:
    """Seconds of `n_samples` outside all bad windows."""
    return (n_samples - int((bad.last_sample - bad.first_sample + 1).sum())) / fs_hz


def _quiet(seen: list[Seen]) -> Quiet:
    level = np.concatenate([one.blocks.level for one in seen]) if seen else np.empty(0)
    level = level[np.isfinite(level)]
    distance = _low([_near_distance(one) for one in seen])
    return Quiet(
        _low([_near_noise(one) for one in seen]),
        min(distance, MOST_QUIET_DISTANCE),
        float(np.median(level)) if level.size else 0.0,
    )


def _low(parts: list[NDArray[np.float64]]) -> float:
    """Lower quartile of the known values of all segments, infinite where none is known."""
    values = np.concatenate(parts) if parts else np.empty(0)
    values = values[~np.isnan(values)]
    return float(np.percentile(values, QUIET_PERCENTILE)) if values.size else np.inf


def _near_noise(one: Seen) -> NDArray[np.float64]:
    """Noise over the QRS level, mean of the blocks near by, NaN where nothing is known."""
    with np.errstate(divide="ignore", invalid="ignore"):  # silence has no level
        noise = one.blocks.noise / one.blocks.level
    known = np.isfinite(noise)
    return _near_mean(np.where(known, noise, 0), known)


def _near_distance(one: Seen) -> NDArray[np.float64]:
    """Mean distance of the beats near by from their families, NaN where there is none."""
    return _near_mean(one.distance, one.n_beats)


def _near_mean(total: NDArray[np.floating], count: NDArray[np.integer | np.bool_]) -> NDArray[np.float64]:
    near, known = _near_sum(total), _near_sum(count)
    return np.divide(near, known, out=np.full(known.size, np.nan), where=known > 0)


def _near_sum(values: NDArray[np.generic], reach: int = REACH_BLOCKS) -> NDArray[np.float64]:
    """Sum of the values within `reach` blocks of each block, shape (n_blocks,)."""
    total = np.zeros(values.size + 2 * reach + 1)
    np.cumsum(values, out=total[reach + 1 : reach + 1 + values.size])
    total[reach + 1 + values.size :] = total[reach + values.size]
    return total[2 * reach + 1 :] - total[: values.size]


def _reasons(one: Seen, quiet: Quiet, noisy: float) -> NDArray[np.int8]:
    """Reason per block why it is not analysable, index into QUALITY_REASONS, -1 when it is."""
    blocks = one.blocks
    if blocks.noise.size == 0:
        return np.empty(0, dtype=np.int8)
    is_noisy = _near_noise(one) * (_near_distance(one) - quiet.distance) > noisy * quiet.noise
    reason = np.full(blocks.noise.size, -1, dtype=np.int8)
    reason[_near_sum(is_noisy, MARGIN_BLOCKS) > 0] = QUALITY_REASONS.index("noise")
    has_qrs = (blocks.level >= LEAD_OFF * quiet.level) & np.isfinite(blocks.level) & ~blocks.is_dropped
    reason[~has_qrs] = QUALITY_REASONS.index("lead_off")
    reason[blocks.is_flat] = QUALITY_REASONS.index("flat")
    reason[blocks.is_rail] = QUALITY_REASONS.index("rail")
    reason[blocks.is_missing] = QUALITY_REASONS.index("missing")
    return reason


def _stretches(
    reason: NDArray[np.int8], n_samples: int, fs_hz: float
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.str_]]:
    """First sample, last sample and reason of every stretch of equal reason."""
    if reason.size == 0:  # shorter than one working sample
        return (*np.array([[0], [n_samples - 1]])[:, : int(n_samples > 0)], np.full(int(n_samples > 0), "missing"))
    edge = np.concatenate([[0], np.flatnonzero(np.diff(reason)) + 1, [reason.size]])
    sample = np.minimum(np.ceil(edge * qrs.BLOCK * fs_hz / WORKING_FS_HZ).astype(np.int64), n_samples)
    sample[-1] = n_samples
    code = reason[edge[:-1]]
    is_bad = code >= 0
    return sample[:-1][is_bad], sample[1:][is_bad] - 1, np.array(QUALITY_REASONS)[code[is_bad]]


def with_noise(
    bad: QualityWindows, segment: NDArray[np.int16], first: NDArray[np.int64], last: NDArray[np.int64]
) -> QualityWindows:
    """The windows and the spans from `first` to `last` as noise; spans do not overlap; bad time keeps its reason."""
    rows = list(zip(*bad, strict=True))
    for number, begin, end in zip(segment, first, last, strict=True):
        overlaps = (bad.segment == number) & (bad.last_sample >= begin) & (bad.first_sample <= end)
        for known_first, known_last in [
            *zip(bad.first_sample[overlaps], bad.last_sample[overlaps], strict=True),
            (end + 1, end + 1),
        ]:
            if begin < known_first:
                rows.append((number, begin, min(known_first - 1, end), "noise"))
            begin = max(begin, known_last + 1)
    rows.sort(key=lambda row: row[:2])
    columns = list(zip(*rows, strict=True)) or [()] * len(bad)
    return QualityWindows(
        np.array(columns[0], dtype=np.int16),
        np.array(columns[1], dtype=np.int64),
        np.array(columns[2], dtype=np.int64),
        np.array(columns[3], dtype=bad.quality_reason.dtype),
    )


def is_outside(bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.bool_]:
    """True for every beat that lies in no bad window, shape (n_beats,)."""
    outside = np.ones(sample.size, dtype=bool)
    for begin, end in zip(*_beats_between(bad, segment, sample), strict=True):
        outside[begin:end] = False
    return outside


def has_gap_before(bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]) -> NDArray[np.bool_]:
    """True where a window without signal lies between a beat and the one before it, shape (n_beats,)."""
    silent = QualityWindows(*(column[bad.quality_reason != "noise"] for column in bad))
    _, first_after = _beats_between(silent, segment, sample)
    has_gap = np.zeros(sample.size, dtype=bool)
    has_gap[first_after[first_after < sample.size]] = True
    return has_gap


def _beats_between(
    bad: QualityWindows, segment: NDArray[np.int16], sample: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First beat in each window and first beat after it, as rows of the ordered beats."""
    begin, end = np.empty((2, bad.segment.size), dtype=np.int64)
    edges = np.searchsorted(segment, np.arange(int(segment[-1]) + 2)) if segment.size else np.zeros(1, dtype=np.int64)
    for row, number in enumerate(np.minimum(bad.segment, edges.size - 1)):
        low, high = edges[number], edges[min(number + 1, edges.size - 1)]
        begin[row], end[row] = low + np.searchsorted(
            sample[low:high], [bad.first_sample[row], bad.last_sample[row] + 1]
        )
    return begin, end
