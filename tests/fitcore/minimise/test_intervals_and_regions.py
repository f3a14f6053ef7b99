"""Interval ends and region outlines against closed forms and MINOS."""

from __future__ import annotations

import numpy as np
import pytest
from small_problems import DIRECTIONS, bent_valley, linear_problem

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.intervals import profile_intervals
from fitcore.minimise.profile import profile, threshold
from fitcore.minimise.regions import find_regions
from observables.errors import InputError

LEVELS = (1.0, 3.841)


@pytest.fixture(scope="module")
def linear(least_squares_problem, free_parameter):
    return linear_problem(least_squares_problem, free_parameter, seed=5)


def make_banana(problem_class, parameter_class, **bounds):
    return problem_class(
        bent_valley,
        [parameter_class("x"), parameter_class("y", **bounds), parameter_class("u"), parameter_class("w")],
        quantities={"radius": lambda t: t[0] ** 2 + t[1] ** 2},
    )


def test_gaussian_linear_intervals_equal_the_closed_form(linear):
    problem, best, covariance = linear
    problem.calls["linearise"] = 0
    table = profile_intervals(problem, best, list(DIRECTIONS))
    # about one linearisation per end: 7 names, 2 sides, 2 levels, once for the start
    assert problem.calls["linearise"] < 3 * 28
    assert table.flagged == ()
    assert table.better_minimum is None
    for name, direction in DIRECTIONS.items():
        centre, sigma = direction @ best, np.sqrt(direction @ covariance @ direction)
        for (low, high, low_open, high_open), level in zip(table[name], LEVELS, strict=True):
            assert low == pytest.approx(centre - sigma * np.sqrt(level), abs=1e-6)
            assert high == pytest.approx(centre + sigma * np.sqrt(level), abs=1e-6)
            assert (low_open, high_open) == (False, False)


def test_ends_lie_on_the_profile_and_agree_with_minos(least_squares_problem, free_parameter):
    from iminuit import Minuit

    problem = make_banana(least_squares_problem, free_parameter)
    best = np.array([1.0, 1.0, 0.0, 0.0])
    names = [*problem.parameter_names, "radius"]
    table = profile_intervals(problem, best, names)
    assert table.flagged == ()
    minuit = Minuit(lambda theta: problem.chi2(theta)[0], best, name=problem.parameter_names)
    minuit.errordef, minuit.strategy, minuit.tol = 1.0, 2, 1e-5
    minuit.migrad()
    minuit.hesse()
    minuit.minos(cl=1.0)
    for name in problem.parameter_names:
        low, high, *_ = table[name][0]
        error = minuit.merrors[name]
        # MINOS works to 0.01 of an error (its own stopping rule)
        assert low == pytest.approx(minuit.values[name] + error.lower, abs=0.012 * abs(error.lower))
        assert high == pytest.approx(minuit.values[name] + error.upper, abs=0.012 * error.upper)
    for name in names:
        for (low, high, low_open, high_open), level in zip(table[name], LEVELS, strict=True):
            for end, is_open in ((low, low_open), (high, high_open)):
                if not is_open:
                    held = minimise_batch(problem, best[None], constraints={name: end}, tolerance=1e-10)
                    assert held.converged[0]
                    assert held.chi2[0] == pytest.approx(level, abs=1e-3)
    # the squared radius reaches zero before it costs 3.841: the lower end is open, at its reach
    low, _, low_open, _ = table["radius"][1]
    assert low_open
    assert low == pytest.approx(0.0, abs=5e-3)


def test_bounds_open_the_interval(least_squares_problem, free_parameter):
    problem = make_banana(least_squares_problem, free_parameter, upper=1.5)
    table = profile_intervals(problem, np.array([1.0, 1.0, 0.0, 0.0]), ["y", "x"])
    for low, high, low_open, high_open in table["y"]:
        assert (high, low_open, high_open) == (1.5, False, True)
        assert low < 1.0
    # one parameter at its bound already
    linear = least_squares_problem(
        lambda t: np.concatenate([t[0] + 1.0, t[1] - t[0]], axis=-1),
        [free_parameter("a", 0.0, 0.0, 5.0), free_parameter("b")],
    )
    table = profile_intervals(linear, np.array([0.0, 0.0]), ["a", "b"])
    low, high, low_open, high_open = table["a"][0]
    assert (low, low_open, high_open) == (0.0, True, False)
    # chi2 = (1 + a)^2, minimum 1 at the bound: Delta = 1 at a = sqrt(2) - 1
    assert high == pytest.approx(np.sqrt(2.0) - 1.0, abs=1e-4)
    # b below zero: a stays on its bound, chi2 = 1 + b^2; above: a follows
    assert table["b"][0][0] == pytest.approx(-1.0, abs=1e-4)


def test_flat_directions_periods_and_better_minima(least_squares_problem, free_parameter):
    flat = least_squares_problem(
        lambda t: np.concatenate([t[0] + t[1] - 1.0, t[2] - 3.0 + 0 * t[0]], axis=-1),
        [free_parameter("a"), free_parameter("b"), free_parameter("c")],
    )
    table = profile_intervals(flat, np.array([0.5, 0.5, 3.0]), ["a", "c"])
    assert table["a"][0] == (-np.inf, np.inf, True, True)
    assert table["c"][0] == pytest.approx((2.0, 4.0, False, False), abs=1e-6)

    angle = least_squares_problem(
        lambda t: 0.3 * np.sin(np.pi * t[0] / 180.0),
        [free_parameter("phase", scale=10.0)],
        periods={"phase": 360.0},
    )
    assert profile_intervals(angle, np.array([0.0]), ["phase"])["phase"][0] == (-180.0, 180.0, True, True)

    double = least_squares_problem(
        lambda t: np.concatenate([(t[0] ** 2 - 4) / 4.0, 0.3 * (t[0] - 2.0)], axis=-1), [free_parameter("x")]
    )
    wrong = minimise_batch(double, [[-2.0]])
    table = profile_intervals(double, wrong.theta[0], ["x"])
    assert table.better_minimum is not None
    assert double.chi2(table.better_minimum)[0] < wrong.chi2[0] - 1e-4


def test_intervals_of_a_grid_profile(linear, least_squares_problem, free_parameter):
    problem, best, covariance = linear
    sigma = np.sqrt(covariance[2, 2])
    for size in (5, 40):
        result = profile(
            problem, "p2", np.linspace(best[2] - 4 * sigma, best[2] + 5 * sigma, size), start=best
        )
        for cl, width in ((0.683, 1.0), (0.954, 2.0), (0.95, 1.959964)):
            ((low, high, low_open, high_open),) = result.interval(cl)
            assert (low, high) == pytest.approx((best[2] - width * sigma, best[2] + width * sigma), abs=1e-6)
            assert (low_open, high_open) == (False, False)
    short = profile(problem, "p2", np.linspace(best[2] - 0.5 * sigma, best[2] + 4 * sigma, 20), start=best)
    ((low, high, low_open, high_open),) = short.interval(0.683)
    assert (low_open, high_open) == (True, False)
    assert low == short.grids[0][0]
    with pytest.raises(InputError, match="interval"):
        short.regions()


def test_disconnected_intervals(least_squares_problem, free_parameter):
    problem = least_squares_problem(
        lambda t: np.concatenate([(t[0] ** 2 - 4) / 0.5, t[1] - t[0]], axis=-1),
        [free_parameter("x"), free_parameter("y")],
    )
    # Delta = 4 (x^2 - 4)^2 = 1 at x^2 = 3.5, 4.5; a grid so coarse that one side falls between its points
    for grid in (np.linspace(-5, 5, 100), np.array([-5.0, -2.6, -1.5, 0.0, 1.5, 2.6, 5.0])):
        result = profile(problem, "x", grid, start=np.array([2.0, 2.0]), minima=[np.array([-2.0, -2.0])])
        intervals = result.interval()
        assert len(intervals) == 2
        expected = [(-np.sqrt(4.5), -np.sqrt(3.5)), (np.sqrt(3.5), np.sqrt(4.5))]
        for (low, high, *_), (exact_low, exact_high) in zip(intervals, expected, strict=True):
            assert (low, high) == pytest.approx((exact_low, exact_high), abs=1e-4)


def test_linear_region_is_the_ellipse(linear):
    problem, best, covariance = linear
    directions = np.array([DIRECTIONS["p1"], DIRECTIONS["combination"]])
    small = directions @ covariance @ directions.T
    centre, sigma = directions @ best, np.sqrt(np.diag(small))
    grids = [c + s * np.linspace(-3.5, 3.5, 40) for c, s in zip(centre, sigma, strict=True)]
    result = profile(problem, ("p1", "combination"), grids, start=best)
    for cl in (0.683, 0.954):
        (region,) = find_regions(result, threshold(cl, 2))
        assert region.closed
        assert region.polished.all()
        away = region.vertices - centre
        delta = np.einsum("ki,ij,kj->k", away, np.linalg.inv(small), away)
        np.testing.assert_allclose(delta, threshold(cl, 2), atol=0.01)
        (line,) = result.regions(cl)
        np.testing.assert_array_equal(line, region.vertices)
        # area by the shoelace formula: pi times level times sqrt(det), less what chords cut off
        x, y = line.T
        area = 0.5 * abs(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))
        assert area == pytest.approx(np.pi * threshold(cl, 2) * np.sqrt(np.linalg.det(small)), rel=0.03)


def test_four_minima_give_four_regions(least_squares_problem, free_parameter):
    bounds = {"lower": -6.0, "upper": 6.0}
    problem = least_squares_problem(
        lambda t: np.concatenate(
            [(t[0] ** 2 - 4) / 0.5, (t[1] ** 2 - 4) / 0.5, t[2] - 0.1 * t[0] * t[1]], axis=-1
        ),
        [free_parameter("x", **bounds), free_parameter("y", **bounds), free_parameter("n")],
    )
    minima = [np.array([sx * 2.0, sy * 2.0, sx * sy * 0.4]) for sx in (1, -1) for sy in (1, -1)]
    fine = profile(problem, ("x", "y"), (np.linspace(-5, 5, 100), np.linspace(-5, 5, 90)), start=minima[0])
    coarse = profile(
        problem,
        ("x", "y"),
        (np.linspace(-5, 5, 8), np.linspace(-5, 5, 8)),
        start=minima[0],
        minima=minima[1:],
    )
    for result in (fine, coarse):
        regions = find_regions(result, threshold(0.683, 2))
        assert len(regions) == 4
        quadrants = {tuple(np.sign(region.vertices.mean(axis=0))) for region in regions}
        assert len(quadrants) == 4
        for region in regions:
            assert region.closed
            assert region.polished.all()
            delta = 4 * ((region.vertices**2 - 4.0) ** 2).sum(axis=1)
            np.testing.assert_allclose(delta, threshold(0.683, 2), atol=0.01)
    # at a high level the four melt into a ring with a hole
    assert len(fine.regions(1 - 1e-15)) in (1, 2)


def test_himmelblau_has_four_regions(least_squares_problem, free_parameter):
    # D. Himmelblau, "Applied Nonlinear Programming" (1972): minima near (3, 2), (-2.8, 3.1), (-3.8, -3.3), (3.6, -1.8)
    problem = least_squares_problem(
        lambda t: np.concatenate([t[0] ** 2 + t[1] - 11, t[0] + t[1] ** 2 - 7, t[2] - 0.1 * t[0]], axis=-1),
        [
            free_parameter("x", lower=-6.0, upper=6.0),
            free_parameter("y", lower=-6.0, upper=6.0),
            free_parameter("n"),
        ],
    )
    result = profile(
        problem, ("x", "y"), (np.linspace(-5, 5, 80), np.linspace(-5, 5, 80)), start=np.array([3.0, 2.0, 0.3])
    )
    x, y = np.meshgrid(*result.grids, indexing="ij")
    np.testing.assert_allclose(result.chi2, (x**2 + y - 11) ** 2 + (x + y**2 - 7) ** 2, atol=1e-6)
    assert len(result.regions(0.683)) == 4


def test_regions_cut_by_the_frame_are_open_lines(linear):
    problem, best, covariance = linear
    sigma = np.sqrt(np.diag(covariance))
    grids = (
        np.linspace(best[0], best[0] + 4 * sigma[0], 30),
        np.linspace(best[1] - 4 * sigma[1], best[1] + 4 * sigma[1], 31),
    )
    result = profile(problem, ("p0", "p1"), grids, start=best)
    (region,) = find_regions(result, threshold(0.683, 2))
    assert not region.closed
    np.testing.assert_allclose(region.vertices[[0, -1], 0], best[0])
    assert region.polished.all()
    with pytest.raises(InputError, match="regions"):
        result.interval()


def test_ends_of_a_linear_problem_equal_the_closed_form_to_a_millionth(linear):
    problem, best, covariance = linear
    names = list(DIRECTIONS)
    table = profile_intervals(problem, best, names, delta_chi2=LEVELS)
    for name in names:
        centre = DIRECTIONS[name] @ best
        sigma = np.sqrt(DIRECTIONS[name] @ covariance @ DIRECTIONS[name])
        for level, (low, high, *_) in zip(LEVELS, table[name], strict=True):
            assert low == pytest.approx(centre - np.sqrt(level) * sigma, abs=1e-6 * sigma)
            assert high == pytest.approx(centre + np.sqrt(level) * sigma, abs=1e-6 * sigma)
