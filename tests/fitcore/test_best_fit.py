"""The best fit against closed forms and MINOS, and what it says when it cannot be trusted."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from fitcore import FitResult, Problem
from fitcore.minimise import best_fit, minima
from fitcore.minimise.best_fit import fit
from fitcore.minimise.minima import distinct_minima, find_minima, start_points
from fitcore.minimise.uncertainty import curvature_at
from observables.catalogue import Real
from observables.errors import InputError, UnknownNameError

LEVEL_95 = stats.chi2.ppf(0.95, 1)


# -- linear problems have closed forms -----------------------------------------------------------------------


LINE = {
    "at_one": (1.0, 1.0),
    "at_two": (2.0, 1.0),
    "at_three": (3.0, 1.0),
    "slope": (1.0, 0.0),
    "offset": (0.0, 1.0),
}


def closed_form(quantities, values, covariance):
    """Generalised least squares: value, covariance and chi-square."""
    design = np.array([LINE[q] for q in quantities])
    weight = np.linalg.inv(covariance)
    fitted_covariance = np.linalg.inv(design.T @ weight @ design)
    best = fitted_covariance @ design.T @ weight @ np.asarray(values)
    rest = design @ best - values
    return best, fitted_covariance, rest @ weight @ rest


@pytest.mark.parametrize("correlation", [0.0, 0.7, -0.95])
def test_a_straight_line_against_least_squares(make, tables, correlation):
    m = tables.measurement
    problem = make(
        tables.correlated(
            "b", ["at_one", "at_two"], [1.3, 2.0], [0.1, 0.2], [[1.0, correlation], [correlation, 1.0]]
        ),
        m("three", "at_three", 3.4, 0.3),
        m("o", "offset", 0.1, {"statistical": 0.2, "common": 0.1}),
        m("s", "slope", 1.2, {"statistical": 0.3, "common": -0.2}),
    )
    covariance = np.diag([0.01, 0.04, 0.09, 0.05, 0.13])
    covariance[0, 1] = covariance[1, 0] = correlation * 0.02
    covariance[3, 4] = covariance[4, 3] = -0.02
    best, spread, chi2 = closed_form(
        ["at_one", "at_two", "at_three", "offset", "slope"], [1.3, 2.0, 3.4, 0.1, 1.2], covariance
    )
    result = problem.fit(derived=["at_two"], profile=["slope", "offset", "at_two"])
    assert result.valid, result.message
    assert result.flags == ()
    assert result.chi2 == pytest.approx(chi2, rel=1e-6)
    assert result.degrees_of_freedom == 3
    assert result.p_value == pytest.approx(stats.chi2.sf(chi2, 3), rel=1e-6)
    for i, name in enumerate(("slope", "offset")):
        estimate = result.parameters[name]
        sigma = math.sqrt(spread[i, i])
        assert estimate.value == pytest.approx(best[i], abs=1e-6 * sigma)
        assert estimate.error == pytest.approx(sigma, rel=1e-6)
        assert estimate.method == "profile"
        # Ends are found to 1e-3 in chi-square: 5e-4 sigma at one sigma, 3e-4 at two.
        assert estimate.interval_68 == pytest.approx((best[i] - sigma, best[i] + sigma), abs=5e-4 * sigma)
        width = math.sqrt(LEVEL_95) * sigma
        assert estimate.interval_95 == pytest.approx((best[i] - width, best[i] + width), abs=3e-4 * sigma)
    np.testing.assert_allclose(result.covariance_matrix, spread, rtol=1e-6)
    sigmas = np.sqrt(np.diagonal(spread))
    np.testing.assert_allclose(result.correlation_matrix, spread / np.outer(sigmas, sigmas), rtol=1e-6)
    derived = result.derived["at_two"]
    slope = np.array(LINE["at_two"])
    assert derived.value == pytest.approx(slope @ best, rel=1e-7)
    assert derived.error == pytest.approx(math.sqrt(slope @ spread @ slope), rel=1e-6)


def test_linear_intervals_are_exact_for_a_linear_problem(make, tables):
    m = tables.measurement
    result = make(m("s", "slope", 1.2, 0.3), m("o", "offset", 0.1, 0.2)).fit(derived=["at_two"])
    estimate, sigma = result.parameters["slope"], 0.3
    assert estimate.method == "linear"
    assert estimate.error == pytest.approx(sigma, rel=1e-6)
    assert estimate.interval_68 == pytest.approx((0.9, 1.5), abs=1e-6)
    width = math.sqrt(LEVEL_95) * sigma
    assert estimate.interval_95 == pytest.approx((1.2 - width, 1.2 + width), abs=1e-6)
    assert (result.degrees_of_freedom, result.p_value) == (0, None)
    assert result.derived["at_two"].error == pytest.approx(math.hypot(0.6, 0.2), rel=1e-6)


def test_random_lines_against_least_squares(make, tables):
    rng = np.random.default_rng(11)
    for _ in range(5):
        quantities = rng.choice(list(LINE), size=6)
        if len(set(quantities) - {"slope"}) == 0 or len(set(quantities)) < 2:
            continue
        values = [float(np.dot(LINE[q], (1.0, 0.2)) + 0.3 * rng.normal()) for q in quantities]
        errors = [float(x) for x in rng.uniform(0.05, 0.5, 6)]
        root = rng.normal(size=(6, 9))
        matrix = root @ root.T
        matrix /= np.sqrt(np.outer(np.diagonal(matrix), np.diagonal(matrix)))
        np.fill_diagonal(matrix, 1.0)
        matrix = 0.5 * (matrix + matrix.T)
        block = tables.correlated(
            "b",
            [str(q) for q in quantities],
            values,
            errors,
            matrix.tolist(),
            ids=[f"e{i}" for i in range(6)],
        )
        problem = make(block)
        best, spread, chi2 = closed_form(quantities, values, matrix * np.outer(errors, errors))
        result = problem.fit(derived=[])
        assert result.valid, result.message
        assert result.chi2 == pytest.approx(chi2, rel=1e-6)
        for i, name in enumerate(("slope", "offset")):
            assert result.parameters[name].value == pytest.approx(best[i], abs=1e-6 * math.sqrt(spread[i, i]))
            assert result.parameters[name].error == pytest.approx(math.sqrt(spread[i, i]), rel=1e-6)


def test_one_asymmetric_measurement(make, tables):
    """r = d / sqrt(V + V' d) is 1 at +plus and -1 at -minus, so the interval is the quoted one."""
    result = make(tables.measurement("s", "slope", 2.0, [0.5, 0.2])).fit(profile=["slope"], derived=[])
    estimate = result.parameters["slope"]
    assert result.valid
    assert estimate.value == pytest.approx(2.0, abs=1e-6)
    assert estimate.interval_68 == pytest.approx((1.8, 2.5), abs=5e-4)
    z, v, slope = math.sqrt(LEVEL_95), 0.1, 0.3
    ends = [2.0 + 0.5 * (slope * z * z + s * z * math.sqrt(slope**2 * z * z + 4 * v)) for s in (-1, 1)]
    assert estimate.interval_95 == pytest.approx(tuple(ends), abs=1e-3)


# -- what belongs to every result ----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def published():
    problem = Problem.load("averages-2026")
    return problem, problem.fit(profile=["bag_K", "angle_gamma"])


def test_pulls_and_shares(published):
    problem, result = published
    assert sum(row.share for row in result.measurements) == pytest.approx(result.chi2, rel=1e-10)
    assert [row.id for row in result.measurements] == [e.id for e in problem.entries]
    for row, entry in zip(result.measurements, problem.entries, strict=True):
        error = entry.minus if row.measured > row.fitted else entry.plus
        assert row.pull == pytest.approx((entry.value - row.fitted) / error)
        assert (row.measured, row.error_plus, row.error_minus) == (entry.value, entry.plus, entry.minus)
        if entry.plus == entry.minus:  # uncorrelated set
            assert row.share == pytest.approx(row.pull**2, rel=1e-9, abs=1e-12)
        assert 0 < row.fitted_error < entry.plus * 1.001, "the fit knows at least what the entry says"


def test_shares_of_correlated_entries_sum_up(make, tables):
    block = tables.correlated("b", ["at_one", "at_two", "at_three"], [1.3, 2.0, 3.4], [0.1, 0.2, 0.3],
                              [[1.0, 0.8, 0.2], [0.8, 1.0, 0.3], [0.2, 0.3, 1.0]])  # fmt: skip
    result = make(block, tables.measurement("one", "at_one", 1.2, {"statistical": 0.1, "x": 0.1})).fit(
        derived=[]
    )
    assert sum(row.share for row in result.measurements) == pytest.approx(result.chi2, rel=1e-10)


def test_the_fitted_error_is_that_of_the_prediction(make, tables):
    m = tables.measurement
    result = make(m("s", "slope", 1.2, 0.3), m("o", "offset", 0.1, 0.2), m("two", "at_two", 2.5, 0.1)).fit(
        derived=[]
    )
    spread = np.array(result.covariance_matrix)
    slope = np.array(LINE["at_two"])
    fitted = {row.id: row.fitted_error for row in result.measurements}
    assert fitted["two"] == pytest.approx(math.sqrt(slope @ spread @ slope), rel=1e-6)


def test_identity_and_provenance(published):
    problem, result = published
    assert result.inputs_name == "averages-2026"
    assert result.inputs_sha256 == problem.inputs.sha256
    assert result.title == problem.inputs.title
    assert result.hypothesis == "standard"
    assert result.fixed == {"penguin_shift_2beta": 0.0}
    assert {"recalled"} <= {kind for kind, _, _ in result.notices}
    assert result.provenance["fingerprint"] == problem.fingerprint
    assert result.provenance["versions"]["numpy"] == np.__version__
    assert result.n_calls["starts"] > 0
    assert result.n_calls["chi2"] > 0
    assert FitResult.from_json(result.to_json()).to_json() == result.to_json()


def test_the_fit_is_a_minimum_of_the_problem(published):
    problem, result = published
    theta = np.array([result.values[name] for name in problem.parameter_names])
    assert result.chi2 == pytest.approx(problem.chi2(theta), rel=1e-12)
    covariance = np.array(result.covariance_matrix)
    sigma = np.sqrt(np.diagonal(covariance))
    # The Newton step from here to the minimum: less than the 1e-3 sigma in which the two minimisers agree.
    step = 0.5 * covariance @ problem.linearise(theta[None]).gradient[0]
    assert np.abs(step / sigma).max() < 1e-3
    rng = np.random.default_rng(3)
    around = theta + sigma * rng.normal(size=(500, len(theta))) * 0.3
    assert problem.chi2(around).min() > result.chi2


def test_the_same_inputs_give_the_same_numbers(published):
    problem, result = published
    again = problem.fit(profile=["bag_K", "angle_gamma"])
    left, right = result.to_dict(), again.to_dict()
    left.pop("provenance"), right.pop("provenance")
    assert left == right


def test_intervals_against_minos(published):
    from iminuit import Minuit

    problem, result = published
    names = problem.parameter_names
    scale = np.sqrt(np.diagonal(result.covariance_matrix))
    start = np.array([result.values[name] for name in names])
    engine = Minuit(lambda x: problem.chi2(start + x * scale), np.zeros(len(names)), name=names)
    engine.errordef = Minuit.LEAST_SQUARES
    engine.errors = np.ones(len(names))
    engine.tol, engine.strategy = 1e-3, 2
    engine.migrad()
    profiled = [n for n in names if result.parameters[n].method == "profile"]
    assert {
        "wolfenstein_lambda",
        "wolfenstein_A",
        "wolfenstein_rhobar",
        "wolfenstein_etabar",
        "bag_K",
    } <= set(profiled)
    engine.minos(*profiled)
    for name in profiled:
        i, error = names.index(name), engine.merrors[name]
        assert error.is_valid
        centre = start[i] + engine.values[name] * scale[i]
        low, high = centre + error.lower * scale[i], centre + error.upper * scale[i]
        # MINOS stops when chi-square is within about 0.01 of the level: 5e-3 sigma.
        assert result.parameters[name].interval_68 == pytest.approx((low, high), abs=5e-3 * scale[i])


def test_the_ends_of_intervals_lie_on_the_profile(published):
    """Refit everything else with the quantity held at each end, by scipy: chi-square rises by the level."""
    from scipy.optimize import least_squares

    problem, result = published
    scale = np.sqrt(np.diagonal(result.covariance_matrix))
    start = np.array([result.values[name] for name in problem.parameter_names])
    for name in ("wolfenstein_A", "wolfenstein_rhobar"):
        i = problem.parameter_names.index(name)
        for ends, level in (
            (result.parameters[name].interval_68, 1.0),
            (result.parameters[name].interval_95, LEVEL_95),
        ):
            for end in ends:

                def residuals(x, i=i, end=end):
                    theta = start + np.insert(x, i, 0.0) * scale
                    theta[i] = end
                    return problem.residuals(theta)

                found = least_squares(residuals, np.zeros(len(start) - 1), xtol=1e-12, ftol=1e-12, gtol=1e-12)
                assert 2.0 * found.cost - result.chi2 == pytest.approx(level, abs=2e-3)


# -- several minima ------------------------------------------------------------------------------------------


def test_mirror_minima_of_cp_even_inputs():
    problem = Problem.load(
        "averages-2026", without=["gamma-average", "epsilon-K", "sine-2beta", "alpha-average"]
    )
    result = problem.fit(derived=["jarlskog"])
    assert result.valid, result.message
    assert "several-minima" in result.flags
    mirror = min(result.other_minima, key=lambda m: m.chi2)
    assert mirror.chi2 == pytest.approx(result.chi2, abs=1e-5)
    assert mirror.parameters["wolfenstein_etabar"] == pytest.approx(
        -result.values["wolfenstein_etabar"], rel=1e-4
    )
    for name in ("wolfenstein_rhobar", "wolfenstein_A", "wolfenstein_lambda"):
        assert mirror.parameters[name] == pytest.approx(result.values[name], rel=1e-4)


def test_no_mirror_minimum_with_cp_odd_inputs(published):
    _, result = published
    assert "several-minima" not in result.flags
    assert all(m.chi2 > result.chi2 + LEVEL_95 for m in result.other_minima)


def test_two_solutions_of_a_square(make, tables, catalogue):
    catalogue.parameter("side", unit="1", start=1.0, lower=-5.0, upper=5.0, scale=0.1, title="side")

    def area(side) -> Real:
        return side * side

    def lean(side) -> Real:
        return side

    for function in (area, lean):
        catalogue.quantity(unit="1", title="area", source="invented")(function)
    result = make(tables.measurement("a", "area", 4.0, 0.4), tables.measurement("l", "lean", 0.5, 2.0)).fit(
        derived=[]
    )
    assert result.valid
    assert result.values["side"] == pytest.approx(2.0, abs=0.02)
    assert [m.parameters["side"] for m in result.other_minima] == pytest.approx([-2.0], abs=0.02)
    assert result.other_minima[0].chi2 > result.chi2
    assert "several-minima" in result.flags


def test_starts_spread_where_nothing_is_measured_and_from_the_terms_elsewhere(make, tables, catalogue):
    catalogue.parameter("side", unit="1", start=1.0, lower=-5.0, upper=5.0, scale=0.1, title="side")

    def area(side, slope, width) -> Real:
        return side * side + slope + width

    catalogue.quantity(unit="1", title="area", source="invented")(area)
    problem = make(
        tables.measurement("a", "area", 4.0, 0.4), tables.measurement("w", "width", 2.0, 0.1, unit="GeV")
    )
    points = start_points(problem, 64)
    assert points.shape == (64, 3)
    assert np.array_equal(points[0], problem.start)
    slope, width, side = points.T
    assert (width[1::2] == 2.0).all(), "every second one at the measured value"
    assert 0.1 < np.std(width[2::2]) < 0.4, "the others around it, about twice its error wide"
    assert (slope[1::2] == slope[0]).all()
    assert np.std(slope[2::2]) > 0, "no term and no bounds: around the start"
    assert ((side >= -5.0) & (side <= 5.0)).all()
    # One point in every sixteenth of the range: an even sequence.
    assert len(np.unique(np.floor((side[1:] + 5.0) / 10.0 * 16))) == 16
    assert np.array_equal(points, start_points(problem, 64))
    assert not np.array_equal(points, start_points(problem, 64, rng=5))


def test_a_second_minimum_in_measured_parameters_is_found(make, tables, catalogue):
    """height * depth and height + depth measured, with a vague height: the two may change places."""
    for name in ("height", "depth"):
        catalogue.parameter(name, unit="1", start=1.0, lower=0.0, upper=5.0, scale=0.1, title=name)

    def area_hd(height, depth) -> Real:
        return height * depth

    def sum_hd(height, depth) -> Real:
        return height + depth

    for function in (area_hd, sum_hd):
        catalogue.quantity(unit="1", title=function.__name__, source="invented")(function)
    result = make(
        tables.measurement("p", "area_hd", 2.0, 0.02),
        tables.measurement("t", "sum_hd", 3.0, 0.02),
        tables.measurement("h", "height", 1.0, 0.55),
        tables.measurement("d", "depth", 2.0, 0.6),
    ).fit(derived=[])
    assert result.valid
    assert result.values["height"] == pytest.approx(1.0, abs=0.05)
    # Delta chi2 = (1/0.55)^2 + (1/0.6)^2 if the two change places exactly
    assert [m.parameters["height"] for m in result.other_minima] == pytest.approx([2.0], abs=0.05)
    assert result.other_minima[0].chi2 - result.chi2 == pytest.approx(0.55**-2 + 0.6**-2, rel=0.1)


def test_minima_of_an_angle_are_told_apart_modulo_its_period(make, tables):
    problem = make(
        tables.measurement("d", "direction", 170.0, 5.0, unit="deg"), tables.measurement("o", "offset", 0, 1)
    )
    found = find_minima(problem, size=32)
    assert len(found) == 1, [m.theta for m in found]
    theta = np.array([[0.0, 170.0], [0.0, -190.0], [0.0, 171.0]])
    starts, flags = theta.copy(), np.ones(3, dtype=bool)
    assert problem.parameter_names == ("offset", "turn")
    told = distinct_minima(problem, theta, problem.chi2(theta), flags, starts)
    assert [(m.count, m.chi2) for m in told] == [(2, pytest.approx(0.0)), (1, pytest.approx(0.04))]


def test_rows_that_did_not_converge_are_no_minima(make, tables):
    problem = make(tables.measurement("s", "slope", 1.0, 0.1))
    theta = np.array([[1.0], [2.0]])
    listed = distinct_minima(problem, theta, np.array([0.0, 100.0]), np.array([False, True]), theta)
    assert [m.theta[0] for m in listed] == [2.0]
    listed = distinct_minima(problem, theta, np.array([0.0, 9.0]), np.array([False, False]), theta)
    assert [m.converged for m in listed] == [False, False]
    assert distinct_minima(problem, theta, np.array([np.inf, np.inf]), np.array([True, True]), theta) == []


# -- directions and bounds -----------------------------------------------------------------------------------


def test_an_unconstrained_direction_has_no_error(make, tables):
    """Only slope + offset is measured."""
    m = tables.measurement
    result = make(
        m("one", "at_one", 1.3, 0.1), m("again", "at_one", 1.4, 0.1), m("w", "width", 2, 0.1, unit="GeV")
    ).fit(derived=["at_one", "at_two", "square"])
    assert "unconstrained" in result.flags
    assert "slope, offset" in result.message
    for name in ("slope", "offset"):
        estimate = result.parameters[name]
        assert (estimate.error, estimate.interval_68, estimate.interval_95) == (None, None, None)
    assert result.parameters["width"].error == pytest.approx(0.1, rel=1e-6)
    assert result.degrees_of_freedom == 1, "3 terms, rank 2"
    assert result.chi2 == pytest.approx(0.5, rel=1e-6)
    assert result.derived["at_two"].error is None
    assert result.derived["square"].error is None
    assert FitResult.from_json(result.to_json()).parameters["slope"].error is None


def test_a_combination_that_is_constrained_keeps_its_error(make, tables):
    """slope and offset are loose, but their sum is what was measured."""
    m = tables.measurement
    result = make(m("one", "at_one", 1.3, 0.1), m("again", "at_one", 1.4, 0.1)).fit(derived=["at_one"])
    assert result.derived["at_one"].value == pytest.approx(1.35, abs=1e-6)
    assert result.derived["at_one"].error == pytest.approx(0.1 / math.sqrt(2.0), rel=1e-5)


def test_near_a_bound_the_parabola_is_blanked(make, tables):
    """width = 0.1 +- 0.1 with a bound at 0: one standard deviation away."""
    result = make(tables.measurement("w", "width", 0.1, 0.1, unit="GeV")).fit(derived=[])
    estimate = result.parameters["width"]
    assert "near-bound" in result.flags
    assert estimate.error is None
    assert estimate.method == "profile"
    assert estimate.interval_68 == pytest.approx((0.0, 0.2), abs=1e-3)
    assert estimate.interval_95[0] == pytest.approx(0.0, abs=1e-9)
    assert estimate.interval_95[1] == pytest.approx(0.1 + 0.1 * math.sqrt(LEVEL_95), abs=1e-3)
    assert "open-interval" in result.flags


def test_far_from_a_bound_it_is_not(make, tables):
    result = make(tables.measurement("w", "width", 0.1, 0.02, unit="GeV")).fit(derived=[])
    assert result.flags == ()
    assert result.parameters["width"].error == pytest.approx(0.02, rel=1e-6)


def test_a_best_fit_on_a_bound(make, tables):
    """The data want a negative width: the fit stops at 0 and counts intervals from there."""
    result = make(tables.measurement("w", "width", -0.1, 0.1, unit="GeV")).fit(derived=[])
    estimate = result.parameters["width"]
    assert estimate.value == pytest.approx(0.0, abs=1e-6)
    assert result.chi2 == pytest.approx(1.0, abs=1e-5)
    assert estimate.error is None
    # (w + 0.1)^2 / 0.01 = 1 + 1
    assert estimate.interval_68 == pytest.approx((0.0, 0.1 * (math.sqrt(2.0) - 1.0)), abs=1e-4)
    assert "near-bound" in result.flags


def test_flat_ranges(make, tables):
    """slope measured as 1.0 +- 0.1 with a range of 0.3: a plateau from 0.7 to 1.3."""
    result = make(tables.measurement("s", "slope", 1.0, 0.1, flat_halfwidth=0.3)).fit(
        derived=[], profile=["slope"]
    )
    assert result.valid, result.message
    assert result.chi2 == pytest.approx(0.0, abs=1e-8)
    assert result.p_value is None
    assert result.parameters["range:s"].error is None
    assert -0.3 <= result.values["range:s"] <= 0.3
    assert result.parameters["slope"].interval_68 == pytest.approx((0.6, 1.4), abs=2e-3)
    assert result.degrees_of_freedom == 0


def test_flat_theory_errors_of_the_published_set_against_gaussian_ones():
    gaussian = Problem.load("averages-2026").fit(derived=[])
    flat = Problem.load("averages-2026", theory_errors="flat").fit(derived=[])
    assert flat.chi2 < gaussian.chi2
    assert flat.p_value is None
    assert flat.theory_errors == "flat"
    assert flat.valid, flat.message


# -- fits that cannot be trusted -----------------------------------------------------------------------------


def test_two_minimisers_that_disagree_are_reported(make, tables, monkeypatch):
    m = tables.measurement
    problem = make(m("s", "slope", 1.2, 0.3), m("o", "offset", 0.1, 0.2), m("two", "at_two", 2.5, 0.1))
    honest = problem.fit(derived=[])
    assert honest.valid
    search = minima.find_minima

    def shifted(*args, **options):
        found = search(*args, **options)
        theta = found[0].theta + np.array([0.0, 0.05 * honest.parameters["offset"].error])
        return [minima.Minimum(theta, float(problem.chi2(theta)), found[0].start, 64, True)]

    monkeypatch.setattr(best_fit, "find_minima", shifted)
    result = problem.fit(derived=[])
    assert not result.valid
    assert "minimisers-disagree" in result.flags
    assert "disagree by 0.05 standard deviations" in result.message
    assert result.values == pytest.approx(honest.values, abs=1e-4), "the better of the two is reported"


def test_a_lower_minimum_of_the_search_is_not_lost(make, tables, monkeypatch):
    """MIGRAD that stops too early: the search's minimum is reported, and the disagreement with it."""
    problem = make(tables.measurement("s", "slope", 1.2, 0.3), tables.measurement("o", "offset", 0.1, 0.2))

    def lazy(problem, best, minima_, notes):
        return best.theta + np.array([0.3, 0.0]), True

    monkeypatch.setattr(best_fit, "_migrad", lazy)
    result = problem.fit(derived=[])
    assert result.values["slope"] == pytest.approx(1.2, abs=1e-6)
    assert not result.valid
    assert "minimisers-disagree" in result.flags


def test_a_search_that_did_not_converge_is_not_valid(make, tables, monkeypatch):
    problem = make(tables.measurement("s", "slope", 1.2, 0.3))
    theta = np.array([1.2])
    monkeypatch.setattr(
        best_fit, "find_minima", lambda *a, **k: [minima.Minimum(theta, 0.0, problem.start, 1, False)]
    )
    result = problem.fit(derived=[])
    assert not result.valid
    assert "solver-not-converged" in result.flags


def test_no_possible_start(make, tables):
    """root = sqrt(width - 1) with width held below 1."""
    m = tables.measurement
    result = make(m("r", "root", 1.0, 0.1), tables.table("[parameters.width]", start=0.5, upper=0.9)).fit(
        derived=[]
    )
    assert not result.valid
    assert result.flags == ("no-start",)
    assert "no start of the search is a possible point" in result.message
    assert math.isnan(result.chi2)
    assert result.inputs_sha256
    assert FitResult.from_json(result.to_json()).valid is False


def test_a_curvature_that_is_not_positive_is_not_valid(make, tables, monkeypatch):
    problem = make(tables.measurement("s", "slope", 1.2, 0.3))
    real = best_fit.curvature_at

    def saddle(problem, theta):
        from dataclasses import replace

        return replace(real(problem, theta), positive=False)

    monkeypatch.setattr(best_fit, "curvature_at", saddle)
    result = problem.fit(derived=[])
    assert not result.valid
    assert "curvature-not-positive" in result.flags


def test_unknown_or_undetermined_quantities_are_errors_before_any_work(make, tables, monkeypatch):
    problem = make(tables.measurement("t", "turn", 20.0, 5.0, unit="deg"))
    monkeypatch.setattr(best_fit, "find_minima", lambda *a, **k: pytest.fail("too late"))
    with pytest.raises(UnknownNameError):
        fit(problem, derived=["no_such"])
    with pytest.raises(InputError, match=r"nothing in .* determines"):
        fit(problem, derived=["square"])
    with pytest.raises(InputError, match="complex"):
        fit(problem, derived=["wave"])
    with pytest.raises(UnknownNameError):
        fit(problem, derived=[], profile=["no_such"])


def test_nothing_to_vary_and_no_value(make, tables):
    result = make(
        tables.measurement("r", "root", 2.0, 0.1), tables.table("[parameters.width]", fixed=True, start=0.5)
    ).fit()
    assert not result.valid
    assert result.flags == ("no-start",)


def test_a_profile_that_meets_a_lower_minimum_says_so(make, tables, monkeypatch):
    from fitcore.minimise import profile

    problem = make(tables.measurement("s", "slope", 1.2, 0.3))
    honest = profile.profile_intervals

    def lucky(*args, **options):
        table = honest(*args, **options)
        table.better_minimum, table.flagged = np.array([1.0]), (("slope", 0, "low"),)
        return table

    monkeypatch.setattr(profile, "profile_intervals", lucky)
    result = problem.fit(derived=[], profile=["slope"])
    assert {"better-minimum", "profile-failed"} <= set(result.flags)
    assert "slope" in result.message


def test_nothing_to_vary(make, tables):
    """All parameters held: chi-square at that point, no more."""
    result = make(
        tables.measurement("w", "width", 2.0, 0.1, unit="GeV"),
        tables.table("[parameters.width]", fixed=True, start=2.2),
    ).fit(derived=[])
    assert result.chi2 == pytest.approx(4.0)
    assert result.degrees_of_freedom == 1
    assert result.p_value == pytest.approx(stats.chi2.sf(4.0, 1))
    assert result.parameters == {}
    assert result.fixed == {"width": 2.2}


# -- curvature -----------------------------------------------------------------------------------------------


def test_curvature_of_a_quadratic(make, tables):
    m = tables.measurement
    problem = make(m("s", "slope", 1.2, 0.3), m("o", "offset", 0.1, 0.2), m("two", "at_two", 2.5, 0.1))
    curvature = curvature_at(problem, np.array([1.1, 0.2]))
    design = np.array([[1.0, 0.0], [0.0, 1.0], [2.0, 1.0]]) / [[0.3], [0.2], [0.1]]
    np.testing.assert_allclose(curvature.hessian, 2.0 * design.T @ design, rtol=1e-9)
    np.testing.assert_allclose(curvature.covariance, np.linalg.inv(design.T @ design), rtol=1e-9)
    assert (curvature.rank, curvature.positive, curvature.unconstrained.tolist()) == (2, True, [False, False])


def test_curvature_of_a_degenerate_direction(make, tables):
    m = tables.measurement
    problem = make(
        m("one", "at_one", 1.3, 0.1), m("w", "width", 2.0, 0.1, unit="GeV"), m("p", "root", 1.0, 0.1)
    )
    curvature = curvature_at(problem, np.array([1.1, 0.2, 2.0]))
    assert curvature.rank == 2
    assert curvature.unconstrained.tolist() == [True, True, False]
    sum_variance = np.array([1.0, 1.0, 0.0]) @ curvature.covariance @ np.array([1.0, 1.0, 0.0])
    assert sum_variance == pytest.approx(0.01, rel=1e-9), "the constrained combination keeps its variance"


def test_curvature_at_a_point_that_residuals_bend(make, tables):
    """chi2 = (s^2 - 4)^2 / e^2 has the second derivative (12 s^2 - 16) / e^2; J^T J alone would say 8 s^2 / e^2."""
    problem = make(tables.measurement("q", "square", 4.0, 0.5))
    for s in (1.9, 2.0, 2.3):
        curvature = curvature_at(problem, np.array([s]))
        assert curvature.hessian[0, 0] == pytest.approx((12 * s * s - 16) / 0.25, rel=1e-4)
