"""An invented programme: a network of clinics on an invented coast, its patients, patches and therapies.

Nobody in it exists. The signals come from `detectors.synthetic` and are written as EDF+ files, so that everything
after the inbox is the real job. To save power, the patches of the story store 45 minutes in every 3 hours, an hour
later each day, so that three days cover the clock. That keeps the demo short and makes each file an EDF+D of many
segments.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import NamedTuple

import numpy as np

from detectors import synthetic
from detectors.synthetic import Hour, Noise, Rhythm
from flows.edf_write import EdfHeader, Mark, Piece, write_edf
from flows.programme import make_folder

SEED = 2026
NAME = "Saltmarsh Coast Clinics (invented)"
ZONE = "Europe/Lisbon"
MIN_ANALYSABLE_H_PER_DAY = 3.0  # a full day of the story's patches holds 6 hours
WINDOW_S = 2700
WINDOWS_PER_DAY = 8

_FIRST_DAY = datetime.fromisoformat("2026-02-02")  # days of the story are local days
_WEAR_BEGINS_H = 10  # o'clock
_WORN = Noise(lead_off_per_h=0.15)


class Press(NamedTuple):
    """The patient presses the button of the patch: so long after the first window of a day of the wear begins."""

    day: int
    minute: float
    text: str


class Wear(NamedTuple):
    """One patch on one patient: from 10:00 of a day of the story."""

    day: int
    days: int
    rhythm: Rhythm
    nights: bool = True  # False: taken off from 22:00 to 7:00
    presses: tuple[Press, ...] = ()


class Therapy(NamedTuple):
    """One row of therapies.csv."""

    day: int
    kind: str
    detail: str


class Patient(NamedTuple):
    """One invented patient and what the demo shows with them."""

    code: str
    shows: str
    wears: tuple[Wear, ...]
    therapies: tuple[Therapy, ...] = ()
    zone: str = ""
    fs_hz: int = 125


def story() -> tuple[Patient, ...]:
    """The invented patients, in the order of the register."""
    calm = Rhythm(run_share=0.0)
    one_focus = calm._replace(v_share_pct=14.0, rate_bpm=76)
    fluctuating = calm._replace(v_share_pct=8.0, v_day_sd=0.55, v_family_weights=(0.0, 1.0), rate_bpm=70)
    outflow = calm._replace(v_share_pct=22.0, v_family_weights=(0.95, 0.0, 0.05), rate_bpm=68)
    recurring = Rhythm(v_share_pct=18.0, v_family_weights=(0.0, 0.9, 0.1), couplet_share=0.12, run_share=0.03)
    short_wear = calm._replace(v_share_pct=11.0, v_family_weights=(0.5, 0.5), rate_bpm=80)
    slowed = calm._replace(v_share_pct=9.0, v_family_weights=(0.0, 0.0, 1.0), rate_bpm=86, v_day_sd=0.15)
    stopped = calm._replace(v_share_pct=2.0, rate_bpm=62, v_day_sd=0.15)
    atrial = calm._replace(v_share_pct=0.4, s_share_pct=4.0, rate_bpm=74)
    medication, ablation = "medication_start", "ablation"
    before = (Press(0, 12.4, "skipped beats"), Press(2, 31.0, "button"), Press(3, 5.25, "skipped beats"))
    back_again = (Press(1, 8.5, "palpitations"), Press(4, 22.75, "palpitations, dizzy"))
    return (
        Patient("HB-101", "beta-blocker responder", (
            Wear(1, 6, one_focus, presses=before),
            Wear(18, 6, one_focus._replace(v_share_pct=2.2, rate_bpm=66)),
            Wear(52, 6, one_focus._replace(v_share_pct=1.8, rate_bpm=65)),
        ), (Therapy(8, medication, "bisoprolol 5 mg daily"),), fs_hz=250),
        Patient("HB-102", "no response, the burden only fluctuates", (
            Wear(2, 6, fluctuating), Wear(20, 6, fluctuating, nights=False),
        ), (Therapy(9, medication, "flecainide 50 mg twice daily"),)),
        Patient("HB-103", "rises after a medication is stopped", (
            Wear(3, 6, stopped), Wear(22, 6, stopped._replace(v_share_pct=9.0, rate_bpm=71)),
        ), (Therapy(10, "medication_stop", "metoprolol 50 mg daily"),)),
        Patient("LT-201", "ablation success", (
            Wear(4, 6, outflow), Wear(29, 6, outflow._replace(v_share_pct=0.4)),
            Wear(66, 6, outflow._replace(v_share_pct=0.3)),
        ), (Therapy(12, ablation, "right ventricular outflow tract"),)),
        Patient("LT-202", "early recurrence after ablation", (
            Wear(5, 6, recurring), Wear(30, 6, recurring._replace(v_share_pct=1.0)),
            Wear(51, 6, recurring._replace(v_share_pct=15.0), presses=back_again),
        ), (Therapy(13, ablation, "left ventricular summit"),)),
        Patient("DN-301", "too little wear after therapy", (
            Wear(6, 6, short_wear), Wear(26, 1, short_wear._replace(v_share_pct=4.0)),
        ), (Therapy(15, medication, "metoprolol 50 mg daily"),)),
        Patient("DN-302", "the heart rate fell, the ectopy did not", (
            Wear(7, 6, slowed), Wear(27, 6, slowed._replace(rate_bpm=62)),
        ), (Therapy(16, "dose_change", "ivabradine 5 to 7.5 mg twice daily"),), zone="Atlantic/Azores"),
        Patient("DN-303", "atrial ectopy, then an irregular rhythm; no therapy", (
            Wear(8, 5, atrial), Wear(40, 3, atrial._replace(atrial_fibrillation=True, s_share_pct=0.0),
                                     presses=(Press(1, 17.5, "heart races"),)),
        )),
    )  # fmt: skip


def make_programme(folder: Path, *, seed: int = SEED, say: Callable[[str], None] | None = None) -> None:
    """Make a programme folder with settings, register and an inbox of EDF+ files, two of which must be refused.

    The same seed gives the same bytes and file times. Raises FileExistsError when `folder` is a programme already.
    """
    make_folder(folder, NAME, ZONE)
    settings = folder / "programme.toml"
    default = "min_analysable_h_per_day = 10.0"
    text = settings.read_text(encoding="utf-8")
    settings.write_text(text.replace(default, f"min_analysable_h_per_day = {MIN_ANALYSABLE_H_PER_DAY}"), "utf-8")
    patients = story()
    _write_register(folder / "register", patients)
    for number, patient in enumerate(patients):
        if say:
            say(f"{patient.code}: {patient.shows}")
        for wear in patient.wears:
            _write_wear(folder / "inbox", patient, wear, seed_of(number, wear, seed))
    _write_refused(folder / "inbox")


def write_long_recording(path: Path, *, days: float = 14.0, fs_hz: int = 250, seed: int = 1) -> None:
    """One continuous EDF+C recording without gaps, for benchmarks; 14 days at 250 Hz are 605 MB."""
    rhythm = Rhythm(v_share_pct=8.0, v_family_weights=(0.7, 0.3), s_share_pct=0.5)
    hours = synthetic.recording(rhythm, _WORN, fs_hz=fs_hz, hours=days * 24, seed=seed)
    header = EdfHeader("HB-900", "SK9000", _FIRST_DAY, fs_hz, synthetic.MV_PER_COUNT)
    write_edf(path, header, (Piece(n * 3_600_000, hour.counts) for n, hour in enumerate(hours)))


def _serial(patient: Patient, wear: Wear) -> str:
    return f"SK{patient.code[-3:]}{wear.day:02d}"


def _start(wear: Wear) -> datetime:
    return _FIRST_DAY + timedelta(days=wear.day, hours=_WEAR_BEGINS_H)


def _write_register(register: Path, patients: tuple[Patient, ...]) -> None:
    rows: dict[str, list[str]] = {"patients.csv": [], "wears.csv": [], "therapies.csv": []}
    for patient in patients:
        rows["patients.csv"].append(f"{patient.code},{patient.zone}")
        for wear in patient.wears:
            start, end = _start(wear), _start(wear) + timedelta(days=wear.days)
            rows["wears.csv"].append(
                f"{_serial(patient, wear)},{patient.code},{start:%Y-%m-%dT%H:%M},{end:%Y-%m-%dT%H:%M},"
            )
        for number, therapy in enumerate(patient.therapies, 1):
            at = _FIRST_DAY + timedelta(days=therapy.day, hours=9)
            rows["therapies.csv"].append(
                f"{patient.code}-T{number},{patient.code},{therapy.kind},{therapy.detail},{at:%Y-%m-%dT%H:%M}"
            )
    for name, lines in rows.items():
        with (register / name).open("a", encoding="utf-8") as file:
            file.writelines(line + "\n" for line in lines)


def _write_wear(inbox: Path, patient: Patient, wear: Wear, seed: int) -> None:
    start = _start(wear)
    header = EdfHeader(
        patient.code, _serial(patient, wear), start, patient.fs_hz, synthetic.MV_PER_COUNT, has_marks=bool(wear.presses)
    )
    path = inbox / f"{header.device_serial}_{start:%Y%m%d}.edf"
    write_edf(path, header, _windows(wear, patient.fs_hz, seed))
    _set_time(path, start + timedelta(days=wear.days + 2))


def _windows(wear: Wear, fs_hz: int, seed: int) -> Iterator[Piece]:
    waiting = list(wear.presses)
    for elapsed_h, hour in true_windows(wear, fs_hz, seed):
        begin_ms = elapsed_h * 3_600_000
        pressed = [press for press in waiting if press.day == elapsed_h // 24]
        waiting = [press for press in waiting if press not in pressed]
        marks = tuple(Mark(begin_ms + round(press.minute * 60_000), press.text) for press in pressed)
        yield Piece(begin_ms, hour.counts, marks)


def true_windows(wear: Wear, fs_hz: int, seed: int) -> Iterator[tuple[int, Hour]]:
    """Hours since the start of the wear, samples and true beats of each stored window."""
    for day in range(wear.days):
        for elapsed_h in range(24 * day + day % 3, 24 * (day + 1), 24 // WINDOWS_PER_DAY):
            if not wear.nights and not 7 <= (_WEAR_BEGINS_H + elapsed_h) % 24 < 22:
                continue
            (window,) = synthetic.recording(
                wear.rhythm,
                _WORN,
                fs_hz=fs_hz,
                hours=WINDOW_S / 3600,
                start_clock_h=_WEAR_BEGINS_H + elapsed_h,
                seed=seed,
            )
            yield elapsed_h, window


def seed_of(patient_number: int, wear: Wear, seed: int = SEED) -> int:
    """Seed of one wear of the patient who stands at that place of the story."""
    return seed + 1000 * patient_number + wear.day


def _set_time(path: Path, arrived: datetime) -> None:
    """Date the file as if it had arrived then, so that two demos are the same to the last byte."""
    seconds = arrived.replace(tzinfo=UTC).timestamp()
    os.utime(path, (seconds, seconds))


def _write_refused(inbox: Path) -> None:
    """A login page saved under the name of an export, and a file whose two amplitude limits are equal."""
    page = inbox / "SK30144_20260318.edf"
    page.write_text("<!doctype html><html><title>Sign in</title><p>Your session has ended.</html>\n", encoding="utf-8")
    _set_time(page, _FIRST_DAY + timedelta(days=46))
    flat = inbox / "SK20360_20260403.edf"
    start = _FIRST_DAY + timedelta(days=60, hours=_WEAR_BEGINS_H)
    write_edf(flat, EdfHeader("LT-203", "SK20360", start, 125, 0.0), [Piece(0, np.zeros(125 * 60, np.int16))])
    _set_time(flat, start + timedelta(days=2))
