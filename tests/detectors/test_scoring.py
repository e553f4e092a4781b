"""The scorer gives every figure of the reference comparators and keeps the rules of EC57."""

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from detectors import annotations, scoring, scoring_runs

CASES = json.loads((Path(__file__).parents[1] / "oracle_cases.json").read_text())["cases"]
STATISTIC_NAMES = {
    "QRS sensitivity": "qrs_se",
    "QRS positive predictivity": "qrs_ppv",
    "VEB sensitivity": "veb_se",
    "VEB positive predictivity": "veb_ppv",
    "SVEB sensitivity": "sveb_se",
    "SVEB positive predictivity": "sveb_ppv",
    "VEB false positive rate": "veb_fpr",
    "Beats missed in shutdown": "missed_in_shutdown",
}
RUN_NAMES = {"Couplet": "couplet", "Short run": "short_run", "Long run": "long_run"}
RUN_SIDES = {"sensitivity": "se", "positive predictivity": "ppv"}


def labels(rows):
    sample, symbol, aux, subtype = zip(*rows, strict=True)
    return annotations.Annotations(
        np.array(sample, np.int64),
        np.array(symbol),
        np.array(subtype, np.int64),
        np.array([text or "" for text in aux]),
    )


def beat_score(case):
    return scoring.compare_beats(
        labels(case["ref"]), labels(case["test"]), fs_hz=case["fs"], n_samples=case["n_samples"]
    )


def run_score(case, ectopy):
    return scoring_runs.compare_runs(
        labels(case["ref"]), labels(case["test"]), fs_hz=case["fs"], n_samples=case["n_samples"], ectopy=ectopy
    )


@pytest.mark.parametrize("case", CASES, ids=[case["id"] for case in CASES])
class TestReferenceComparators:
    def test_every_cell_of_the_beat_matrix(self, case):
        """Each reference class meets each test class as often as the reference comparator counts."""
        matrix = beat_score(case).matrix
        found = {
            row: dict(zip(scoring.TEST_COLUMNS, counts, strict=True))
            for row, counts in zip(scoring.REFERENCE_ROWS, matrix.tolist(), strict=True)
        }
        for row in "OX":  # no reference beat and no test beat is not a cell
            assert (found[row].pop("o"), found[row].pop("x")) == (0, 0)
        # Source: reference comparator bxb (WFDB), oracle_cases.json
        assert found == case["bxb_matrix"]

    def test_every_beat_statistic(self, case):
        """Each ratio has the reference comparator's numerator and denominator."""
        score = beat_score(case)
        found = scoring.statistics(score.matrix)
        for printed, name in STATISTIC_NAMES.items():
            # Source: reference comparator bxb (WFDB), oracle_cases.json
            assert list(found[name]) == case["bxb_stats"][printed], printed
        for row, name in enumerate("NSVF"):
            # Source: reference comparator bxb (WFDB), oracle_cases.json
            expected = case["bxb_stats"][f"{name} missed in shutdown"]
            assert [score.matrix[row, 6], score.matrix[row].sum()] == expected

    def test_rr_error_and_shutdown(self, case):
        """RR error and shutdown time agree to the digits that the reference comparator prints."""
        score = beat_score(case)
        # Source: reference comparator bxb (WFDB), oracle_cases.json
        assert score.rms_rr_error_ms == pytest.approx(case["bxb_stats"]["RMS RR interval error ms"], abs=0.005)
        # Source: reference comparator bxb (WFDB), oracle_cases.json; it prints whole seconds
        assert int(score.shutdown_s) == case["bxb_stats"]["shutdown s"]

    @pytest.mark.parametrize("ectopy", ["V", "S"])
    def test_every_cell_of_the_run_tables(self, case, ectopy):
        """Each run length meets each run length as often as the reference comparator counts, both ways."""
        score, expected = run_score(case, ectopy), case["rxr"][{"V": "VE", "S": "SVE"}[ectopy]]
        for table, printed in ((score.by_reference_run, "sensitivity"), (score.by_test_run, "ppv")):
            cells = table.tolist()
            assert cells[0][0] == 0
            cells[0][0] = None
            # Source: reference comparator rxr (WFDB), oracle_cases.json
            assert cells == expected[f"{printed}_matrix"], printed

    @pytest.mark.parametrize("ectopy", ["V", "S"])
    def test_every_run_statistic(self, case, ectopy):
        """Couplets, short and long runs have the reference comparator's ratios."""
        found = scoring_runs.run_statistics(run_score(case, ectopy))
        for length, length_name in RUN_NAMES.items():
            for side, side_name in RUN_SIDES.items():
                # Source: reference comparator rxr (WFDB), oracle_cases.json
                expected = case["rxr"][{"V": "VE", "S": "SVE"}[ectopy]]["stats"][f"{length} {side}"]
                assert list(found[f"{length_name}_{side_name}"]) == expected


def counts(v_found, v_lost, others_called_v, others):
    """Comparison matrix of a recording of V and N beats, all found."""
    matrix = np.zeros((7, 7), np.int64)
    matrix[2, 2], matrix[2, 0] = v_found, v_lost
    matrix[0, 2], matrix[0, 0] = others_called_v, others - others_called_v
    return matrix


class TestAggregation:
    matrices = (counts(90, 10, 5, 100), counts(3, 1, 2, 296))

    def test_gross(self):
        """Gross figures are ratios of summed counts."""
        found = scoring.gross(self.matrices)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_se"] == pytest.approx(89.42, abs=0.005)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_ppv"] == pytest.approx(93.00, abs=0.005)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_fpr"] == pytest.approx(1.768, abs=0.0005)

    def test_average(self):
        """Average figures are unweighted means over the recordings."""
        found = scoring.average(self.matrices)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_se"] == pytest.approx(82.50, abs=0.005)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_ppv"] == pytest.approx(77.37, abs=0.005)
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert found["veb_fpr"] == pytest.approx(2.838, abs=0.0005)

    def test_a_recording_without_ectopy_does_not_enter_the_average(self):
        """A ratio with nothing in its denominator is left out of the average, not counted as 0."""
        # Source: reference tool sumstats (WFDB), two records, worked pair
        assert scoring.average([*self.matrices, counts(0, 0, 0, 50)])["veb_se"] == pytest.approx(82.50, abs=0.005)

    def test_nothing_to_divide_is_nan(self):
        """A ratio of nothing is missing, never 0."""
        assert np.isnan(scoring.gross([counts(0, 0, 0, 50)])["veb_se"])


class TestOptions:
    symbols = np.array(["e", "j", "n", "E", "N"])

    def test_escape_beats_as_the_comparator_maps_them(self):
        """Supraventricular escape beats are S by default."""
        # Source: reference comparator bxb (WFDB), oracle_cases.json k11
        assert "".join(annotations.CLASSES[i] for i in annotations.beat_classes(self.symbols)) == "SSSVN"

    def test_escape_beats_as_normal(self):
        """Supraventricular escape beats are N when asked; a ventricular escape beat stays V."""
        # from memory: de Chazal et al., IEEE Trans Biomed Eng 2004;51:1196 put e and j in N
        assert "".join(annotations.CLASSES[i] for i in annotations.beat_classes(self.symbols, escape_as="N")) == "NNNVN"

    def test_unknown_escape_map_is_refused(self):
        """Another class for escape beats is refused with what was expected."""
        with pytest.raises(ValueError, match="escape_as = 'V'; expected 'S'"):
            annotations.beat_classes(self.symbols, escape_as="V")

    def test_unknown_ectopy_is_refused(self):
        """Runs of another class are refused with what was expected."""
        nothing = annotations.beat_annotations([], [])
        with pytest.raises(ValueError, match="ectopy = 'N'; expected"):
            scoring_runs.compare_runs(nothing, nothing, fs_hz=250, n_samples=10, ectopy="N")

    def test_without_learning_period(self):
        """A learning period of 0 s scores the first beat too."""
        beats = annotations.beat_annotations([50, 250, 450], ["N", "V", "N"])
        score = scoring.compare_beats(beats, beats, fs_hz=250, n_samples=500, learning_s=0)
        assert score.matrix.sum() == 3

    def test_what_each_test_beat_met(self):
        """Each test beat tells the class of its reference beat, none, or that it was not scored."""
        reference = annotations.beat_annotations([50, 250, 450], ["N", "V", "N"])
        test = annotations.beat_annotations([50, 252, 350, 452], ["N", "N", "V", "N"])
        score = scoring.compare_beats(reference, test, fs_hz=250, n_samples=500, learning_s=0.5)
        met = [scoring.REFERENCE_ROWS[row] if row >= 0 else "-" for row in score.true_class]
        assert met == ["-", "V", "O", "N"]

    def test_spans_left_out(self):
        """Beats in a span that is left out count nowhere; a pair across its edge goes with the reference beat."""
        reference = annotations.beat_annotations([100, 300, 500, 700], ["N", "V", "V", "N"])
        test = annotations.beat_annotations([100, 298, 400, 502, 700], ["N", "N", "V", "V", "N"])
        score = scoring.compare_beats(
            reference, test, fs_hz=250, n_samples=900, learning_s=0, left_out=np.array([[299, 500]])
        )
        assert score.matrix.sum() == score.matrix[0, 0] == 2

    def test_no_beats_at_all(self):
        """Two empty lists give an empty matrix and no error."""
        nothing = annotations.beat_annotations([], [])
        score = scoring.compare_beats(nothing, nothing, fs_hz=250, n_samples=500, learning_s=0)
        assert score.matrix.sum() == 0 and score.rms_rr_error_ms == 0


beat_lists = st.lists(
    st.tuples(st.integers(0, 20_000), st.sampled_from("NSVFQ")), max_size=60, unique_by=lambda beat: beat[0]
).map(sorted)


def as_annotations(beats):
    return annotations.beat_annotations([at for at, _ in beats], [name for _, name in beats])


@given(beat_lists, beat_lists)
def test_every_beat_is_counted_once(reference, test):
    """Each reference beat stands in one class row and each test beat in one class column, whatever the lists."""
    score = scoring.compare_beats(
        as_annotations(reference), as_annotations(test), fs_hz=250, n_samples=20_001, learning_s=0
    )
    assert score.matrix[:5].sum() == len(reference)
    assert score.matrix[:, :5].sum() == len(test)


@given(beat_lists)
def test_a_perfect_test_is_perfect(beats):
    """Beats scored against themselves give only diagonal cells and runs of equal length."""
    same = as_annotations(beats)
    score = scoring.compare_beats(same, same, fs_hz=250, n_samples=20_001, learning_s=0)
    assert np.array_equal(score.matrix[:5, :5], np.diag(np.diag(score.matrix[:5, :5])))
    assert score.matrix.sum() == len(beats)
    assert score.rms_rr_error_ms == 0


@given(beat_lists, beat_lists)
def test_swapping_the_sides_transposes_the_match(reference, test):
    """Reference and test play the same role in the match."""
    one = scoring.match_beats(*(as_annotations(side).sample for side in (reference, test)), window=38)
    other = scoring.match_beats(*(as_annotations(side).sample for side in (test, reference)), window=38)
    assert set(zip(one.reference.tolist(), one.test.tolist(), strict=True)) == set(
        zip(other.test.tolist(), other.reference.tolist(), strict=True)
    )
