"""chi-square, residuals and their derivatives on batches."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fitcore import Problem
from fitcore.evaluation import CHUNK


@pytest.fixture
def rich(make, tables):
    """Everything at once: blocks, shared errors, asymmetric entries, ranges, angles, two entries on one quantity."""
    m, block = tables.measurement, tables.correlated
    return make(
        block("pair", ["at_one", "at_three"], [1.3, 3.1], [0.2, 0.3], [[1.0, 0.6], [0.6, 1.0]]),
        block(
            "same",
            ["square", "square"],
            [1.1, 0.8],
            [0.3, 0.2],
            [[1.0, -0.4], [-0.4, 1.0]],
            ids=["s-1", "s-2"],
        ),
        m("named-1", "at_two", 2.0, {"statistical": 0.1, "common": 0.2}),
        m("named-2", "square", 1.2, {"statistical": 0.2, "common": -0.1}),
        m("named-3", "product", 4.4, {"statistical": 0.5, "common": 0.3}, unit="GeV"),
        m("lopsided", "root", 1.4, [0.5, 0.2]),
        m("lopsided-2", "at_two", 2.5, [0.1, 0.4]),
        m("ranged", "at_one", 1.0, 0.1, flat_halfwidth=0.2),
        m("ranged-too", "root", 1.1, 0.1, flat_halfwidth=0.05, kind="theory"),
        m("angle", "direction", 175.0, 20.0, unit="deg"),
        m("angle-2", "turn", -170.0, [9.0, 7.0], unit="deg"),
        m("width", "width", 2.2, 0.4, unit="GeV"),
    )


@pytest.fixture
def points(rich):
    rng = np.random.default_rng(5)
    theta = rich.start + np.array([p.scale for p in rich.parameters]) * rng.normal(
        size=(37, rich.n_parameters)
    )
    place = rich.parameter_names.index
    theta[:, place("width")] = rng.uniform(1.2, 4.0, 37)
    theta[:, place("turn")] = rng.uniform(-179.0, 179.0, 37)
    for name in ("range:ranged", "range:ranged-too"):
        half = rich.parameters[place(name)].upper
        theta[:, place(name)] = rng.uniform(-half, half, 37)
    # Where the wrapped angle jumps (measured value + 180) there is no derivative.
    jumps = [-5.0, 10.0]
    near = np.min([np.abs(theta[:, place("turn")] - jump) for jump in jumps], axis=0) < 0.5
    theta[near, place("turn")] += 1.0
    return theta


def test_the_problem_is_as_rich_as_it_says(rich):
    assert rich.n_entries == 14
    assert rich.parameter_names == ("slope", "offset", "width", "turn", "range:ranged", "range:ranged-too")
    assert sorted(len(block.indices) for block in rich.terms.correlation_blocks) == [2, 2, 3]
    assert [p.is_range for p in rich.parameters] == [False] * 4 + [True] * 2


def test_chi2_is_the_sum_of_squared_residuals(rich, points):
    np.testing.assert_allclose(rich.chi2(points), (rich.residuals(points) ** 2).sum(axis=1), rtol=1e-14)


def test_chi2_is_u_inverse_r_u(rich, points):
    # Elementwise residuals and the full correlation matrix, inverted by LAPACK.
    u = rich.terms.standardised(rich.predictions(points).T)
    expected = np.einsum("ib,ij,jb->b", u, np.linalg.inv(rich.terms.correlation), u)
    np.testing.assert_allclose(rich.chi2(points), expected, rtol=1e-12)


def test_predictions_are_the_quantities_plus_their_ranges(rich, points):
    values = rich.values(points, ["at_one", "square", "root"])
    predicted = dict(zip([e.id for e in rich.entries], rich.predictions(points).T, strict=True))
    place = rich.parameter_names.index
    assert np.array_equal(predicted["s-1"], values["square"])
    assert np.array_equal(predicted["ranged"], values["at_one"] + points[:, place("range:ranged")])
    assert np.array_equal(predicted["ranged-too"], values["root"] + points[:, place("range:ranged-too")])


def differences(function, theta, steps):
    """Central differences of sixth order, shape (B, ..., n)."""
    columns = []
    for i, step in enumerate(steps):
        shift = np.zeros(theta.shape[1])
        shift[i] = step
        total = 0.0
        for k, weight in ((1, 3 / 4), (2, -3 / 20), (3, 1 / 60)):
            total = total + weight * (function(theta + k * shift) - function(theta - k * shift))
        columns.append(total / step)
    return np.stack(columns, axis=-1)


def test_the_jacobian_is_that_of_the_residuals(rich, points):
    steps = np.array([1e-3, 1e-3, 1e-3, 0.05, 1e-3, 1e-3])
    found = rich.jacobian(points)
    expected = differences(rich.residuals, points, steps)
    assert found.shape == (37, rich.n_entries, rich.n_parameters)
    np.testing.assert_allclose(found, expected, rtol=1e-7, atol=1e-9)


def test_the_gradient_is_that_of_chi2(rich, points):
    lin = rich.linearise(points)
    residuals, jacobian = rich.residuals(points), rich.jacobian(points)
    assert np.array_equal(lin.chi2, rich.chi2(points))
    exact = 2.0 * np.einsum("bm,bmn->bn", residuals, jacobian)
    np.testing.assert_allclose(lin.gradient, exact, rtol=1e-11, atol=1e-10)
    steps = np.array([1e-3, 1e-3, 1e-3, 0.05, 1e-3, 1e-3])
    np.testing.assert_allclose(lin.gradient, differences(rich.chi2, points, steps), rtol=1e-6, atol=1e-6)


def test_the_normal_matrix_is_jacobian_squared(rich, points):
    normal = rich.linearise(points).normal
    jacobian = rich.jacobian(points)
    exact = np.einsum("bmi,bmj->bij", jacobian, jacobian)
    np.testing.assert_allclose(normal.dense(), exact, rtol=1e-11, atol=1e-10)
    assert (normal.rows >= normal.cols).all()
    pairs = set(zip(normal.rows.tolist(), normal.cols.tolist(), strict=True))
    assert len(pairs) == len(normal.rows), "no position twice"
    assert {(i, i) for i in range(rich.n_parameters)} <= pairs, "the whole diagonal"
    # turn meets neither slope nor width anywhere
    place = rich.parameter_names.index
    assert (place("turn"), place("slope")) not in pairs


@pytest.mark.parametrize("name", ["averages-2026", "tidewater"])
def test_derivatives_of_real_inputs(name):
    problem = Problem.load(name)
    rng = np.random.default_rng(2)
    scales = np.array([p.scale for p in problem.parameters])
    theta = problem.start + scales * rng.normal(size=(5, problem.n_parameters))
    lin, residuals, jacobian = problem.linearise(theta), problem.residuals(theta), problem.jacobian(theta)
    assert np.isfinite(lin.chi2).all()
    np.testing.assert_allclose(lin.chi2, (residuals**2).sum(axis=1), rtol=1e-13)
    exact = 2.0 * np.einsum("bm,bmn->bn", residuals, jacobian) * scales
    np.testing.assert_allclose(lin.gradient * scales, exact, rtol=1e-9, atol=1e-11 * np.abs(exact).max())
    normal = np.einsum("bmi,bmj->bij", jacobian, jacobian) * np.outer(scales, scales)
    np.testing.assert_allclose(
        lin.normal.dense() * np.outer(scales, scales), normal, rtol=1e-9, atol=1e-12 * normal.max()
    )
    slopes = differences(problem.residuals, theta, 0.02 * scales)
    np.testing.assert_allclose(
        jacobian * scales, slopes * scales, rtol=1e-6, atol=1e-8 * np.abs(jacobian * scales).max()
    )


# -- batches -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("size", [1, 2, 3, 8, 37])
def test_one_point_and_batches_agree_bit_for_bit(rich, points, size):
    part = points[:size]
    whole = rich.linearise(part)
    for function in (rich.chi2, rich.residuals, rich.predictions, rich.jacobian):
        assert np.array_equal(function(part), np.stack([function(point) for point in part]))
        assert np.array_equal(function(part), function(points)[:size])
    for i, point in enumerate(part):
        alone = rich.linearise(point[None])
        assert alone.chi2[0] == whole.chi2[i]
        assert np.array_equal(alone.gradient[0], whole.gradient[i])
        assert np.array_equal(alone.normal.values[:, 0], whole.normal.values[:, i])


def test_chunks_agree_bit_for_bit():
    problem = Problem.load("averages-2026")
    rng = np.random.default_rng(3)
    scales = np.array([p.scale for p in problem.parameters])
    theta = problem.start + scales * rng.normal(size=(CHUNK + 517, problem.n_parameters))
    whole, lin = problem.chi2(theta), problem.linearise(theta)
    for start, stop in ((0, 700), (CHUNK - 3, CHUNK + 3), (CHUNK, CHUNK + 517), (5, 6)):
        part = problem.linearise(theta[start:stop])
        assert np.array_equal(problem.chi2(theta[start:stop]), whole[start:stop])
        assert np.array_equal(part.chi2, whole[start:stop])
        assert np.array_equal(part.gradient, lin.gradient[start:stop])
        assert np.array_equal(part.normal.values, lin.normal.values[:, start:stop])


def test_an_empty_batch(rich):
    theta = np.empty((0, rich.n_parameters))
    assert rich.chi2(theta).shape == (0,)
    assert rich.residuals(theta).shape == (0, rich.n_entries)
    assert rich.linearise(theta).gradient.shape == (0, rich.n_parameters)
    assert rich.log_posterior(theta).shape == (0,)


def test_the_order_of_memory_does_not_matter(rich, points):
    assert np.array_equal(rich.chi2(np.asfortranarray(points)), rich.chi2(points))
    assert np.array_equal(rich.chi2(points[::-1]), rich.chi2(points)[::-1])


def test_points_are_not_changed(rich, points):
    before = points.copy()
    rich.chi2(points), rich.linearise(points), rich.jacobian(points), rich.log_posterior(points)
    assert np.array_equal(points, before)


# -- other data ----------------------------------------------------------------------------------------------


def test_data_replaces_the_measured_values_row_by_row(make, tables, rich, points):
    own = np.array([e.value for e in rich.entries])
    assert np.array_equal(rich.chi2(points, np.broadcast_to(own, (37, own.size))), rich.chi2(points))
    assert np.array_equal(rich.chi2(points, own), rich.chi2(points)), "one row serves all points"
    data = own + 0.1 * np.random.default_rng(1).normal(size=(37, own.size))
    rows = rich.chi2(points, data)
    for i in (0, 5, 36):
        assert rich.chi2(points[i], data[i]) == rows[i]
    lin, residuals = rich.linearise(points, data), rich.residuals(points, data)
    assert np.array_equal(lin.chi2, rows)
    np.testing.assert_allclose(
        lin.gradient,
        2 * np.einsum("bm,bmn->bn", residuals, rich.jacobian(points, data)),
        rtol=1e-11,
        atol=1e-10,
    )
    changed = make(tables.measurement("x", "at_one", 1.3, [0.4, 0.2]))
    original = make(tables.measurement("x", "at_one", 1.0, [0.4, 0.2]))
    assert original.chi2([0.7, 0.1], np.array([[1.3]])) == changed.chi2([0.7, 0.1])


def test_data_in_chunks():
    problem = Problem.load("averages-2026-tree")
    rng = np.random.default_rng(3)
    theta = np.tile(problem.start, (CHUNK + 9, 1))
    data = problem.pseudo_data(problem.start, len(theta), rng=rng)
    rows = problem.chi2(theta, data)
    assert rows[-1] == problem.chi2(theta[-1], data[-1])
    assert np.array_equal(problem.linearise(theta, data).chi2, rows)


@pytest.mark.parametrize("shape", [(36, 14), (37, 13), (13,), (37,)])
def test_data_of_the_wrong_shape(rich, points, shape):
    from observables.errors import InputError

    with pytest.raises(InputError, match="data must have the shape"):
        rich.chi2(points, np.zeros(shape))


def test_pseudo_data_follow_the_terms(rich, points):
    truth = rich.start.copy()
    truth[rich.parameter_names.index("turn")] = 178.0
    size = 20_000
    data = rich.pseudo_data(truth, size, rng=7)
    assert data.shape == (size, rich.n_entries)
    assert np.array_equal(data, rich.pseudo_data(truth, size, rng=np.random.default_rng(7)))
    residuals = rich.residuals(np.tile(truth, (size, 1)), data)
    # Whitened residuals are independent unit normals: means within 5 standard errors, false alarm 1e-5 in all.
    assert np.abs(residuals.mean(axis=0)).max() < 5 / math.sqrt(size)
    assert np.abs(np.cov(residuals.T) - np.eye(rich.n_entries)).max() < 5 * math.sqrt(2 / size)
    chi2 = rich.chi2(np.tile(truth, (size, 1)), data)
    assert abs(chi2.mean() - rich.n_entries) < 5 * math.sqrt(2 * rich.n_entries / size)


# -- impossible points ---------------------------------------------------------------------------------------


def test_impossible_points(rich, points):
    bad = points.copy()
    bad[3, rich.parameter_names.index("width")] = 0.5  # the root has no value
    bad[8] = np.nan
    chi2 = rich.chi2(bad)
    possible = np.ones(37, dtype=bool)
    possible[[3, 8]] = False
    assert np.array_equal(np.isposinf(chi2), ~possible)
    assert np.array_equal(chi2[possible], rich.chi2(points)[possible])
    lin = rich.linearise(bad)
    assert np.array_equal(lin.chi2, chi2)
    assert (lin.gradient[~possible] == 0.0).all()
    assert (lin.normal.values[:, ~possible] == 0.0).all()
    assert np.array_equal(lin.gradient[possible], rich.linearise(points).gradient[possible])
    assert np.array_equal(np.isneginf(rich.log_posterior(bad)), ~possible)
    assert rich.chi2(bad[3]) == math.inf
    assert rich.log_posterior(bad[3]) == -math.inf


def test_far_away_is_not_a_nan(rich):
    theta = np.tile(rich.start, (4, 1))
    theta[:, 0] = [1e3, -1e3, 1e150, -1e300]
    chi2 = rich.chi2(theta)
    assert not np.isnan(chi2).any()
    assert (chi2 > 1e3).all()
    lin = rich.linearise(theta)
    assert np.isfinite(lin.gradient).all()
    assert np.isfinite(lin.normal.values).all()


def test_a_kink_does_not_poison_the_rest(make, tables, catalogue):
    from observables.catalogue import Real

    def size_of_wave(wave, slope) -> Real:
        return np.abs(wave - 1.0) + slope  # no slope in turn at turn = 0

    catalogue.quantity(unit="1", title="kink", source="invented")(size_of_wave)
    problem = make(
        tables.measurement("k", "size_of_wave", 1.5, 0.1), tables.measurement("t", "turn", 3, 1, unit="deg")
    )
    theta = {"slope": 1.0, "turn": 0.0}
    lin = problem.linearise(theta)
    assert lin.chi2[0] == pytest.approx(25.0 + 9.0)
    gradient = dict(zip(problem.parameter_names, lin.gradient[0], strict=True))
    assert gradient["slope"] == pytest.approx(-100.0)
    assert np.isfinite(gradient["turn"])


def test_angles_wrap(make, tables):
    problem = make(
        tables.measurement("a", "direction", 175.0, 5.0, unit="deg"), tables.measurement("o", "offset", 0, 1)
    )
    turn = problem.parameter_names.index("turn")
    theta = np.tile(problem.start, (5, 1))
    theta[:, turn] = [170.0, 175.0, -175.0, -175.0 + 360.0, -5.0 + 1e-9]
    theta[:, problem.parameter_names.index("offset")] = 0.0
    np.testing.assert_allclose(problem.chi2(theta), [1.0, 0.0, 4.0, 4.0, 36.0**2], atol=1e-8)
    np.testing.assert_allclose(
        problem.linearise(theta).gradient[:, turn], [-0.4, 0.0, 0.8, 0.8, -14.4], atol=1e-8
    )
