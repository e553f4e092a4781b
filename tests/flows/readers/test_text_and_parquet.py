"""Columns of numbers, as text and as Parquet: read as told, refused where it is not told."""

from datetime import datetime, timedelta
from fractions import Fraction

import numpy as np
import polars as pl
import pytest

from flows.readers.codes import Refused
from flows.readers.identify import open_delivery
from flows.readers.recording import Site, Stretch

START = datetime.fromisoformat("2026-03-01T08:30:00")


@pytest.fixture
def opened(tmp_path):
    """Function that writes text or a frame and opens it."""

    def make(content, site=Site()):
        path = tmp_path / "export"
        if isinstance(content, pl.DataFrame):
            content.write_parquet(path)
        else:
            path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return open_delivery([path], site)

    return make


def refused(opened, content, **site):
    with pytest.raises(Refused) as refusal:
        opened(content, Site(**site))
    return refusal.value.code


def codes(recording):
    return [found.code for found in recording.findings]


def millivolts(recording):
    return (recording.read(0, recording.n_samples) - recording.count_at_zero_mv) * recording.mv_per_count


def rows(values, times, separator=",", header="time,ecg_mv"):
    lines = [f"{time}{separator}{value}" for time, value in zip(times, values, strict=True)]
    return "\n".join(([header] if header else []) + lines) + "\n"


def iso_times(n, step_ms=4, gap_after=None, gap_ms=0, fmt="%Y-%m-%dT%H:%M:%S.%f"):
    shift = [gap_ms if gap_after is not None and at >= gap_after else 0 for at in range(n)]
    return [(START + timedelta(milliseconds=step_ms * at + shift[at])).strftime(fmt)[:-3] for at in range(n)]


SIGNAL = np.round(np.sin(np.arange(1000) / 9), 3)


def test_iso_times_and_millivolts(opened):
    """A plain CSV with ISO times and a unit in its heading needs no settings."""
    recording = opened(rows(SIGNAL, iso_times(1000)))
    assert recording.format == "text"
    assert recording.rate == Fraction(250)
    assert recording.start_local == START
    assert recording.stretches == (Stretch(0, 1000, 0),)
    assert np.allclose(millivolts(recording), SIGNAL, atol=1e-9)
    assert recording.lead == "ecg_mv"


def test_times_with_an_offset_are_instants(opened):
    """Times that carry their offset from UTC give the zone."""
    recording = opened(rows(SIGNAL, [f"{time}+02:00" for time in iso_times(1000)]))
    assert (str(recording.start_local), recording.zone) == ("2026-03-01 06:30:00", "UTC")


def test_gap_in_the_times_is_a_gap(opened):
    """A jump of 7 s in the time column leaves two stretches."""
    recording = opened(rows(SIGNAL, iso_times(1000, gap_after=400, gap_ms=7000)))
    assert recording.stretches == (Stretch(0, 400, 0), Stretch(400, 600, 8_600_000_000))


@pytest.mark.parametrize("step_ms", [1000 / 360, 1000 / 128, 8, 2])
def test_rate_from_rounded_times(opened, step_ms):
    """Times rounded to milliseconds give the exact nominal rate and no false gaps."""
    recording = opened(rows(SIGNAL, iso_times(1000, step_ms)))
    assert recording.rate == round(1000 / step_ms)
    assert len(recording.stretches) == 1


def test_time_running_backwards(opened):
    """A time before the one above is refused."""
    times = iso_times(1000)
    assert refused(opened, rows(SIGNAL, times[:500] + times[:500])) == "time_runs_backwards"


def test_no_times_need_a_rate(opened):
    """A single column needs unit and rate from the settings."""
    content = "\n".join(str(value) for value in SIGNAL)
    assert refused(opened, content, unit="mV") == "text_layout_unclear"
    assert refused(opened, content, fs_hz=250.0) == "text_layout_unclear"
    recording = opened(content, Site(unit="mV", fs_hz=250.0))
    assert np.allclose(millivolts(recording), SIGNAL, atol=1e-9)
    assert recording.start_local is None


def test_counts_with_a_scale(opened):
    """Counts stay counts, with the scale of the settings."""
    counts = np.arange(-500, 500)
    recording = opened("\n".join(map(str, counts)) + "\n", Site(fs_hz=200.0, mv_per_count=0.005))
    assert np.array_equal(recording.read(0, 1000), counts)
    assert recording.mv_per_count == 0.005


def test_elapsed_seconds(opened):
    """Elapsed seconds by their name are times without a start."""
    recording = opened(rows(SIGNAL, [f"{at / 500:.3f}" for at in range(1000)], header="time (s),ECG (mV)"))
    assert recording.rate == Fraction(500)
    assert recording.start_local is None
    assert refused(opened, rows(SIGNAL, range(1000))) == "text_layout_unclear"


def test_another_country_needs_a_layout(opened):
    """Semicolons, decimal commas and day-first times are read with a site layout and refused without."""
    times = iso_times(1000, fmt="%d.%m.%Y %H:%M:%S.%f")
    content = rows([str(value).replace(".", ",") for value in SIGNAL], times, ";", "Zeit;EKG (mV)")
    assert refused(opened, content) == "text_layout_unclear"
    site = Site(separator="semicolon", decimal="comma", time_format="%d.%m.%Y %H:%M:%S%.f", time_column="Zeit")
    recording = opened(content, site)
    assert recording.start_local == START
    assert np.allclose(millivolts(recording), SIGNAL, atol=1e-9)


def test_ragged_rows_are_refused_and_a_cut_last_line_is_said(opened):
    """A row with more or fewer values is refused by its number; only the last line may be cut."""
    lines = rows(SIGNAL, iso_times(1000)).splitlines()
    with pytest.raises(Refused) as refusal:
        opened("\n".join([*lines[:700], lines[700] + ",7", *lines[701:]]) + "\n")
    assert refusal.value.code == "text_layout_unclear"
    assert "row 701" in refusal.value.sentence
    recording = opened("\n".join(lines)[:-15])
    assert recording.n_samples == 999
    assert codes(recording) == ["file_cut_short"]


def test_heading_alone_has_no_samples(opened):
    """A heading without rows is refused as such."""
    assert refused(opened, "time,ecg_mv\n") == "no_samples"


def test_words_among_the_numbers_are_missing_samples(opened):
    """A device word instead of a value is a missing sample, said with its number."""
    values = [*SIGNAL[:500], *["LEAD_OFF"] * 20, *SIGNAL[520:]]
    recording = opened(rows(values, iso_times(1000)))
    counts = recording.read(0, 1000)
    assert np.flatnonzero(counts == recording.missing_count).tolist() == list(range(500, 520))
    assert codes(recording) == ["missing_samples"]


def test_several_columns(opened):
    """Of several columns the one called ECG is taken; two of one kind need a name."""
    frame = pl.DataFrame({"time": iso_times(1000), "acc_x": np.zeros(1000), "ECG II (mV)": SIGNAL})
    recording = opened(frame.write_csv())
    assert (recording.lead, recording.other_channels) == ("ECG II (mV)", ("acc_x",))
    twice = pl.DataFrame({"time": iso_times(1000), "ECG 1 (mV)": SIGNAL, "ECG 2 (mV)": SIGNAL})
    assert refused(opened, twice.write_csv()) == "several_ecg_channels"
    assert opened(twice.write_csv(), Site(ecg_column="3")).lead == "ECG 2 (mV)"
    assert opened(twice.write_csv(), Site(ecg_column="ecg 1 (mv)")).lead == "ECG 1 (mV)"


@pytest.mark.parametrize("unit", ["uV", "V", "mV", "nV"])
def test_units(opened, unit):
    """All voltages give the same millivolts."""
    factor = {"uV": 1e3, "V": 1e-3, "mV": 1, "nV": 1e6}[unit]
    recording = opened(rows(SIGNAL * factor, iso_times(1000), header=f"time,ecg [{unit}]"))
    assert np.allclose(millivolts(recording), SIGNAL, atol=6e-4)


@pytest.mark.parametrize("zone", [None, "Europe/Berlin"])
def test_parquet(opened, zone):
    """A Parquet file with typed times gives values, gaps and, with a zone, instants; NULL is missing."""
    times = pl.Series([START + timedelta(milliseconds=4 * at + (5000 if at > 499 else 0)) for at in range(1000)])
    if zone:
        times = times.dt.replace_time_zone(zone)
    values = pl.Series(SIGNAL).scatter(7, None)
    recording = opened(pl.DataFrame({"time": times, "ecg_mv": values}))
    assert recording.format == "Parquet"
    assert (recording.zone, recording.start_local.hour) == (("UTC", 7) if zone else (None, 8))
    assert [stretch.n_samples for stretch in recording.stretches] == [500, 500]
    assert recording.read(7, 8)[0] == recording.missing_count
    assert np.allclose(np.delete(millivolts(recording), 7), np.delete(SIGNAL, 7), atol=1e-9)


def test_damaged_parquet(opened):
    """A cut Parquet file is refused."""
    assert refused(opened, b"PAR1" + bytes(100)) == "header_cut_short"


def test_large_values_are_stored_coarser_and_said(opened):
    """A range beyond 16 bit at 1 µV is stored in coarser steps with a finding."""
    recording = opened(rows(SIGNAL * 100, iso_times(1000)))
    assert codes(recording) == ["resolution_reduced"]
    assert np.abs(millivolts(recording) - SIGNAL * 100).max() <= recording.mv_per_count / 2 + 1e-9
