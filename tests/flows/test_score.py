"""Scoring a folder of labelled records: figures, left-out records, the three forms of the report."""

import json
import shutil
from html.parser import HTMLParser

import numpy as np
import pytest
import wfdb

from detectors import synthetic
from flows.scoring import score

FS_HZ = 250


def write_record(folder, name, *, lead="MLII", minutes=12, seed=1, labels=True, text=""):
    """A synthetic record with its true beats as labels, written by the general-purpose WFDB library."""
    rhythm = synthetic.Rhythm(v_share_pct=8, s_share_pct=0, fusion_share=0, run_share=0.05)
    hour = next(synthetic.recording(rhythm, synthetic.QUIET, fs_hz=FS_HZ, hours=minutes / 60, seed=seed))
    wfdb.wrsamp(
        name, fs=FS_HZ, units=["mV"], sig_name=[lead], fmt=["16"], adc_gain=[400.0], baseline=[0],
        d_signal=hour.counts.astype(np.int64)[:, None], write_dir=str(folder),
    )  # fmt: skip
    if labels:
        at = np.concatenate([[10], hour.beats.sample])
        symbol = ["+", *hour.beats.beat_class]
        wfdb.wrann(
            name, "atr", sample=at, symbol=symbol, aux_note=[text or "(N", *[""] * len(hour.beats.sample)],
            write_dir=str(folder),
        )  # fmt: skip
    return hour


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    made = tmp_path_factory.mktemp("records")
    write_record(made, "clean", seed=1)
    write_record(made, "second", seed=2, text="(AFIB")
    write_record(made, "bare", seed=3, labels=False)
    return made


@pytest.fixture(scope="module")
def report(folder):
    return score.score_folder(folder)


def test_true_labels_of_clean_signals_are_found(report):
    """On noise-free synthetic records nearly every beat and every ventricular beat is found."""
    figures = report.as_dict()["gross"]
    assert set(figures) == {
        "qrs_se_pct", "qrs_ppv_pct", "veb_se_pct", "veb_ppv_pct", "sveb_se_pct", "sveb_ppv_pct",
    }  # fmt: skip
    assert figures["qrs_se_pct"] > 99 and figures["qrs_ppv_pct"] > 99
    assert figures["veb_se_pct"] > 90 and figures["veb_ppv_pct"] > 90


def test_labels_moved_out_of_the_window_match_nothing(folder, tmp_path):
    """Labels 200 ms away from every beat leave no pair: sensitivity and positive predictivity are near 0."""
    for part in ("hea", "dat"):
        shutil.copy(folder / f"clean.{part}", tmp_path)
    true = wfdb.rdann(str(folder / "clean"), "atr")
    wfdb.wrann(
        "clean", "atr", sample=true.sample + FS_HZ // 5, symbol=["N"] * len(true.sample), write_dir=str(tmp_path)
    )
    figures = score.score_folder(tmp_path).as_dict()["gross"]
    assert figures["qrs_se_pct"] < 5 and figures["qrs_ppv_pct"] < 5
    assert figures["veb_se_pct"] is None


def test_the_learning_period_is_an_option(folder):
    """Without a learning period more beats are scored."""
    whole = score.score_folder(folder, learning_s=0).as_dict()["records"][0]["beats"]
    usual = score.score_folder(folder).as_dict()["records"][0]["beats"]
    true = wfdb.rdann(str(folder / "clean"), "atr")
    assert whole == len(true.sample) - 1
    assert usual == int(np.sum(true.sample >= 300 * FS_HZ))


def test_escape_beats_as_asked(folder, tmp_path):
    """Supraventricular escape labels are S by default and N when asked."""
    for part in ("hea", "dat"):
        shutil.copy(folder / f"clean.{part}", tmp_path)
    true = wfdb.rdann(str(folder / "clean"), "atr")
    symbol = ["j" if name == "N" else name for name in true.symbol]
    wfdb.wrann("clean", "atr", sample=true.sample, symbol=symbol, write_dir=str(tmp_path))
    as_s, as_n = (score.score_folder(tmp_path, escape_as=name).as_dict()["records"][0]["s_beats"] for name in "SN")
    assert as_s > 300 and as_n == 0


def test_burden_error_is_found_minus_expert(report):
    """The burden error of a record is the detector's share of V beats minus the expert's."""
    for row in report.as_dict()["records"]:
        difference = row["v_burden_found_pct"] - row["v_burden_expert_pct"]
        assert row["v_burden_error_pct_points"] == pytest.approx(difference, abs=0.002)
        assert abs(difference) < 1.0


def test_expert_burden_counts_the_whole_record(folder, report):
    """The expert's burden covers all labelled beats, the first five minutes included."""
    true = wfdb.rdann(str(folder / "clean"), "atr")
    beats = [name for name in true.symbol if name != "+"]
    assert report.as_dict()["records"][0]["v_burden_expert_pct"] == pytest.approx(
        100 * beats.count("V") / len(beats), abs=0.001
    )


def test_marked_fibrillation_leaves_the_burden(folder, tmp_path):
    """Detections within marked ventricular fibrillation, where nobody labels beats, do not count in the burden."""
    for part in ("hea", "dat"):
        shutil.copy(folder / f"clean.{part}", tmp_path)
    true = wfdb.rdann(str(folder / "clean"), "atr")
    begin, end = 120 * FS_HZ, 420 * FS_HZ
    outside = (true.sample < begin) | (true.sample > end)
    sample = np.concatenate([true.sample[outside], [begin, end]])
    symbol = np.array(["N" if name == "V" else name for name in np.array(true.symbol)[outside]] + ["[", "]"])
    order = np.argsort(sample)
    wfdb.wrann("clean", "atr", sample=sample[order], symbol=symbol[order].tolist(), write_dir=str(tmp_path))
    (row,) = score.score_folder(tmp_path).as_dict()["records"]
    is_v = np.array(true.symbol)[outside] == "V"
    assert row["v_burden_found_pct"] == pytest.approx(100 * is_v.sum() / (len(is_v) - 1), abs=0.7)


def test_records_without_labels_are_named(report):
    """A record that cannot be scored is named with its reason and does not stop the others."""
    told = report.as_dict()
    assert [row["record"] for row in told["records"]] == ["clean", "second"]
    assert told["left_out"] == [{"record": "bare", "reason": "no labels; expected bare.atr beside the header"}]


def test_records_with_atrial_fibrillation_are_told_apart(report):
    """A record whose labels name atrial fibrillation is marked, and one summary leaves it out."""
    told = report.as_dict()
    assert [row["has_af"] for row in told["records"]] == [False, True]
    assert told["gross_without_af"]["veb_se_pct"] == told["records"][0]["veb_se_pct"]


def test_an_empty_folder_is_refused(tmp_path):
    """A folder without a labelled record is an error that says what was expected."""
    with pytest.raises(score.ScoreError, match=r"expected NAME\.hea"):
        score.score_folder(tmp_path)


def test_a_channel_that_is_not_there(folder):
    """Asking for a signal that no record has is an error that names it."""
    with pytest.raises(score.ScoreError, match="channel 3 was asked for; the record has 1"):
        score.score_folder(folder, channel=3)


def test_signals_that_share_a_name(tmp_path):
    """A record whose signals are all called ECG is scored by the number of the signal."""
    hour = write_record(tmp_path, "one", seed=4)
    flat = np.zeros(len(hour.counts), np.int64)
    wfdb.wrsamp(
        "one", fs=FS_HZ, units=["mV"] * 2, sig_name=["ECG", "second"], fmt=["16"] * 2, adc_gain=[400.0] * 2,
        baseline=[0] * 2, d_signal=np.stack([flat, hour.counts], axis=1), write_dir=str(tmp_path),
    )  # fmt: skip
    header = tmp_path / "one.hea"
    header.write_text(header.read_text().replace("second", "ECG"))
    first, second = (score.score_folder(tmp_path, channel=channel).as_dict()["gross"] for channel in (0, 1))
    assert first["qrs_se_pct"] == 0 and second["qrs_se_pct"] > 99


def test_reliability_covers_every_scored_beat(report):
    """The ranges of stated probability hold every scored test beat once, by class and together."""
    told = report.as_dict()
    found = sum(count for row in told["matrix"].values() for name, count in row.items() if name in "nsvfq")
    assert sum(row["beats"] for row in told["reliability"]["all"]) == found
    assert sum(row["beats"] for name in "NSVFQ" for row in told["reliability"][name]) == found


def test_the_share_that_was_analysable_is_told(report):
    """The mean and the least share of analysable time stand beside the figures they allow."""
    told = report.as_dict()
    shares = [row["analysable_share_pct"] for row in told["records"]]
    assert told["analysable_share"]["mean_pct"] == pytest.approx(np.mean(shares), abs=0.001)
    assert told["analysable_share"]["least_pct"] == min(shares)


def test_json_holds_plain_values(report):
    """The report for programs survives strict JSON."""
    assert json.loads(json.dumps(report.as_dict(), allow_nan=False)) == report.as_dict()


def test_text_shows_the_tables_and_cautions(report):
    """The text names every record, the gross line and the cautions."""
    text = report.as_text()
    for word in ("gross", "clean", "second", "left out: bare", "V burden error", "clinician over-reads"):
        assert word in text


class Cells(HTMLParser):
    """Visible text of a page and the addresses it refers to."""

    def __init__(self):
        super().__init__()
        self.text, self.addresses = [], []

    def handle_starttag(self, tag, attrs):
        self.addresses += [value for name, value in attrs if name in ("src", "href")]

    def handle_data(self, data):
        self.text.append(data.strip())


def test_page_needs_no_other_file_and_escapes(folder, tmp_path):
    """The page holds the figures, refers to no address, and shows hostile names as text."""
    for part in ("hea", "dat", "atr"):
        shutil.copy(folder / f"clean.{part}", tmp_path)
    header = (tmp_path / "clean.hea").read_text().replace("MLII", "II <script>alert(1)</script>")
    (tmp_path / "clean.hea").write_text(header)
    made = score.score_folder(tmp_path)
    score.write_page(made, tmp_path / "page.html")
    page = (tmp_path / "page.html").read_text(encoding="utf-8")
    cells = Cells()
    cells.feed(page)
    assert cells.addresses == []
    assert "<script" not in page
    assert "II <script>alert(1)</script>" in cells.text
    assert f"{made.as_dict()['gross']['qrs_se_pct']:.2f}" in cells.text
    assert any("clinician over-reads" in text for text in cells.text)


def test_noise_makes_it_harder(folder, tmp_path):
    """With noise of growing power added, fewer detections are right over all time, and every level is reported."""
    noise = np.random.default_rng(5).normal(0, 100, (60 * FS_HZ, 1)).astype(np.int64)
    wfdb.wrsamp(
        "hiss", fs=FS_HZ, units=["mV"], sig_name=["noise"], fmt=["16"], adc_gain=[200.0], baseline=[0],
        d_signal=noise, write_dir=str(tmp_path),
    )  # fmt: skip
    made = score.score_folder(folder, noise_folder=tmp_path, noise_records=("clean",))
    rows = made.as_dict()["noise"]
    assert [(row["noise"], row["snr_db"]) for row in rows] == [("hiss", level) for level in score.NOISE_LEVELS_DB]
    clean = made.as_dict()["records"][0]
    for name in ("qrs_ppv_pct", "veb_ppv_pct"):
        assert rows[-1]["gross"][name] <= clean[name]
    assert rows[-1]["gross"] != rows[0]["gross"] or rows[-1]["analysable_share_pct"] < 100
    assert "hiss" in made.as_text()


def test_a_folder_without_noise_is_refused(folder, tmp_path):
    """A noise folder without a record is an error that names it."""
    with pytest.raises(score.ScoreError, match="no noise record"):
        score.score_folder(folder, noise_folder=tmp_path)


def test_noise_for_a_record_that_is_not_there(folder, tmp_path):
    """Naming a record for the noise that was not scored is an error that lists those that were."""
    with pytest.raises(score.ScoreError, match="records 118; scored were clean, second"):
        score.score_folder(folder, noise_folder=tmp_path, noise_records=("118",))


def test_real_records(reference_ecg, tmp_path):
    """Real labelled records are scored with the beat counts that their database states."""
    for record in ("106", "119"):
        for part in ("hea", "dat", "atr"):
            shutil.copy(reference_ecg / "mitdb" / f"{record}.{part}", tmp_path)
    told = score.score_folder(tmp_path, learning_s=0).as_dict()
    # Source: MIT-BIH Arrhythmia Database, beat labels of records 106 and 119
    assert [(row["beats"], row["v_beats"]) for row in told["records"]] == [(2027, 520), (1987, 444)]
    # common practice, no source: a useful detector misses few of these clear beats
    assert told["gross"]["qrs_se_pct"] > 99 and told["gross"]["veb_se_pct"] > 90
