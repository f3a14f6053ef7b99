"""Profiles against closed forms, scipy, iminuit and brute force."""

from __future__ import annotations

import numpy as np
import pytest
from small_problems import DIRECTIONS, bent_valley, linear_problem

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.profile import automatic_range, profile, threshold
from observables.errors import InputError


@pytest.fixture(scope="module")
def linear(least_squares_problem, free_parameter):
    return linear_problem(least_squares_problem, free_parameter, seed=3)


@pytest.fixture(scope="module")
def banana(least_squares_problem, free_parameter):
    return least_squares_problem(
        bent_valley,
        [free_parameter("x"), free_parameter("y"), free_parameter("u"), free_parameter("w")],
        quantities={"radius": lambda t: t[0] ** 2 + t[1] ** 2, "product": lambda t: t[0] * t[1]},
    )


@pytest.fixture(scope="module")
def four_minima(least_squares_problem, free_parameter):
    def residual(t):
        return np.concatenate(
            [(t[0] ** 2 - 4) / 0.5, (t[1] ** 2 - 4) / 0.5, t[2] - 0.1 * t[0] * t[1]], axis=-1
        )

    bounds = {"lower": -6.0, "upper": 6.0}
    return least_squares_problem(
        residual, [free_parameter("x", **bounds), free_parameter("y", **bounds), free_parameter("n")]
    )


def test_thresholds():
    # Particle Data Group, review "Statistics" (2024), table 40.2: Delta chi2 for joint estimation of 1, 2, 3 parameters
    for cl, one, two, three in (
        (0.6827, 1.00, 2.30, 3.53),
        (0.9545, 4.00, 6.18, 8.03),
        (0.95, 3.84, 5.99, 7.82),
    ):
        assert [round(threshold(cl, dof), 2) for dof in (1, 2, 3)] == pytest.approx(
            [one, two, three], abs=0.011
        )
    # rounded levels mean whole standard deviations
    assert threshold(0.683, 1) == pytest.approx(1.0, abs=1e-12)
    assert threshold(0.954, 1) == pytest.approx(4.0, abs=1e-12)
    assert threshold(0.683, 2) == pytest.approx(2.296, abs=5e-4)
    assert threshold(0.954, 2) == pytest.approx(6.180, abs=5e-4)
    for cl, dof in ((0.0, 1), (1.0, 1), (1.5, 2), (0.683, 0), (0.683, 1.5)):
        with pytest.raises(InputError):
            threshold(cl, dof)


@pytest.mark.parametrize("names", [("p0",), ("combination",), ("p0", "p4"), ("p2", "combination")])
def test_gaussian_linear_profiles_equal_the_closed_form(linear, names):
    problem, best, covariance = linear
    directions = np.array([DIRECTIONS[name] for name in names])
    small = directions @ covariance @ directions.T
    centre = directions @ best
    grids = [c + np.sqrt(small[i, i]) * np.linspace(-3, 3, 31 + i) for i, c in enumerate(centre)]
    result = profile(problem, names, grids, start=best)
    away = np.stack(np.meshgrid(*grids, indexing="ij"), axis=-1) - centre
    inverse = np.linalg.inv(small)
    minimum = problem.chi2(best)[0]
    np.testing.assert_allclose(
        result.chi2, minimum + np.einsum("...i,ij,...j", away, inverse, away), atol=1e-6
    )
    np.testing.assert_allclose(result.slopes, 2 * away @ inverse, atol=1e-6)
    expected = best + np.einsum("ni,ij,jk,...k->...n", covariance, directions.T, inverse, away)
    np.testing.assert_allclose(result.parameters, expected, atol=1e-6)
    assert result.converged.all()
    assert not result.flagged.any()
    assert result.better_minimum is None
    assert result.minimum == pytest.approx(minimum, abs=1e-10)
    np.testing.assert_allclose(result.minimum_parameters, best, atol=1e-6)


@pytest.mark.parametrize(
    ("names", "grids"),
    [
        (("x", "y"), (np.linspace(-2, 3, 100), np.linspace(-2, 6, 100))),
        (("x", "u"), (np.linspace(-2, 3, 60), np.linspace(-3, 3, 50))),
    ],
)
def test_never_above_migrad(banana, names, grids):
    from iminuit import Minuit

    start = np.array([1.0, 1.0, 0.0, 0.0])
    result = profile(banana, names, grids, start=start)
    assert result.converged.all()
    assert result.n_linearisations < 3.0 * result.chi2.size
    rng = np.random.default_rng(17)
    for _ in range(40):
        at = tuple(rng.integers(0, size) for size in result.chi2.shape)
        minuit = Minuit(lambda theta: banana.chi2(theta)[0], start, name=banana.parameter_names)
        minuit.errordef, minuit.strategy, minuit.tol = 1.0, 2, 1e-4
        for name, grid, k in zip(names, grids, at, strict=True):
            minuit.values[name] = grid[k]
            minuit.fixed[name] = True
        minuit.migrad()
        assert result.chi2[at] <= minuit.fval + 0.01
        # never below the true minimum either: the value is that of a real point with these coordinates
        theta = result.parameters[at]
        assert result.chi2[at] == pytest.approx(banana.chi2(theta)[0], abs=1e-9)
        for name, grid, k in zip(names, grids, at, strict=True):
            assert theta[banana.parameter_names.index(name)] == grid[k]


def test_derived_quantities_against_slsqp_and_out_of_reach(banana):
    from scipy.optimize import minimize

    start = np.array([1.0, 1.0, 0.0, 0.0])
    grid = np.linspace(-1.0, 9.0, 41)
    result = profile(banana, "radius", grid, start=start)
    assert result.flagged[grid < 0].all()
    assert np.isinf(result.chi2[grid < 0]).all()
    assert result.converged[grid > 0.2].all()
    for k in range(6, 41, 5):
        rule = {"type": "eq", "fun": lambda x, v=grid[k]: x[0] ** 2 + x[1] ** 2 - v}
        found = [
            minimize(
                lambda x: banana.chi2(x)[0],
                s,
                constraints=rule,
                method="SLSQP",
                options={"ftol": 1e-13, "maxiter": 500},
            )
            for s in (start, result.parameters[k], -start)
        ]
        reference = min(f.fun for f in found if abs(rule["fun"](f.x)) < 1e-7)
        assert result.chi2[k] <= reference + 1e-4 * max(1.0, reference)
        reached = banana.values(result.parameters[k], ["radius"])["radius"][0]
        assert abs(reached - grid[k]) < 1e-6 * 10.0


def test_another_valley_far_out_is_found(banana):
    # a negative product is reached with x > 0 > y or x < 0 < y; only the second is cheap
    result = profile(banana, "product", np.linspace(-2.0, 8.0, 50), start=np.array([1.0, 1.0, 0.0, 0.0]))
    lowest = minimise_batch(
        banana, np.array([[-1.0, 1.5, 0.0, 0.0]]), constraints={"product": result.grids[0][:1]}
    )
    assert result.chi2[0] == pytest.approx(lowest.chi2[0], abs=1e-3)


def test_a_better_minimum_is_reported_and_used(least_squares_problem, free_parameter):
    problem = least_squares_problem(
        lambda t: np.concatenate([(t[0] ** 2 - 4) / 0.5, 0.3 * (t[0] - 2.0), t[1] - t[0]], axis=-1),
        [free_parameter("x"), free_parameter("y")],
    )
    wrong = minimise_batch(problem, [[-2.0, -2.0]]).theta[0]
    right = minimise_batch(problem, [[2.0, 2.0]])
    result = profile(problem, "x", np.linspace(-3, 3, 61), start=wrong)
    np.testing.assert_allclose(result.better_minimum, right.theta[0], atol=1e-5)
    assert result.minimum == pytest.approx(right.chi2[0], abs=1e-8)
    assert profile(problem, "x", np.linspace(-3, 3, 61), start=right.theta[0]).better_minimum is None


def test_points_beyond_bounds_are_flagged(four_minima):
    result = profile(four_minima, "x", np.linspace(-8, 8, 33), start=np.array([2.0, 2.0, 0.4]))
    outside = np.abs(result.grids[0]) > 6.0
    np.testing.assert_array_equal(result.flagged, outside)
    assert np.isinf(result.chi2[outside]).all()
    assert np.isfinite(result.chi2[~outside]).all()
    everything = profile(four_minima, "x", np.linspace(7, 8, 5), start=np.array([2.0, 2.0, 0.4]))
    assert everything.flagged.all()
    assert everything.interval() == []


def test_impossible_points_are_flagged(least_squares_problem, free_parameter):
    problem = least_squares_problem(
        lambda t: np.concatenate([np.sqrt(1.0 - t[0] ** 2) - 0.5, t[1] - t[0]], axis=-1),
        [free_parameter("x"), free_parameter("y")],
    )
    result = profile(problem, "x", np.linspace(0.0, 2.0, 41), start=np.array([0.866, 0.866]))
    np.testing.assert_array_equal(result.flagged, result.grids[0] > 1.0)


def test_points_that_do_not_converge_are_flagged(banana):
    """A problem whose gradient lies beyond x = 1.5: those points may have a value, but must be flagged."""

    class Lying:
        def __getattr__(self, name):
            return getattr(banana, name)

        def linearise(self, theta, data=None):
            linear = banana.linearise(theta, data)
            gradient = np.where(theta[:, :1] > 1.5, -linear.gradient - 1.0, linear.gradient)
            return type(linear)(linear.chi2, gradient, linear.normal)

    result = profile(Lying(), "x", np.linspace(0.0, 3.0, 31), start=np.array([1.0, 1.0, 0.0, 0.0]))
    np.testing.assert_array_equal(result.flagged, result.grids[0] > 1.5 + 1e-9)
    np.testing.assert_array_equal(result.converged, ~result.flagged)
    assert np.isfinite(result.chi2).all()


def test_kinked_profiles_with_ranges_against_brute_force(least_squares_problem, free_parameter):
    """Two ranges in one residual and a third elsewhere: the profile has plateaus and kinks."""
    from scipy.optimize import lsq_linear

    def physics(x, y):
        return np.concatenate([x + y, x - 0.5 * y, x * y, x + 0.1 * y**2], axis=-1)

    mixing = np.array([[1.0, 1.0, 0.0], [0.0, 0.0, 1.0], [0.0, 0.5, 0.0], [0.3, 0.0, 0.3]])
    error = np.array([0.1, 0.2, 0.2, 0.3])
    measured = np.array([1.0, 0.2, 0.3, 0.6])
    half = np.array([0.3, 0.2, 0.4])

    def residual(t):
        return (physics(t[0], t[1]) + sum(mixing[:, k] * t[2 + k] for k in range(3)) - measured) / error

    problem = least_squares_problem(
        residual,
        [free_parameter("x"), free_parameter("y")]
        + [free_parameter(f"r{k}", 0.0, -half[k], half[k], half[k]) for k in range(3)],
    )
    start = minimise_batch(problem, [[0.5, 0.5, 0.0, 0.0, 0.0]])
    grids = (np.linspace(-1, 2.5, 40), np.linspace(-1.5, 2.5, 40))
    result = profile(problem, ("x", "y"), grids, start=start.theta[0])
    assert result.converged.all()
    worst = 0.0
    for i in range(0, 40, 3):
        for j in range(0, 40, 3):
            constant = (physics(grids[0][i : i + 1], grids[1][j : j + 1]) - measured) / error
            exact = lsq_linear(
                mixing / error[:, None], -constant, bounds=(-half, half), method="bvls", tol=1e-14
            )
            worst = max(worst, abs(result.chi2[i, j] - 2.0 * exact.cost))
    assert worst < 1e-4


def test_automatic_range(linear, four_minima):
    problem, best, covariance = linear
    for name, direction in DIRECTIONS.items():
        sigma = np.sqrt(direction @ covariance @ direction)
        expected = (direction @ best - 4 * sigma, direction @ best + 4 * sigma)
        assert automatic_range(problem, best, covariance, name) == pytest.approx(expected, rel=1e-9)
        assert automatic_range(problem, best, None, name) == pytest.approx(expected, rel=1e-6)
    low, high = automatic_range(four_minima, np.array([2.0, 2.0, 0.4]), np.eye(3) * 9.0, "x")
    assert (low, high) == (-6.0, 6.0)


@pytest.mark.parametrize(
    ("names", "grids"),
    [
        ("p0", []),
        ("p0", [1.0, 0.0]),
        ("p0", [0.0, np.nan]),
        (("p0", "p1"), ([0.0, 1.0],)),
        (("p0", "p0"), ([0.0, 1.0], [0.0, 1.0])),
        (("p0", "p1", "p2"), ([0.0, 1.0],) * 3),
        ((), ()),
    ],
)
def test_unusable_grids_are_refused(linear, names, grids):
    problem, best, _ = linear
    with pytest.raises(InputError):
        profile(problem, names, grids, start=best)


def test_degenerate_grids(linear):
    problem, best, _ = linear
    result = profile(problem, "p0", [best[0]], start=best)
    assert result.chi2[0] == pytest.approx(problem.chi2(best)[0], abs=1e-9)
    result = profile(problem, ("p0", "p1"), ([best[0]], [best[1] - 1, best[1], best[1] + 1]), start=best)
    assert result.chi2.shape == (1, 3)
    assert result.regions() == []
