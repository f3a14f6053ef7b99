"""The batch solver against closed forms, scipy and brute force; failures must be marked, never hidden."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_problems import bent_valley

from fitcore.minimise.batch_solver import EqualityConstraints, Status, minimise_batch, solve_with_retries


@pytest.fixture(scope="module")
def make_linear(least_squares_problem, free_parameter):
    def make(rng, n=5, m=9, bounded=False, correlated=False):
        jacobian = rng.normal(size=(m, n)) + (2.0 if correlated else 0.0)
        measured = rng.normal(size=m) * 2.0

        def residual(t, data=None):
            total = sum(jacobian[:, k] * t[k] for k in range(n))
            return total - (measured if data is None else data)

        low, high = (-0.4, 0.4) if bounded else (-np.inf, np.inf)
        problem = least_squares_problem(residual, [free_parameter(f"p{k}", 0.0, low, high) for k in range(n)])
        return problem, jacobian, measured

    return make


@pytest.fixture(scope="module")
def curved(least_squares_problem, free_parameter):
    """A bent valley with nuisance parameters and some derived quantities."""

    return least_squares_problem(
        bent_valley,
        [free_parameter("x"), free_parameter("y"), free_parameter("u"), free_parameter("w")],
        quantities={
            "radius": lambda t: t[0] ** 2 + t[1] ** 2,
            "sum": lambda t: t[0] + t[1] + t[2],
            "angle": lambda t: (
                57.29577951308232 * np.log((t[0] + 1j * t[1]) / abs(t[0] + 1j * t[1])).imag
                if not np.iscomplexobj(t)
                else 57.29577951308232 * np.arctan(t[1] / t[0])
            ),
        },
        periods={"angle": 180.0},
    )


@given(st.integers(0, 2**32 - 1), st.booleans())
@settings(max_examples=30, deadline=None)
def test_linear_problem_is_solved_in_one_step(make_linear, seed, correlated):
    rng = np.random.default_rng(seed)
    problem, jacobian, measured = make_linear(rng, correlated=correlated)
    exact = np.linalg.lstsq(jacobian, measured, rcond=None)[0]
    result = minimise_batch(problem, rng.normal(size=(6, 5)) * 10.0)
    assert result.converged.all()
    assert (result.n_linearisations <= 2).all()
    np.testing.assert_allclose(result.theta, np.tile(exact, (6, 1)), rtol=1e-7, atol=1e-7)
    np.testing.assert_allclose(result.chi2, problem.chi2(exact)[0], rtol=1e-10)


@given(st.integers(0, 2**32 - 1), st.booleans())
@settings(max_examples=30, deadline=None)
def test_bounded_minima_are_optimal_and_never_above_scipy(make_linear, seed, correlated):
    from scipy.optimize import lsq_linear

    rng = np.random.default_rng(seed)
    problem, jacobian, measured = make_linear(rng, bounded=True, correlated=correlated)
    exact = lsq_linear(jacobian, measured, bounds=(-0.4, 0.4), method="bvls", tol=1e-14)
    result = minimise_batch(problem, rng.uniform(-0.4, 0.4, size=(4, 5)))
    assert result.converged.all()
    assert (np.abs(result.theta) <= 0.4).all()
    # scipy's solver sometimes stops above the minimum; the optimality conditions of a convex problem decide
    assert (result.chi2 <= 2.0 * exact.cost * (1 + 1e-8) + 1e-8).all()
    slope = 2.0 * (result.theta @ jacobian.T - measured) @ jacobian
    inside = np.abs(result.theta) < 0.4
    np.testing.assert_allclose(slope[inside], 0.0, atol=1e-5)
    assert (slope[~inside] * np.sign(result.theta[~inside]) <= 1e-5).all()
    np.testing.assert_array_equal(result.at_bound != 0, ~inside)


def test_data_and_fixed_parameters_row_by_row(make_linear):
    rng = np.random.default_rng(4)
    problem, jacobian, measured = make_linear(rng)
    data = measured + rng.normal(size=(7, 9))
    fixed = rng.random((7, 5)) < 0.4
    starts = rng.normal(size=(7, 5))
    result = minimise_batch(problem, starts, data=data, fixed=fixed, chunk=3)
    for b in range(7):
        free = ~fixed[b]
        left = data[b] - jacobian[:, ~free] @ starts[b, ~free]
        exact = starts[b].copy()
        exact[free] = np.linalg.lstsq(jacobian[:, free], left, rcond=None)[0]
        np.testing.assert_allclose(result.theta[b], exact, atol=1e-8)
        slope = 2.0 * jacobian.T @ (jacobian @ exact - data[b])
        np.testing.assert_allclose(result.gradient[b], slope, atol=1e-6)
    np.testing.assert_array_equal(result.theta[fixed], starts[fixed])


def test_rows_do_not_depend_on_their_company(curved):
    starts = np.random.default_rng(1).normal(size=(50, 4)) * 2.0
    together = minimise_batch(curved, starts)
    for chunk in (1, 7, 49):
        apart = minimise_batch(curved, starts, chunk=chunk)
        np.testing.assert_allclose(apart.theta, together.theta, atol=1e-7)
        np.testing.assert_array_equal(apart.converged, together.converged)
    assert together.converged.all()
    np.testing.assert_allclose(together.chi2, 0.0, atol=1e-12)


def test_impossible_points(least_squares_problem, free_parameter):
    problem = least_squares_problem(
        lambda t: np.concatenate([np.sqrt(t[0]) - 1.5, (t[1] - t[0]) / 0.1], axis=-1),
        [free_parameter("a"), free_parameter("b")],
        impossible=lambda t: t[0] <= 0,
    )
    starts = np.array([[-1.0, 0.0], [40.0, -3.0], [1e-6, 1.0], [np.nan, 0.0]])
    result = minimise_batch(problem, starts)
    assert result.status.tolist() == [
        Status.IMPOSSIBLE_START,
        Status.CONVERGED,
        Status.CONVERGED,
        Status.IMPOSSIBLE_START,
    ]
    np.testing.assert_allclose(result.theta[1:3], 2.25, rtol=1e-6)
    assert np.isinf(result.chi2[[0, 3]]).all()
    assert not result.converged[[0, 3]].any()
    mended = solve_with_retries(problem, starts, extra_starts=np.array([[-2.0, 0.0], [4.0, 0.0]]))
    assert mended.converged.all()
    neighbour = solve_with_retries(problem, starts, alternatives=[np.full((4, 2), 3.0)])
    assert neighbour.converged.all()


def test_failing_rows_are_marked(least_squares_problem, free_parameter):
    # exp(-x) has no minimum: the solver may run, but must not claim one while chi2 still falls visibly
    problem = least_squares_problem(lambda t: 1e3 * np.exp(-0.1 * t[0]), [free_parameter("x")])
    result = minimise_batch(problem, [[0.0]], max_iterations=5)
    assert result.status[0] == Status.TOO_MANY_ITERATIONS
    assert not result.converged[0]
    # a kink in residuals that no quadratic model can follow
    kink = least_squares_problem(
        lambda t: np.concatenate([np.sqrt(np.where(t[0].real > 0, t[0], -t[0])), 0.1 * t[0]], axis=-1),
        [free_parameter("x")],
    )
    result = minimise_batch(kink, [[1.0]])
    assert not result.converged[0] or abs(result.theta[0, 0]) < 1e-6


def test_singular_direction_is_told_and_harmless(least_squares_problem, free_parameter):
    problem = least_squares_problem(
        lambda t: np.concatenate([t[0] + t[1] - 1.0, (t[0] + t[1]) ** 2 - 1.0, t[2] - 3.0], axis=-1),
        [free_parameter(name) for name in ("a", "b", "c", "nothing")],
    )
    result = minimise_batch(problem, [[0.2, 0.1, 0.0, 0.7], [5.0, 5.0, 1.0, -2.0]])
    assert result.converged.all()
    assert result.singular.all()
    np.testing.assert_allclose(result.theta[:, 0] + result.theta[:, 1], 1.0, atol=1e-4)
    np.testing.assert_array_equal(result.theta[:, 3], [0.7, -2.0])  # what nothing depends on stays put


def slsqp(problem, names, values, starts):
    from scipy.optimize import minimize

    rules = [
        {"type": "eq", "fun": lambda x, n=name, v=value: problem.values(x, [n])[n][0].real - v}
        for name, value in zip(names, values, strict=True)
    ]
    best = np.inf
    for start in starts:
        found = minimize(
            lambda x: problem.chi2(x)[0],
            start,
            constraints=rules,
            method="SLSQP",
            options={"ftol": 1e-13, "maxiter": 800},
        )
        if max(abs(rule["fun"](found.x)) for rule in rules) < 1e-6:
            best = min(best, found.fun)
    return best


def test_equality_constraints_agree_with_slsqp(curved):
    rng = np.random.default_rng(11)
    radius = rng.uniform(0.5, 8.0, size=25)
    total = rng.uniform(0.0, 5.0, size=25)
    start = np.array([1.0, 1.0, 0.0, 0.0])
    one = minimise_batch(curved, np.tile(start, (25, 1)), constraints={"radius": radius})
    two = minimise_batch(curved, one.theta, constraints={"radius": radius, "sum": total})
    assert one.converged.all()
    np.testing.assert_allclose(curved.values(one.theta, ["radius"])["radius"], radius, rtol=1e-7)
    for k in range(25):
        reference = slsqp(curved, ["radius"], [radius[k]], [start, one.theta[k]])
        assert one.chi2[k] <= reference + 1e-6 * max(1.0, reference)
        if two.converged[k]:
            reference = slsqp(curved, ["radius", "sum"], [radius[k], total[k]], [two.theta[k]])
            assert two.chi2[k] <= reference + 1e-5 * max(1.0, reference)
    assert two.converged.mean() > 0.8
    # the multiplier is the slope of the profile
    moved = minimise_batch(curved, one.theta, constraints={"radius": radius + 1e-4}, tolerance=1e-12)
    again = minimise_batch(curved, one.theta, constraints={"radius": radius - 1e-4}, tolerance=1e-12)
    np.testing.assert_allclose(one.slopes[:, 0], (moved.chi2 - again.chi2) / 2e-4, rtol=1e-3, atol=1e-3)


def test_different_constraints_in_different_rows_and_periods(curved):
    names = ("radius", "angle")
    constraints = EqualityConstraints(
        names, np.array([[3.0], [60.0], [60.0 - 180.0], [60.0 + 540.0]]), np.array([[0], [1], [1], [1]])
    )
    result = minimise_batch(curved, np.tile([1.0, 1.0, 0.0, 0.0], (4, 1)), constraints=constraints)
    assert result.converged.all()
    values = curved.values(result.theta, names)
    np.testing.assert_allclose(values["radius"][0], 3.0, rtol=1e-7)
    np.testing.assert_allclose(values["angle"][1:], 60.0, rtol=1e-7)
    np.testing.assert_allclose(result.chi2[2:], result.chi2[1], rtol=1e-6)


def test_constraints_out_of_reach_are_marked(curved):
    targets = np.array([-1.0, 2.0])
    result = minimise_batch(curved, np.tile([1.0, 1.0, 0.0, 0.0], (2, 1)), constraints={"radius": targets})
    assert result.status.tolist() == [Status.OUT_OF_REACH, Status.CONVERGED]


def test_constraint_on_a_parameter_equals_fixing_it(curved):
    x = np.linspace(-1.0, 2.0, 7)
    starts = np.zeros((7, 4))
    constrained = minimise_batch(curved, starts, constraints={"x": x})
    starts[:, 0] = x
    fixed = minimise_batch(curved, starts, fixed=np.array([True, False, False, False]))
    np.testing.assert_allclose(constrained.chi2, fixed.chi2, atol=1e-7)
    np.testing.assert_allclose(constrained.slopes[:, 0], fixed.gradient[:, 0], atol=1e-3)


def test_range_nuisances_against_exact_bounded_least_squares(least_squares_problem, free_parameter):
    """Many ranges, two of them in one residual: every row at the exact minimum, in a few linearisations."""
    from scipy.optimize import lsq_linear

    rng = np.random.default_rng(8)
    ranges, gaussian, terms = 6, 4, 10
    mixing = np.zeros((terms, ranges + gaussian))
    mixing[np.arange(terms), np.arange(terms)] = 1.0
    mixing[:ranges, ranges:] = 0.5 * rng.normal(size=(ranges, gaussian))
    mixing[0, 1] = 1.0  # ranges 0 and 1 in one residual
    mixing[1, 1] = 0.0
    widths = np.full(terms, 0.3)

    def physics(x, y):
        return np.concatenate(
            [np.cos(k * 0.4) * x + np.sin(k * 0.7) * y + 0.2 * k * x * y / 3.0 for k in range(terms)], -1
        )

    def residual(t):
        shifts = sum(mixing[:, k] * t[2 + k] for k in range(ranges + gaussian))
        priors = [t[2 + ranges + k] / 0.5 for k in range(gaussian)]
        return np.concatenate([(physics(t[0], t[1]) + shifts - 0.8) / widths, *priors], axis=-1)

    parameters = [free_parameter("x"), free_parameter("y")]
    parameters += [free_parameter(f"range{k}", 0.0, -0.4, 0.4, 0.4) for k in range(ranges)]
    parameters += [free_parameter(f"nuisance{k}", scale=0.5) for k in range(gaussian)]
    problem = least_squares_problem(residual, parameters)
    points = rng.uniform(-3.0, 3.0, size=(400, 2))
    starts = np.zeros((400, 2 + ranges + gaussian))
    starts[:, :2] = points
    fixed = np.arange(starts.shape[1]) < 2
    result = minimise_batch(problem, starts, fixed=fixed)
    assert result.converged.all()
    assert result.n_linearisations.mean() < 4.0
    matrix = np.vstack([mixing / widths[:, None], np.zeros((gaussian, ranges + gaussian))])
    matrix[terms + np.arange(gaussian), ranges + np.arange(gaussian)] = 2.0
    bound = np.array([0.4] * ranges + [np.inf] * gaussian)
    for k in range(0, 400, 8):
        constant = np.concatenate(
            [(physics(points[k, :1], points[k, 1:]) - 0.8) / widths, np.zeros(gaussian)]
        )
        exact = lsq_linear(matrix, -constant, bounds=(-bound, bound), method="bvls", tol=1e-14)
        assert result.chi2[k] == pytest.approx(2.0 * exact.cost, abs=1e-6, rel=1e-8)


@pytest.mark.parametrize("seed", [0, 6, 13])
def test_degenerate_ranges_reach_the_same_minimum_from_any_start(least_squares_problem, free_parameter, seed):
    # convex for held x and y, with ranges that share residuals and one that decouples up to rounding (seed 6)
    rng = np.random.default_rng(seed)
    ranges, gaussian, terms = 8, 6, 12
    mixing = np.zeros((terms, ranges + gaussian))
    for k in range(ranges):
        mixing[rng.integers(0, terms), k] = 1.0
        mixing[rng.integers(0, terms), k] += rng.normal() * (rng.random() < 0.5)
    for k in range(gaussian):
        mixing[:, ranges + k] = rng.normal(size=terms) * (rng.random(terms) < 0.4)
    errors, slopes, half = (
        rng.uniform(0.02, 0.5, terms),
        rng.normal(size=(terms, 3)),
        rng.uniform(0.1, 0.8, ranges),
    )

    def residual(t):
        x, y = t[0], t[1]
        physics = np.concatenate([a * x + b * y + 0.2 * c * x * y for a, b, c in slopes], axis=-1)
        shifts = sum(mixing[:, k] * t[2 + k] for k in range(ranges + gaussian))
        priors = [t[2 + ranges + k] / 0.5 for k in range(gaussian)]
        return np.concatenate([(physics + shifts - 0.8) / errors, *priors], axis=-1)

    parameters = [free_parameter("x"), free_parameter("y")]
    parameters += [free_parameter(f"range{k}", 0.0, -half[k], half[k], half[k]) for k in range(ranges)]
    parameters += [free_parameter(f"nuisance{k}", scale=0.5) for k in range(gaussian)]
    problem = least_squares_problem(residual, parameters)
    starts = np.zeros((200, len(parameters)))
    starts[:, :2] = rng.uniform(-3, 3, (200, 2))
    other = starts.copy()
    other[:, 2 : 2 + ranges] = rng.uniform(-1, 1, (200, ranges)) * half
    fixed = np.arange(len(parameters)) < 2
    first, second = (minimise_batch(problem, s, fixed=fixed) for s in (starts, other))
    assert first.converged.all()
    assert second.converged.all()
    np.testing.assert_allclose(first.chi2, second.chi2, rtol=1e-9, atol=1e-7)


def test_bad_shapes_are_refused(curved):
    with pytest.raises(ValueError, match="columns"):
        minimise_batch(curved, np.zeros((2, 3)))
    with pytest.raises(ValueError, match="rows of data"):
        minimise_batch(curved, np.zeros((2, 4)), data=np.zeros((3, 9)))
    with pytest.raises(ValueError, match="constraint targets"):
        minimise_batch(curved, np.zeros((2, 4)), constraints=EqualityConstraints(("x",), np.zeros((3, 1))))
    with pytest.raises(ValueError, match="at least 1"):
        minimise_batch(curved, np.zeros((2, 4)), chunk=0)
    assert minimise_batch(curved, np.zeros((0, 4))).theta.shape == (0, 4)
