"""Calibration against closed forms, and bugs planted in the generator that it has to notice.

Statistical tests are seeded; their false-alarm rates for a fresh seed are stated beside each.
"""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from linear_problem import Axis, LinearProblem, TwoValleys
from scipy import optimize, stats

from fitcore import Problem
from fitcore.minimise.profile import threshold
from fitcore.studies import calibration
from fitcore.studies.calibration import calibrate
from fitcore.studies.calibration_result import CalibratedPValue, clopper_pearson, quantile_with_error
from observables.errors import ConvergenceError, InputError, StoreError, UnknownNameError

FALSE_ALARM = 1e-4


def straight_line(**bugs):
    """Ten points on a line, slope and offset fitted: 8 degrees of freedom. Entry 9 plays the auxiliary input."""
    x = np.linspace(-1.0, 1.0, 10)
    data = 0.3 + 0.5 * x + np.array([1.1, -0.4, 0.9, -1.6, 0.2, 1.3, -0.7, -1.2, 0.8, 0.5])
    return LinearProblem(np.stack([np.ones(10), x], axis=1), data, **bugs)


def bounded(measured):
    """One Gaussian measurement of a quantity that cannot be negative."""
    return LinearProblem([[1.0]], [measured], [Axis("mass", start=0.5, lower=0.0)])


def flat_range(halfwidth=1.0):
    """Two measurements of one quantity, 0 and 3, the second shifted by an unknown amount inside a flat range."""
    return LinearProblem(
        [[1.0, 0.0], [1.0, 1.0]],
        [0.0, 3.0],
        [Axis("x"), Axis("shift", lower=-halfwidth, upper=halfwidth, scale=0.5, is_range=True)],
    )


# -- goodness of fit --------------------------------------------------------------------------------------------------


@pytest.mark.stat
def test_pseudo_experiments_of_a_linear_problem_follow_the_chi_square_distribution():
    """Kolmogorov-Smirnov on 10,000 pseudo-experiments; false-alarm rate 1e-4."""
    result = calibrate(straight_line(), 10_000, rng=1)
    assert result.valid
    assert result.degrees_of_freedom == 8
    assert stats.kstest(result.toy_chi2, stats.chi2(8).cdf).pvalue > FALSE_ALARM
    # and so do the p-values of the single pseudo-experiments
    assert stats.kstest(stats.chi2(8).sf(result.toy_chi2), "uniform").pvalue > FALSE_ALARM


@pytest.mark.stat
@pytest.mark.parametrize(
    "bug", [{"stretch": 1.05}, {"frozen": (9,)}], ids=["stretched", "auxiliary-not-thrown"]
)
def test_a_bug_in_the_generator_fails_the_same_test(bug):
    result = calibrate(straight_line(**bug), 10_000, rng=1)
    assert stats.kstest(result.toy_chi2, stats.chi2(8).cdf).pvalue < FALSE_ALARM


@pytest.mark.stat
def test_calibrated_and_asymptotic_p_values_agree_where_wilks_holds():
    """Within 4 standard deviations: false-alarm rate 6e-5 each."""
    result = calibrate(
        straight_line(), 10_000, rng=2, points=[{"x1": 0.9}, {"x0": 0.5, "x1": 0.0}, {"total": 0.0}]
    )
    assert abs(result.p_value - result.asymptotic) < 4.0 * result.p_value_error
    for point in result.points:
        assert abs(point.calibrated.value - point.asymptotic) < 4.0 * point.calibrated.error


def test_p_values_differ_visibly_with_a_parameter_at_its_bound():
    # measured -1 where only positive values exist: chi-square is 1 at the bound, with nominally no freedom left
    result = calibrate(bounded(-1.0), 4000, rng=1, points={"mass": 0.0})
    assert result.chi2 == pytest.approx(1.0)
    # thrown from 0: chi-square is z^2 for negative z, else 0
    assert result.p_value == pytest.approx(stats.norm.sf(1.0), abs=4 * result.p_value_error)
    assert result.asymptotic is None
    assert result.points[0].calibrated.value == 1.0  # nothing is more compatible with 0 than a value below it
    upward = calibrate(bounded(1.0), 4000, rng=1, points={"mass": 0.0}).points[0]
    # half delta plus half chi-square: half of the asymptotic p-value
    assert upward.asymptotic == pytest.approx(2 * stats.norm.sf(1.0))
    assert upward.calibrated.value == pytest.approx(stats.norm.sf(1.0), abs=4 * upward.calibrated.error)
    assert upward.asymptotic - upward.calibrated.value > 10 * upward.calibrated.error


def test_flat_ranges_are_not_thrown_and_the_largest_p_value_counts():
    result = calibrate(flat_range(), 10_000, rng=1)
    assert result.asymptotic is None
    assert "flat-ranges" in result.flags
    # difference of the two ~ N(shift, sqrt 2), chi-square = (|difference| - 1)^2 / 2 beyond the range
    expected = stats.norm.sf(2 / math.sqrt(2)) + stats.norm.cdf(-4 / math.sqrt(2))
    assert result.chi2 == pytest.approx(2.0)
    assert result.p_value == pytest.approx(expected, abs=4 * result.p_value_error)
    assert result.thrown == 30_000  # fit, lower edge, upper edge


def test_ranges_of_a_real_problem():
    result = calibrate(Problem.load("averages-2026", theory_errors="flat"), 300, rng=1)
    assert result.valid
    assert result.asymptotic is None
    assert 0.05 < result.p_value < 0.9
    assert result.chi2 == pytest.approx(10.54, abs=0.1)


# -- intervals --------------------------------------------------------------------------------------------------------


def threshold_at_bound(mu, content):
    """Critical Delta chi-square of a unit Gaussian with mean mu >= 0, likelihood-ratio ordering, in closed form."""

    def probability(c):
        low = mu - math.sqrt(c) if c <= mu * mu else (mu * mu - c) / (2 * mu)
        return stats.norm.cdf(math.sqrt(c)) - stats.norm.cdf(low - mu)

    return optimize.brentq(lambda c: probability(c) - content, 1e-9, 30.0)


def excess(mu, measured, content):
    """Delta chi-square of the measured value above what is accepted at mu."""
    best = max(measured, 0.0)
    return (measured - mu) ** 2 - (measured - best) ** 2 - threshold_at_bound(mu, content)


def upper_end(measured, content):
    best = max(measured, 0.0)
    return optimize.brentq(excess, max(best, 1e-3) + 1e-3, best + 6.0, args=(measured, content))


def lower_end(measured, content):
    if excess(1e-6, measured, content) <= 0.0:
        return 0.0
    return optimize.brentq(excess, 1e-6, max(measured, 0.0), args=(measured, content))


@pytest.mark.parametrize(
    ("measured", "content", "published"), [(-1.0, 0.90, 0.81), (0.0, 0.90, 1.64), (-1.0, 0.6827, 0.27)]
)
def test_closed_form_of_a_bounded_gaussian_is_the_published_one(measured, content, published):
    """G. J. Feldman, R. D. Cousins, Phys. Rev. D 57, 3873, table X (values quoted from memory; two decimals)."""
    assert upper_end(measured, content) == pytest.approx(published, abs=0.0051)


@pytest.mark.stat
@pytest.mark.parametrize("measured", [-1.0, 0.5])
def test_interval_at_a_bound_is_that_of_feldman_and_cousins(measured):
    result = calibrate(
        bounded(measured), 6000, rng=3, intervals={"mass": np.linspace(0.0, 3.5, 15)}, cl=(0.683, 0.90)
    )
    region = result.regions[0]
    for c, content in enumerate((0.6827, 0.90)):
        exact = np.array([threshold_at_bound(max(mu, 1e-6), content) for mu in region.grids[0]])
        # the statistical band of one standard deviation, widened to five
        slack = (
            5 * np.maximum(region.needed_high[c] - region.needed[c], region.needed[c] - region.needed_low[c])
            + 0.02
        )
        assert (np.abs(region.needed[c] - exact) < slack).all()
        [(low, high, low_open, _)] = region.calibrated[c]
        assert low == pytest.approx(lower_end(measured, content), abs=0.06)
        assert low_open == (low == 0.0)
        assert high == pytest.approx(upper_end(measured, content), abs=0.12)
    assert region.needed[0][0] < 0.6 * region.assumed[0]  # at the bound itself less is needed


def test_interval_of_a_linear_problem_is_the_asymptotic_one():
    region = calibrate(straight_line(), 2000, rng=4, intervals=["x1", "total"]).regions
    for part in region:
        [(low, high, *_)], [(low_a, high_a, *_)] = part.calibrated[0], part.asymptotic[0]
        width = high_a - low_a
        assert abs(low - low_a) < 0.08 * width
        assert abs(high - high_a) < 0.08 * width
        ratio = part.needed[0] / part.assumed[0]
        assert np.all(np.abs(ratio - 1) < 0.2)
    # the asymptotic one is the closed form: +- 1 standard deviation
    x = np.linspace(-1.0, 1.0, 10)
    assert width / 2 == pytest.approx(math.sqrt(1 / 10 + 1 / (x @ x)), rel=2e-3)


def test_region_of_two_quantities():
    [region] = calibrate(straight_line(), 300, rng=4, intervals=[("x0", "x1")]).regions
    assert region.needed.shape == (1, 7, 7)
    assert region.assumed[0] == pytest.approx(2.296, abs=1e-3)
    [line], [line_a] = region.calibrated[0], region.asymptotic[0]
    assert np.allclose(line[0], line[-1])  # closed
    problem = straight_line()
    best = np.linalg.lstsq(problem.design, problem.measured, rcond=None)[0]
    radius = np.sqrt((line_a - best) ** 2 @ np.diag(problem.design.T @ problem.design))
    assert radius == pytest.approx(math.sqrt(2.296), rel=0.02)


# -- coverage ---------------------------------------------------------------------------------------------------------


def in_band(row):
    """Two-sided 99.9 % binomial band."""
    content = stats.chi2(1).cdf(row.threshold)
    low, high = stats.binom(row.toys, content).ppf([0.0005, 0.9995])
    return low <= row.holding <= high


def as_it_should_be(row):
    return in_band(row) and abs(row.pull_mean) < 0.10 and abs(row.pull_width - 1.0) < 0.07


@pytest.mark.stat
def test_coverage_and_pulls_of_published_averages():
    """1,000 pseudo-experiments; false-alarm rate 0.006 per quantity (mean and width 3 sigma, coverage 99.9 %)."""
    result = calibrate(
        Problem.load("averages-2026"),
        1000,
        rng=1,
        coverage=("wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar", "bag_K", "angle_alpha"),
    )
    assert result.failed == 0
    assert len(result.coverage) == 5
    for row in result.coverage:
        assert as_it_should_be(row), row


@pytest.mark.stat
@pytest.mark.parametrize(
    ("bug", "passes"), [({}, True), ({"stretch": 1.2}, False), ({"frozen": range(5)}, False)]
)
def test_a_bug_in_the_generator_shows_in_coverage_and_pulls(bug, passes):
    result = calibrate(straight_line(**bug), 1000, rng=1, coverage="all")
    assert all(as_it_should_be(row) for row in result.coverage) is passes


def test_no_pull_at_a_bound():
    [row] = calibrate(bounded(0.0), 2000, rng=1, coverage=["mass"]).coverage
    assert 0.4 < row.pulls / row.toys < 0.6
    assert row.coverage > 0.8  # over-coverage: all downward fluctuations hold the truth


# -- pseudo-experiments that fail -------------------------------------------------------------------------------------


def test_failed_pseudo_experiments_are_counted_conservatively():
    problem = straight_line(impossible_above=1.5)  # a fraction cannot be fitted at all
    result = calibrate(problem, 2000, rng=1, points={"x1": 0.5}, coverage=["x1"])
    clean = calibrate(straight_line(), 2000, rng=1, points={"x1": 0.5}, coverage=["x1"])
    assert result.goodness.failed > 20
    assert not result.valid
    assert "failed-toys" in result.flags
    assert result.p_value >= clean.p_value
    assert result.points[0].calibrated.value > clean.points[0].calibrated.value
    assert result.coverage[0].coverage < clean.coverage[0].coverage


# -- several minima ---------------------------------------------------------------------------------------------------


def test_every_pseudo_experiment_ends_in_its_lowest_valley():
    """Against a fine scan of each pseudo-experiment."""
    problem = TwoValleys()
    result = calibrate(problem, 400, rng=1, points={"x": -0.9})
    assert "several-minima" in result.flags
    rng = np.random.default_rng(np.random.SeedSequence(1, spawn_key=(0, 0)))
    data = problem.pseudo_data(np.array([result.fitted["x"]]), 400, rng=rng)
    scan = np.linspace(-3.0, 3.0, 6001)[:, None]
    lowest = np.array([problem.chi2(scan, row[None]).min() for row in data])
    assert result.toy_chi2 == pytest.approx(lowest, abs=2e-4)
    assert (result.toy_chi2 <= lowest + 1e-9).all()
    # the same for the likelihood ratio of a point in the other valley
    rng = np.random.default_rng(np.random.SeedSequence(1, spawn_key=(1, 0)))
    data = problem.pseudo_data(np.array([-0.9]), 400, rng=rng)
    lowest = np.array([problem.chi2(scan, row[None]).min() for row in data])
    ratio = problem.chi2(np.full((400, 1), -0.9), data) - lowest
    point = result.points[0]
    assert point.calibrated.exceeding == pytest.approx((ratio >= point.delta_chi2).sum(), abs=1)


# -- small parts ------------------------------------------------------------------------------------------------------


def test_p_value_counts_the_data_itself():
    found = CalibratedPValue.count(np.array([1.0, 2.0, 3.0]), 2.5, 0, "fit")
    assert found.value == 2 / 4
    assert CalibratedPValue.count(np.zeros(9), 1.0, 0, "fit").value == 0.1  # never zero


@pytest.mark.parametrize(("successes", "trials"), [(0, 10), (3, 10), (10, 10), (500, 1000)])
def test_clopper_pearson_against_scipy(successes, trials):
    exact = stats.binomtest(successes, trials).proportion_ci(math.erf(math.sqrt(0.5)), "exact")
    assert clopper_pearson(successes, trials) == pytest.approx((exact.low, exact.high), abs=1e-12)


def test_quantile_is_conservative():
    values = np.arange(1.0, 100.0)  # 99 values: the next one falls below the k-th with probability k / 100
    assert quantile_with_error(values, 0.90)[0] == 90.0
    assert quantile_with_error(values, 0.901)[0] == 91.0
    assert quantile_with_error(values[:5], 0.90)[0] == math.inf


# -- store ------------------------------------------------------------------------------------------------------------

ARGUMENTS = {"rng": 5, "points": {"x1": 0.7}, "coverage": ("x0",)}


def numbers(result):
    data = result.to_dict()
    del data["provenance"]
    return json.dumps(data), result.toy_chi2.tobytes()


def test_interrupted_and_resumed_is_bit_identical(tmp_path, monkeypatch):
    monkeypatch.setattr(calibration, "BLOCK", 100)
    path = tmp_path / "toys.jsonl"
    whole = calibrate(straight_line(), 1050, **ARGUMENTS)
    seen = []

    def stop(done, total):
        seen.append((done, total))
        if done >= 700:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        calibrate(straight_line(), 1050, store=path, progress=stop, **ARGUMENTS)
    assert seen[-1] == (700, 2100)
    resumed = []
    result = calibrate(
        straight_line(), 1050, store=path, progress=lambda *now: resumed.append(now), **ARGUMENTS
    )
    assert resumed[0] == (700, 2100)
    assert numbers(result) == numbers(whole)
    # a third time nothing is left to do; more pseudo-experiments reuse the whole blocks
    again = []
    assert numbers(
        calibrate(straight_line(), 1050, store=path, progress=lambda *now: again.append(now), **ARGUMENTS)
    ) == numbers(whole)
    assert again == [(2100, 2100)]
    more = []
    calibrate(straight_line(), 1100, store=path, progress=lambda *now: more.append(now), **ARGUMENTS)
    assert more[0] == (2000, 2200)


@pytest.mark.parametrize("cut", [1, 40, 2000])
def test_a_torn_tail_is_ignored(tmp_path, monkeypatch, cut):
    monkeypatch.setattr(calibration, "BLOCK", 100)
    path = tmp_path / "toys.jsonl"
    whole = calibrate(straight_line(), 500, store=path, **ARGUMENTS)
    path.write_bytes(path.read_bytes()[:-cut])
    assert numbers(calibrate(straight_line(), 500, store=path, **ARGUMENTS)) == numbers(whole)


def test_a_torn_header_is_started_again(tmp_path):
    path = tmp_path / "toys.jsonl"
    calibrate(straight_line(), 50, store=path, **ARGUMENTS)
    path.write_bytes(path.read_bytes()[:25])
    calibrate(straight_line(), 50, store=path, **ARGUMENTS)
    assert path.read_bytes().count(b"\n") == 3


def test_a_damaged_line_is_an_error(tmp_path, monkeypatch):
    monkeypatch.setattr(calibration, "BLOCK", 100)
    path = tmp_path / "toys.jsonl"
    calibrate(straight_line(), 300, store=path, **ARGUMENTS)
    lines = path.read_bytes().splitlines(keepends=True)
    lines[2] = lines[2].replace(b"1", b"2", 30)
    path.write_bytes(b"".join(lines))
    before = path.read_bytes()
    with pytest.raises(StoreError, match="line 3 is damaged"):
        calibrate(straight_line(), 300, store=path, **ARGUMENTS)
    assert path.read_bytes() == before


def test_another_calibration_is_refused_with_the_difference(tmp_path):
    path = tmp_path / "toys.jsonl"
    tree = Problem.load("averages-2026-tree")
    calibrate(tree, 20, rng=5, store=path)
    before = path.read_bytes()
    with pytest.raises(StoreError, match="seed: 5 in the file, 6 asked for"):
        calibrate(tree, 20, rng=6, store=path)
    with pytest.raises(StoreError, match=r"points: fit in the file, fit, angle_beta = 22\.0 asked for"):
        calibrate(tree, 20, rng=5, store=path, points={"angle_beta": 22.0})
    one = tree.entries[-1].id
    other = Problem.load("averages-2026-tree", settings=[f"{one}.error=1.23456"])
    with pytest.raises(StoreError, match=r"\+error = 1.23456"):
        calibrate(other, 20, rng=5, store=path)
    assert path.read_bytes() == before


@pytest.mark.parametrize("content", [b"hello\nworld\n", b'{"a": 1}\n', b"no newline at all"])
def test_a_foreign_file_is_left_alone(tmp_path, content):
    path = tmp_path / "toys.jsonl"
    path.write_bytes(content)
    with pytest.raises(StoreError, match="is not a file of pseudo-experiments"):
        calibrate(straight_line(), 20, rng=5, store=path)
    assert path.read_bytes() == content


# -- mistakes ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ({"toys": 0}, InputError, "at least one"),
        ({"toys": -5}, InputError, "at least one"),
        ({"toys": 10.5}, InputError, "at least one"),
        ({"points": {"angle_bta": 1.0}}, UnknownNameError, "did you mean angle_beta"),
        ({"points": {"V_ub": 1.0}}, InputError, "complex"),
        ({"points": {"angle_beta": math.nan}}, InputError, "finite"),
        ({"points": {}}, InputError, "one or two"),
        ({"intervals": ["nonsense"]}, UnknownNameError, "nonsense"),
        ({"intervals": [("angle_beta", "angle_beta")]}, InputError, "two different"),
        ({"intervals": {"angle_beta": [3.0, 1.0]}}, InputError, "increasing"),
        ({"intervals": {"side_Rb": [-3.0, -2.0]}}, InputError, "no parameter point"),
        ({"coverage": ["nonsense"]}, UnknownNameError, "nonsense"),
        ({"cl": 1.5}, InputError, "confidence level"),
    ],
)
def test_mistakes_are_named(arguments, error, message):
    with pytest.raises(error, match=message):
        calibrate(Problem.load("averages-2026-tree"), **{"toys": 50, "rng": 1, **arguments})


def test_a_problem_calibrates_itself():
    result = Problem.load("averages-2026-tree").calibrate(50, rng=1, points={"angle_beta": 22.0})
    assert result.toys == 50
    assert result.thrown == 100


def test_a_point_out_of_reach_is_flagged():
    result = calibrate(
        Problem.load("averages-2026-tree"), 50, rng=1, points=[{"side_Rb": -3.0}, {"side_Rb": 0.4}]
    )
    assert "out-of-reach" in result.flags
    assert result.points[0].calibrated is None
    assert result.points[0].to_dict()["p_value"] is None
    assert 0.0 < result.points[1].calibrated.value <= 1.0


def test_data_that_cannot_be_fitted():
    problem = straight_line()
    problem.chi2 = lambda theta, data=None: np.full(len(theta), np.inf)
    with pytest.raises(ConvergenceError, match="cannot be fitted"):
        calibrate(problem, 10, rng=1)


def test_thresholds_keep_their_meaning():
    assert threshold(0.683, 1) == pytest.approx(1.0)
    assert threshold(0.683, 2) == pytest.approx(2.296, abs=1e-3)
