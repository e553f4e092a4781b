"""Ratio, interval, chance limits and verdict of two periods, on simulated days."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from detectors import change, spread
from detectors.spread import Periods

COUNTING_ONLY = 1e-6  # SD between days so small that beats are Poisson


def periods(counts, *, exposure=1.0, dispersion=1.0) -> Periods:
    """Periods from a list of (baseline days, after days) per event."""
    flat = [(2 * event + side, c) for event, pair in enumerate(counts) for side in (0, 1) for c in pair[side]]
    period, beats = (np.array(column) for column in zip(*flat, strict=True))
    size = len(flat)
    return Periods(period, beats.astype(float), np.full(size, exposure), np.full(size, dispersion))


def compare(
    days: Periods, *, excess=0.0, typical_sd=0.6, success_limit_pct=80.0, min_days=1, error=change.NO_ERROR
) -> change.Comparison:
    n_events = int(days.period.max()) // 2 + 1
    return change.compare(
        change.seen(days, n_events, typical_sd), excess=np.full((n_events, len(spread.GRID)), excess),
        success_limit_pct=success_limit_pct, error=error, min_days=min_days,
    )  # fmt: skip


def simulated(rng, *, patients, days, ratio, sd, beats) -> Periods:
    period = np.repeat(np.arange(2 * patients), np.tile(days, patients))
    level = beats * np.where(period % 2, ratio, 1.0) * np.exp(sd * rng.standard_normal(len(period)))
    ones = np.ones(len(period))
    return Periods(period, rng.poisson(level).astype(float), ones, ones)


def test_counting_alone_gives_the_exact_comparison_of_two_rates():
    """Without variation between days the interval is that of two Poisson rates, observed number counted by half."""
    days = Periods(np.array([0, 1]), np.array([30.0, 60.0]), np.array([54308.7, 51477.5]), np.ones(2))
    found = compare(days, typical_sd=COUNTING_ONLY)
    # Source: Gu et al. 2008 data as in the tests of statsmodels; exact interval there 1.339736 to 3.388366
    assert found.ratio[0] == pytest.approx(2.109998, rel=1e-4)
    assert 1.339736 < found.ratio_low[0] < 1.40
    assert 3.25 < found.ratio_high[0] < 3.388366
    assert found.verdict[0] == "rose_beyond_chance"


def test_no_beats_after_have_the_exact_bound():
    """With none after and many before, the upper end is the exact one-sided 95 % bound of 3.0 beats."""
    days = Periods(np.array([0, 1]), np.array([1e6, 0.0]), np.array([1e4, 1.0]), np.ones(2))
    found = compare(days, typical_sd=COUNTING_ONLY)
    assert (found.ratio[0], found.ratio_low[0]) == (0, 0)
    # Source: exact Poisson bound, -ln(0.05) = 2.996 beats where 100 are expected
    assert found.ratio_high[0] == pytest.approx(-np.log(0.05) / 100, rel=0.01)


def test_few_beats_before_and_none_after_prove_nothing():
    """Two beats before and none after in equal time are within chance, and the limit says that nothing would do."""
    found = compare(periods([([2], [0])]), typical_sd=COUNTING_ONLY)
    assert found.verdict[0] == "within_chance"
    assert found.chance_fall_limit_pct[0] == 100


def test_many_own_days_give_the_interval_of_student():
    """With plenty of beats and days the interval is Student's on the logarithms of the days."""
    rng = np.random.default_rng(11)
    before, after = np.exp(rng.normal(12, 0.5, 40)), np.exp(rng.normal(11.5, 0.5, 50))
    found = compare(periods([(before, after)]))
    # Source: scipy.stats.ttest_ind, equal variances
    expected = np.exp(stats.ttest_ind(np.log(after), np.log(before)).confidence_interval(0.95))
    assert [found.ratio_low[0], found.ratio_high[0]] == pytest.approx(list(expected), rel=0.02)
    pooled = np.sqrt((39 * np.log(before).var(ddof=1) + 49 * np.log(after).var(ddof=1)) / 88)
    one_sided = 100 * (1 - np.exp(-stats.t.ppf(0.95, 88) * pooled * np.sqrt(1 / 40 + 1 / 50)))
    assert found.chance_fall_limit_pct[0] == pytest.approx(one_sided, rel=0.03)
    assert found.variance_source[0] == "patient"


def test_a_patient_with_one_day_borrows_the_spread_of_the_programme():
    """One day each side is judged by the spread that the other patients show, and says so."""
    rng = np.random.default_rng(3)
    others = [(np.exp(rng.normal(10, 0.3, 8)), np.exp(rng.normal(10, 0.3, 8))) for _ in range(60)]
    found = compare(periods([*others, ([20000], [9000])]))
    assert found.variance_source[-1] == "programme"
    assert found.day_sd[-1] == pytest.approx(0.3, rel=0.15)
    # Source: normal theory on logarithms, one-sided 95 %, SD 0.3 between days (variability.chance_fall_pct)
    assert found.chance_fall_limit_pct[-1] == pytest.approx(50.2, abs=4)


def test_alone_in_the_programme_one_day_has_a_limit_among_the_published_ones():
    """Where nothing is known of a programme, one day against one day needs a fall between the published limits."""
    found = compare(periods([([20000], [9000])]))
    # Source: Morganroth et al., Circulation 1978;58:408 (83 %); Am J Cardiol 1987;59:278 (95 % after infarction)
    assert 83 < found.chance_fall_limit_pct[0] < 95


def test_time_between_periods_adds_its_variance():
    """An excess of 2 between-day variances has the limit of normal theory."""
    rng = np.random.default_rng(5)
    counts = [(np.exp(rng.normal(12, 0.4, 60)), np.exp(rng.normal(12, 0.4, 60))) for _ in range(30)]
    found = compare(periods(counts), excess=2.0)
    expected = 100 * (1 - np.exp(-1.645 * 0.4 * np.sqrt(2 + 2 / 60)))
    assert np.median(found.chance_fall_limit_pct) == pytest.approx(expected, rel=0.02)


def test_too_few_days_are_too_little_wear_with_their_numbers():
    """A side below the minimum of days has no verdict, a side without days no ratio either."""
    found = compare(periods([([100], [50, 60]), ([100, 90], [])]), min_days=2)
    assert found.verdict.tolist() == ["too_little_wear", "too_little_wear"]
    assert found.ratio[0] == pytest.approx(0.55, abs=0.02)
    assert np.isnan([found.ratio[1], found.ratio_high[1], found.success_probability_pct[1]]).all()


def test_none_before_can_still_rise_beyond_chance():
    """None before and hundreds after are a rise without a ratio."""
    found = compare(periods([([0, 0, 0], [300, 400, 500]), ([0, 0], [0, 0])]))
    assert found.verdict.tolist() == ["rose_beyond_chance", "within_chance"]
    assert np.isnan(found.ratio).all()


def test_over_dispersed_counts_widen_the_interval():
    """Beats that come in salvos tell less: a dispersion of 16 widens a counting interval fourfold."""
    plain, salvos = (compare(periods([([1600], [1600])], dispersion=d), typical_sd=COUNTING_ONLY) for d in (1.0, 16.0))
    widths = [np.log(found.ratio_high[0] / found.ratio_low[0]) for found in (plain, salvos)]
    assert widths[1] / widths[0] == pytest.approx(4, rel=0.02)


def test_the_variance_is_told_apart():
    """Counting, days, gap and detection share the variance of the log ratio, each as theory has it."""
    found = compare(
        periods([([100.0], [100.0])]), excess=3.0, typical_sd=COUNTING_ONLY, error=change.DetectorError(sd_ln=0.1)
    )
    # Source: variances of ln of two counts of 100 (2 / 100) beside 0.02 of detection
    shares = found.counting_share_pct[0], found.day_share_pct[0], found.gap_share_pct[0], found.detection_share_pct[0]
    assert shares == pytest.approx((50, 0, 0, 50), abs=0.5)


def test_false_beats_can_make_up_a_baseline_or_an_after_period():
    """False beats count against a verdict: taken off a baseline that falls, put on top of what rises."""
    error = change.DetectorError(false_rate=50.0)
    days = periods([([40], [0]), ([1000], [500]), ([0], [60]), ([0], [400])])
    found = compare(days, typical_sd=COUNTING_ONLY, error=error)
    assert found.verdict.tolist() == ["within_chance", "fell_beyond_chance", "within_chance", "rose_beyond_chance"]
    # Source: counting alone, of 950 true beats and with 50 false ones on top; the ends of Poisson ratios, mid-P
    plain, fewer, more = (
        compare(periods([([n], [c])]), typical_sd=COUNTING_ONLY) for n, c in ((1000, 500), (950, 500), (1000, 450))
    )
    assert found.ratio_high[1] == pytest.approx(fewer.ratio_high[0], rel=1e-2)
    assert found.ratio_low[1] == pytest.approx(more.ratio_low[0], rel=1e-2)
    assert found.ratio[1] == plain.ratio[0]


def test_what_may_be_false_beats_alone_has_no_lower_end():
    """When false beats explain all that is left after, the fall may be complete: the lower end of the ratio is 0."""
    days = periods([([10_000], [30])])
    found = compare(days, typical_sd=COUNTING_ONLY, error=change.DetectorError(false_rate=50.0))
    assert (found.ratio_low[0], found.verdict[0]) == (0, "fell_beyond_chance")
    assert compare(days, typical_sd=COUNTING_ONLY).ratio_low[0] > 0


@settings(max_examples=25, deadline=None)
@given(st.data())
def test_the_answer_does_not_depend_on_which_other_events_are_asked(data):
    """An event has the same answer, to the last bit, alone and among others, given what the programme lends."""
    side = st.lists(st.integers(0, 3) | st.integers(0, 5000), max_size=6)
    events = data.draw(
        st.lists(st.tuples(side, side), min_size=2, max_size=5).filter(lambda all_: any(map(any, all_[0])))
    )
    of_all = change.seen(periods(events), len(events), 0.6)
    lent = spread.programme_spread(of_all.fit, of_all.grid, 0.6)
    drift = np.ones((len(events), len(spread.GRID)))

    def answer(some):
        of = change.seen(periods(some), len(some), 0.6)
        error = change.DetectorError(0.1, 2.0)
        return change.compare(of, usual=lent, excess=drift[: len(some)], success_limit_pct=80, error=error)

    together, alone = answer(events), answer(events[:1])
    for name, column in alone._asdict().items():
        assert np.array_equal(column[:1], getattr(together, name)[:1], equal_nan=column.dtype.kind == "f"), name


levels_of_days = st.lists(st.integers(0, 5000), min_size=1, max_size=9)


@settings(max_examples=40, deadline=None)
@given(levels_of_days, levels_of_days, st.floats(0, 20), st.floats(0.01, 100))
def test_verdict_interval_and_limits_never_contradict(before, after, excess, unit):
    """Verdict and limits agree, the interval holds the ratio, a clear interval has a verdict, units do not matter."""
    found = compare(periods([(before, after)]), excess=excess)
    other = compare(periods([(before, after)], exposure=unit), excess=excess)
    assert other.verdict[0] == found.verdict[0]
    if sum(before) == 0:
        return
    ratio, low, high = found.ratio[0], found.ratio_low[0], found.ratio_high[0]
    assert (found.verdict[0] == change.FELL) == (100 * (1 - ratio) > found.chance_fall_limit_pct[0])
    assert (found.verdict[0] == change.ROSE) == (100 * (ratio - 1) > found.chance_rise_limit_pct[0])
    assert low <= ratio <= high or sum(after) < 6
    shares = (found.counting_share_pct, found.day_share_pct, found.gap_share_pct, found.detection_share_pct)
    assert sum(share[0] for share in shares) == pytest.approx(100)
    assert found.verdict[0] == change.FELL or high >= 1
    assert found.verdict[0] == change.ROSE or low <= 1
    assert other.ratio_high[0] == pytest.approx(high, rel=1e-4)


@pytest.mark.parametrize("sd", [0.3, 1.0])
@pytest.mark.parametrize("beats", [4, 2000])
def test_simulated_programmes_keep_the_promise(sd, beats):
    """Over a programme the interval covers about 95 % and at most 5 % are false falls, within sampling error."""
    rng = np.random.default_rng(8)
    steady = compare(simulated(rng, patients=400, days=(4, 6), ratio=1.0, sd=sd, beats=beats))
    halved = compare(simulated(rng, patients=400, days=(4, 6), ratio=0.5, sd=sd, beats=beats))
    assert np.mean(steady.verdict == change.FELL) < 0.05 + 3 * np.sqrt(0.05 * 0.95 / 400)
    covered = np.mean((halved.ratio_low <= 0.5) & (halved.ratio_high >= 0.5))
    assert covered > 0.95 - 3 * np.sqrt(0.05 * 0.95 / 400)


def test_success_probability_is_calibrated():
    """Among patients whose true ratios vary, the stated probability of success agrees with how often it is true."""
    rng = np.random.default_rng(21)
    true_ratio = np.exp(rng.uniform(np.log(0.02), np.log(2.0), 1500))
    days = simulated(rng, patients=1500, days=(5, 5), ratio=np.repeat(true_ratio, 10), sd=0.5, beats=500)
    stated = compare(days).success_probability_pct / 100
    for low, high in ((0, 0.1), (0.1, 0.5), (0.5, 0.9), (0.9, 1)):
        among = (stated >= low) & (stated <= high)
        assert np.mean(true_ratio[among] < 0.2) == pytest.approx(np.mean(stated[among]), abs=0.1)


def test_spread_of_days_is_found_in_dense_and_sparse_counts():
    """A programme's SD between days is recovered from thousands of beats a day and from two a day."""
    rng = np.random.default_rng(2)
    for beats in (2000, 2):
        days = simulated(rng, patients=300, days=(7, 7), ratio=1.0, sd=0.7, beats=beats)
        assert np.median(compare(days).day_sd) == pytest.approx(0.7, rel=0.1)


def test_few_beats_a_day_do_not_hide_how_days_differ():
    """Days of some 20 beats show the spread between them as it is: those with few beats weigh like the others."""
    days = simulated(np.random.default_rng(21), patients=300, days=(12, 12), ratio=1.0, sd=1.0, beats=20)
    assert np.median(compare(days).day_sd) == pytest.approx(1.0, rel=0.035)


def test_patients_whose_days_differ_alike_lend_a_narrow_spread():
    """A programme in which all patients have one spread lends that spread with little doubt."""
    days = simulated(np.random.default_rng(22), patients=400, days=(7, 7), ratio=1.0, sd=0.5, beats=2000)
    of = change.seen(days, 400, 0.6)
    lent = spread.programme_spread(of.fit, of.grid, 0.6)
    # Source: what is lent is rounded to 0.05; half of that beside the rounding of the grid of candidates
    assert np.exp(lent.log_median) == pytest.approx(0.5, rel=0.04)
    assert lent.sd <= 0.15


def test_levels_of_a_sparse_period_are_those_of_its_total():
    """A period of few beats is judged by its total over its exposure."""
    level = spread.levels(periods([([1, 0, 2], [0, 1])]), 2, np.array([0.01]))
    assert level.is_sparse.all()
    assert np.exp(level.log_level[0, 0]) == pytest.approx(1.0, rel=0.05)
