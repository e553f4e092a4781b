"""Twenty-five kinds of files as they really arrive, each through the inbox, with the outcome that is right for it."""

import gzip
import itertools
import zipfile
from io import BytesIO

import edfio
import numpy as np
import polars as pl
import pytest

RECORDING = "SRL-1001_20260228"
BERLIN = {"zone": "Europe/Berlin"}


def noise(n_samples, seed=1):
    return np.random.default_rng(seed).integers(-900, 900, n_samples).astype("<i2")


def onsets(*spans):
    """Time stamps of one-second records from several (first, count) spans."""
    return [f"+{first + n}" for first, count in spans for n in range(count)]


def outcome(programme, name):
    """Status, code and findings of one delivery."""
    (row,) = [row for row in programme.rows("deliveries") if row["file_name"] == name]
    return row["status"], row["code"], row["findings"]


@pytest.fixture
def delivered(programme):
    """Function that delivers one file, runs, and tells status, code and findings."""
    minutes = itertools.count()

    def make(content, name="SRL-1001.edf"):
        programme.deliver(name, content, minute=next(minutes))
        programme.run()
        return outcome(programme, name)

    return make


def with_settings(programme, text):
    (programme.folder / "programme.toml").write_text(text)


def test_01_plain_edf_equals_an_independent_reader(programme, delivered, make_edf):
    """EDF, 60 s, one signal: accepted, 15,000 samples, equal to those edfio reads."""
    content = make_edf()
    assert delivered(content) == ("accepted", None, None)
    # Source: edfio 0.4.18
    assert np.array_equal(programme.samples(RECORDING)[0], edfio.read_edf(BytesIO(content)).signals[0].digital)


def test_02_gap_between_short_records(programme, delivered, make_edf):
    """EDF+D with a gap of 7.3 s: two segments of 300 records, the second at 37.3 s."""
    stamps = [f"+{n / 10 if n < 300 else n / 10 + 7.3:.1f}" for n in range(600)]
    content = make_edf(noise(15_000), kind="EDF+D", per_record=25, record_s="0.1", onsets=stamps)
    assert delivered(content) == ("accepted", None, None)
    rows = programme.rows("segments")
    assert [row["sample_count"] for row in rows] == [7500, 7500]
    assert (rows[1]["start_utc"] - rows[0]["start_utc"]).total_seconds() == pytest.approx(37.3)


def test_03_gap_in_a_file_declared_continuous(programme, delivered, make_edf):
    """EDF+C whose times jump: two segments and a finding."""
    content = make_edf(noise(15_000), kind="EDF+C", onsets=onsets((0, 30), (50, 30)))
    assert delivered(content) == ("accepted", None, "gap_in_file_declared_continuous")
    assert len(programme.samples(RECORDING)) == 2


def test_04_time_running_backwards(delivered, make_edf):
    """EDF+D with time going back 10 s: refused."""
    content = make_edf(noise(15_000), kind="EDF+D", onsets=onsets((0, 30), (20, 30)))
    assert delivered(content)[:2] == ("quarantined", "time_runs_backwards")


def test_05_file_that_grows_between_two_looks(programme, make_edf):
    """Record count -1 and a growing size: waits; after the last write accepted without a finding."""
    for n_seconds in (10, 20):
        programme.deliver("SRL-1001.edf", make_edf(n_records="-1")[: 512 + 500 * n_seconds], minute=n_seconds)
        programme.run()
        assert outcome(programme, "SRL-1001.edf")[:2] == ("waiting", "still_being_written")
    programme.deliver("SRL-1001.edf", make_edf(), minute=60)
    programme.run()
    assert outcome(programme, "SRL-1001.edf") == ("accepted", None, None)


def test_05b_open_count_that_stays(programme, make_edf):
    """Record count -1 and no growth between two looks: accepted with a finding."""
    programme.deliver("SRL-1001.edf", make_edf(n_records="-1"))
    programme.run()
    programme.run()
    assert outcome(programme, "SRL-1001.edf") == ("accepted", None, "record_count_open")


def test_06_cut_file(programme, delivered, make_edf):
    """Count 600, 37.2 records there, odd length: 37 records accepted with two findings."""
    content = make_edf(noise(15_000), n_records="600")[: 512 + 37 * 500 + 101]
    assert delivered(content) == ("accepted", None, "file_cut_short partial_last_record")
    assert programme.samples(RECORDING)[0].size == 37 * 250


def test_07_no_scale(programme, make_edf, delivered):
    """Physical minimum equal to maximum: refused; with a site scale accepted."""
    assert delivered(make_edf(physical=("1", "1")))[:2] == ("quarantined", "amplitude_scale_missing")
    with_settings(programme, "[site]\nmv_per_count = 0.005\n")
    assert delivered(make_edf(physical=("1", "1")), "SRL-1001_2.edf") == ("accepted", None, "scale_from_site")


def test_08_digital_range_beyond_16_bit(delivered, make_edf):
    """Digital maximum 65535 in an EDF: refused."""
    assert delivered(make_edf(digital=("0", "65535")))[:2] == ("quarantined", "digital_range_wrong")


def test_09_decimal_comma(programme, delivered, make_edf):
    """Physical range with decimal commas: accepted, 1,150 counts are 115.0 µV."""
    assert delivered(make_edf(physical=("-3,2768", "3,2767")))[0] == "accepted"
    (recording,) = programme.rows("recordings")
    # Source: EDF+ specification, section 2.1.3; 6.5535 mV over 65,535 counts
    assert 1150 * recording["mv_per_count"] == pytest.approx(0.115, abs=1e-9)


@pytest.mark.parametrize("coding", ["latin-1", "utf-8"])
def test_10_names_in_any_text_coding(programme, delivered, make_edf, coding):
    """Patient field in latin-1 or UTF-8: the code is found (another patient's is refused), the name is not kept."""
    assert delivered(make_edf(patient="P-0001 M X Jörg_Müller".encode(coding)))[0] == "accepted"
    programme.register("P-0001,\nP-0002,", "SRL-1001,P-0002,2026-02-28,,")
    content = make_edf(noise(15_000), patient="P-0001 M X Jörg_Müller".encode(coding), time="12.00.00")
    assert delivered(content, "1.edf")[:2] == ("quarantined", "same_start_other_patient")
    everything = b"".join(p.read_bytes() for p in (programme.folder / "lake").rglob("*") if p.is_file())
    assert "Müller".encode() not in everything
    assert b"ller" not in repr(programme.rows("deliveries")).encode()


@pytest.mark.parametrize(("n_bytes", "code"), [(0, "empty_file"), (100, "header_cut_short"), (512, "no_samples")])
def test_11_files_that_end_early(delivered, make_edf, n_bytes, code):
    """No bytes, 100 bytes, a header alone: refused, each by its code."""
    assert delivered(make_edf()[:n_bytes])[:2] == ("quarantined", code)


def test_12_odd_rate(programme, delivered, make_edf):
    """4,999 samples in 20 s: the rate is exactly 4999/20 Hz."""
    assert delivered(make_edf(noise(4999 * 3), per_record=4999, record_s="20"))[0] == "accepted"
    (piece,) = programme.rows("pieces")
    assert (piece["rate_numerator"], piece["rate_denominator"]) == (4999, 20)


def test_13_which_channel(programme, delivered, make_edf):
    """Accelerometer first, ECG second: the second is taken; two channels called ECG: refused."""
    two = {"units": ("g", "mV"), "others": {0: np.full(15_000, 7)}}
    assert delivered(make_edf(noise(15_000), labels=("Acc", "ECG"), **two))[0] == "accepted"
    assert np.array_equal(programme.samples(RECORDING)[0], noise(15_000))
    same = make_edf(labels=("ECG", "ECG"), units=("mV", "mV"), others={1: np.zeros(15_000)})
    assert delivered(same, "SRL-1001_2.edf")[:2] == ("quarantined", "several_ecg_channels")


def test_14_units(delivered, make_edf):
    """A blank unit: refused; the micro sign in both spellings: accepted."""
    wide = {"physical": ("-5000", "5000")}
    assert delivered(make_edf(units=("",)))[:2] == ("quarantined", "unit_unknown")
    for n, unit in enumerate(("µV".encode(), "µV".encode("latin-1"), "μV".encode())):
        content = make_edf(noise(15_000, n), units=(unit,), time=f"1{n}.00.00", **wide)
        assert delivered(content, f"SRL-1001_{n}.edf")[0] == "accepted"


def test_15_start_unknown(programme, delivered, make_edf):
    """No date anywhere: refused; a `yy` year with a full date elsewhere: accepted."""
    nowhere = make_edf(date="00.00.00", recording="Startdate X X X SRL-1001")
    assert delivered(nowhere)[:2] == ("quarantined", "start_time_unknown")
    assert delivered(make_edf(noise(15_000), date="01.03.yy"), "SRL-1001_2.edf")[0] == "accepted"
    assert str(programme.rows("recordings")[0]["start_utc"]) == "2026-03-01 08:30:00"


def test_16_hour_that_happened_twice(make_programme, make_edf):
    """Start 02:30 on 25 October in Berlin: refused alone; as the second of three parts accepted and contiguous."""
    day = {"per_record": 50, "date": "25.10.26", "recording": "Startdate 25-OCT-2026 X X SRL-1001"}
    signal = noise(6 * 3600 * 50)
    files = [
        make_edf(signal[n * 360_000 : (n + 1) * 360_000], time=time, **day)
        for n, time in enumerate(("00.30.00", "02.30.00", "03.30.00"))
    ]
    alone, together = make_programme("alone", **BERLIN), make_programme("together", **BERLIN)
    for programme in (alone, together):
        programme.register("P-0001,", "SRL-1001,P-0001,2026-10-01,,")
    alone.deliver("SRL-1001.edf", files[1])
    alone.run()
    assert outcome(alone, "SRL-1001.edf")[:2] == ("quarantined", "local_time_ambiguous")
    for n in (1, 0, 2):
        together.deliver(f"SRL-1001_{n}.edf", files[n], minute=3 - n)
    together.run()
    (samples,) = together.samples("SRL-1001_20261001")
    # Source: tz database, Europe/Berlin: 02:30 came at 00:30 UTC and again at 01:30 UTC
    assert np.array_equal(samples, signal)
    assert str(together.rows("segments")[0]["start_utc"]) == "2026-10-24 22:30:00"


def test_17_hourly_files_one_missing(programme, make_edf):
    """24 hourly files in any order, one missing: two segments and one gap of an hour."""
    signal = noise(24 * 3600 * 50)
    for n in np.random.default_rng(2).permutation(24):
        if n != 9:
            content = make_edf(signal[n * 180_000 : (n + 1) * 180_000], per_record=50, time=f"{n:02}.00.00")
            programme.deliver(f"SRL-1001_{n}.edf", content, minute=int(n * 7 % 24))
    programme.run()
    first, second = programme.samples(RECORDING)
    assert np.array_equal(first, signal[: 9 * 180_000])
    assert np.array_equal(second, signal[10 * 180_000 :])
    rows = programme.rows("segments")
    assert (rows[1]["start_utc"] - rows[0]["end_utc"]).total_seconds() == 3600


def test_18_the_same_again(programme, delivered, make_edf):
    """The same file under another name: skipped; the same samples with an anonymised header: linked."""
    assert delivered(make_edf())[0] == "accepted"
    assert delivered(make_edf(), "SRL-1001_2.edf")[:2] == ("skipped", "same_content_again")
    anonymous = make_edf(patient="X X X X")
    assert delivered(anonymous, "SRL-1001_3.edf")[:2] == ("skipped", "same_samples_other_header")
    assert {row["recording_id"] for row in programme.rows("deliveries")} == {RECORDING}


def test_19_overlapping_parts(programme, delivered, make_edf):
    """Parts overlapping by 30 s: equal samples are trimmed, other samples refused."""
    signal = noise(120 * 250)
    assert delivered(make_edf(signal[: 60 * 250], time="08.00.00"))[0] == "accepted"
    equal = make_edf(signal[30 * 250 : 90 * 250], time="08.00.30")
    assert delivered(equal, "SRL-1001_2.edf") == ("accepted", None, "overlap_trimmed")
    other = make_edf(noise(60 * 250, 9), time="08.01.00")
    assert delivered(other, "SRL-1001_3.edf")[:2] == ("quarantined", "overlap_with_other_samples")
    assert np.array_equal(programme.samples(RECORDING)[0], signal[: 90 * 250])


def test_20_rails_and_missing_samples(programme, delivered, make_edf):
    """Runs at both rails and at the missing count: accepted, said, and both known to the detector."""
    signal = noise(15_000)
    signal[1000:2000], signal[3000:4000], signal[5000:6000] = -2048, 2047, -32768
    content = make_edf(signal, digital=("-2048", "2047"))
    assert delivered(content) == ("accepted", None, "missing_samples saturated")
    (recording,) = programme.rows("recordings")
    assert [recording[name] for name in ("rail_low_count", "rail_high_count", "missing_count")] == [-2048, 2047, -32768]


def test_21_wfdb_sets(make_programme):
    """Bad checksum: said; signal file missing: waits, then refused; name outside: refused; null segment: a gap."""
    cases = {
        "sum": ("1001 1 250 500 08:30:00 01/03/2026\n1001.dat 16 200 16 0 0 7 0 II\n", "accepted", None),
        "missing": ("1001 1 250 500\nother.dat 16 200 16 0 0 0 0 II\n", "waiting", "waiting_for_missing_part"),
        "outside": ("1001 1 250 500\n../x.dat 16 200 16 0 0 0 0 II\n", "quarantined", "file_name_points_outside"),
        "gap": ("1001/3 1 250 1250 08:30:00 01/03/2026\n1 500\n~ 250\n2 500\n", "accepted", None),
    }
    for case, (header, status, code) in cases.items():
        programme = make_programme(case)
        programme.register("P-0001,", "1001,P-0001,2026-02-28,,")
        programme.deliver("1001.hea", header.encode())
        if case == "sum":
            programme.deliver("1001.dat", noise(500).tobytes())
        for name in ("1", "2") if case == "gap" else ():
            programme.deliver(f"{name}.hea", f"{name} 1 250 500\n{name}.dat 16 200 16 0\n".encode())
            programme.deliver(f"{name}.dat", noise(500, int(name)).tobytes())
        if case == "gap":
            with_settings(programme, '[site]\necg_channel = "signal 1"\n')
        programme.run()
        assert outcome(programme, "1001.hea")[:2] == (status, code), case
        if case == "missing":
            with_settings(programme, "[inbox]\npart_wait_h = 0.0\n")
            programme.run()
            assert outcome(programme, "1001.hea")[:2] == ("quarantined", "part_missing")
        if case == "sum":
            assert outcome(programme, "1001.hea")[2] == "checksum_wrong device_from_file_name"
        if case == "gap":
            assert len(programme.samples("1001_20260228")) == 2


# 22 (ISHNE with a wrong checksum, without resolution, with a total count) is in readers/test_ishne.py.


def test_23_text(programme, delivered):
    """Semicolons, decimal comma, day first: refused, accepted with a layout; ragged; heading alone; a login page."""
    times = [f"01.03.2026 08:30:{n // 250:02}.{n % 250 * 4:03}" for n in range(1000)]
    values = [f"{value / 1000:.3f}".replace(".", ",") for value in noise(1000)]
    european = "Zeit;EKG (mV)\n" + "\n".join(f"{t};{v}" for t, v in zip(times, values, strict=True)) + "\n"
    ragged = "time_s,ecg_mv\n" + "".join(f"{n / 250},0.{n}\n" for n in range(400)) + "1,2,3\n4,5\n"
    page = "<!DOCTYPE html><html><title>Sign in</title></html>"
    assert delivered(european.encode(), "SRL-1001_1.csv")[:2] == ("quarantined", "text_layout_unclear")
    assert delivered(ragged.encode(), "SRL-1001_2.csv")[:2] == ("quarantined", "text_layout_unclear")
    assert delivered(b"time_s,ecg_mv\n", "SRL-1001_3.csv")[:2] == ("quarantined", "no_samples")
    assert delivered(page.encode(), "SRL-1001_4.csv")[:2] == ("quarantined", "web_page_not_data")
    with_settings(
        programme,
        '[site]\nseparator = "semicolon"\ndecimal = "comma"\ntime_column = "Zeit"\n'
        'time_format = "%d.%m.%Y %H:%M:%S%.f"\n',
    )
    assert delivered(european.encode(), "SRL-1001_5.csv") == ("accepted", None, "device_from_file_name")
    (recording,) = programme.rows("recordings")
    assert (recording["fs_hz"], str(recording["start_utc"])) == (250.0, "2026-03-01 08:30:00")


def test_24_archives(delivered, make_edf):
    """A cut gzip, a wrong checksum: refused; gzip under another name: accepted; a bomb: refused."""
    packed = gzip.compress(make_edf())
    assert delivered(packed[:900], "SRL-1001_1.gz")[:2] == ("quarantined", "damaged_archive")
    assert delivered(packed[:-8] + b"xxxx" + packed[-4:], "SRL-1001_2.gz")[:2] == ("quarantined", "damaged_archive")
    assert delivered(packed, "SRL-1001_3.csv")[0] == "accepted"
    bomb = BytesIO()
    with zipfile.ZipFile(bomb, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("a.edf", bytes(50_000_000))
    assert delivered(bomb.getvalue(), "SRL-1001_4.zip")[:2] == ("quarantined", "archive_unsafe")


# 25: aECG with a doctype is in readers/test_aecg.py, cut DICOM samples in readers/test_dicom.py.


def test_25_parquet_with_nulls(programme, delivered):
    """Parquet with missing values: accepted, the missing samples known to the detector."""
    start = pl.datetime(2026, 3, 1, 8, 30)
    frame = pl.DataFrame({"ecg_mv": noise(1000) / 1000}).with_columns(
        time=start + pl.duration(milliseconds=4 * pl.int_range(pl.len())),
        ecg_mv=pl.when(pl.int_range(pl.len()).is_between(100, 149)).then(None).otherwise(pl.col("ecg_mv")),
    )
    content = BytesIO()
    frame.write_parquet(content)
    status, _, findings = delivered(content.getvalue(), "SRL-1001.parquet")
    assert (status, findings) == ("accepted", "device_from_file_name missing_samples")
    (recording,) = programme.rows("recordings")
    (samples,) = programme.samples(RECORDING)
    assert np.flatnonzero(samples == recording["missing_count"]).tolist() == list(range(100, 150))
