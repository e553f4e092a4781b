"""The strip as an image: read back, it has the grid, the trace and the letters where paper has them."""

import io

import numpy as np
import PIL.Image
import polars as pl

from dashboards.strip_file import CALIBRATION_ROOM, TOP
from dashboards.strip_image import COARSE, FINE, INK, PAPER, render
from dashboards.strips import draw_strips

FS_HZ = 250.0


def drawn(samples_mv: list[float], beats: tuple[int, ...] = ()) -> tuple[np.ndarray, int]:
    """Pixels of a strip, shape (height, width, 3), and the row of its 0 mV line."""
    row = {
        "recording_id": "R1", "strip_reason": "longest run", "start_utc": "2026-03-01 08:00:00", "fs_hz": FS_HZ,
        "samples_mv": samples_mv, "beat_samples": list(beats), "beat_classes": ["V"] * len(beats),
    }  # fmt: skip
    (drawing,) = draw_strips(pl.DataFrame([row]))
    image = PIL.Image.open(io.BytesIO(render(row, drawing, ["a caution"])))
    return np.asarray(image.convert("RGB")), TOP + drawing.zero_y


def where(pixels: np.ndarray, colour: str) -> np.ndarray:
    """Tell where pixels have a colour, shape (height, width)."""
    return (pixels == [int(colour[a : a + 2], 16) for a in (1, 3, 5)]).all(axis=2)


def test_the_grid_has_a_line_a_millimetre_and_a_darker_one_every_five() -> None:
    """At a dot every 0.1 mm lines stand 10 and 50 dots apart (common practice for paper ECG)."""
    pixels, zero_y = drawn([0.0] * 500)
    along = pixels[zero_y - 35 : zero_y - 34]  # between two lines across
    assert np.flatnonzero(where(along, COARSE)).tolist() == list(range(CALIBRATION_ROOM, CALIBRATION_ROOM + 500, 50))
    fine = np.flatnonzero(where(along, FINE))
    assert fine.tolist() == [
        x for x in range(CALIBRATION_ROOM, CALIBRATION_ROOM + 500, 10) if (x - CALIBRATION_ROOM) % 50
    ]


def test_a_millivolt_is_ten_millimetres_and_a_second_twenty_five() -> None:
    """A step of 1 mV after 1 s of 3 s is 250 dots from the begin and 100 dots high; the calibration pulse is as high."""
    pixels, zero_y = drawn([0.0] * 250 + [1.0] * 200 + [0.0] * 300)
    ink = where(pixels, INK)
    rise = CALIBRATION_ROOM + 250
    assert ink[zero_y, rise - 100] and ink[zero_y, rise + 300]
    assert ink[zero_y - 100, rise + 100] and not ink[zero_y, rise + 100]
    assert ink[zero_y - 100, 40] and not ink[zero_y, 40]


def test_letters_stand_above_their_beats_and_text_below_the_trace() -> None:
    """The class letter is centred on its beat; without a beat there is none; the caution stands below."""
    with_beat, _ = drawn([0.0] * 500, beats=(250,))
    without, _ = drawn([0.0] * 500)
    place = np.s_[TOP + 5 : TOP + 45, CALIBRATION_ROOM + 235 : CALIBRATION_ROOM + 265]
    assert where(with_beat[place], INK).any()
    assert not where(without[place], INK).any()
    assert not where(without[-60:], PAPER).all()
