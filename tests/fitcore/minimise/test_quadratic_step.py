"""Box-constrained, equality-constrained quadratic steps against their optimality conditions and scipy."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from fitcore.minimise.quadratic_step import QuadraticBatch, solve_step
from fitcore.minimise.sparse_cholesky import analyse


def random_batch(rng, size, batch, constraints=0):
    jacobian = rng.normal(size=(batch, size + 3, size))
    dense = np.einsum("bmi,bmj->bij", jacobian, jacobian)
    rows, cols = np.tril_indices(size)
    residual = rng.normal(size=(batch, size + 3)) * 3.0
    quadratic = QuadraticBatch(
        analyse(rows, cols, size),
        np.ascontiguousarray(dense[:, rows, cols].T),
        np.einsum("bmi,bm->ib", jacobian, residual),
        np.zeros((size, batch)),
        -rng.random((size, batch)) * 0.5,
        rng.random((size, batch)) * 0.5,
    )
    if constraints:
        quadratic.constraint_gradient = rng.normal(size=(constraints, size, batch))
        inside = quadratic.low + 0.8 * (quadratic.high - quadratic.low) * rng.random((size, batch))
        quadratic.constraint_target = (quadratic.constraint_gradient * inside).sum(axis=1)
    return quadratic, jacobian, residual, dense


@given(st.integers(1, 8), st.integers(0, 2**32 - 1))
@settings(max_examples=40, deadline=None)
def test_box_steps_equal_scipy(size, seed):
    from scipy.optimize import lsq_linear

    rng = np.random.default_rng(seed)
    quadratic, jacobian, residual, _ = random_batch(rng, size, 4)
    step = solve_step(quadratic)
    assert step.settled.all()
    for b in range(4):
        exact = lsq_linear(
            jacobian[b],
            -residual[b],
            bounds=(quadratic.low[:, b], quadratic.high[:, b]),
            method="bvls",
            tol=1e-14,
        )
        mine = np.sum((jacobian[b] @ step.step[:, b] + residual[b]) ** 2)
        assert mine <= 2.0 * exact.cost * (1 + 1e-9) + 1e-12
        predicted = np.sum(residual[b] ** 2) - mine
        np.testing.assert_allclose(step.decrease[b], predicted, rtol=1e-8, atol=1e-9)


@given(st.integers(3, 8), st.integers(1, 2), st.integers(0, 2**32 - 1))
@settings(max_examples=40, deadline=None)
def test_constrained_box_steps_satisfy_the_optimality_conditions(size, constraints, seed):
    rng = np.random.default_rng(seed)
    quadratic, _, _, dense = random_batch(rng, size, 6, constraints)
    step = solve_step(quadratic)
    done = step.settled & ~step.singular
    s, a = step.step[:, done], quadratic.constraint_gradient[:, :, done]
    free = (step.active[:, done] == 0).sum(axis=0) >= constraints
    np.testing.assert_allclose(
        (a * s).sum(axis=1)[:, free], quadratic.constraint_target[:, done][:, free], rtol=1e-6, atol=1e-6
    )
    assert (s >= quadratic.low[:, done] - 1e-12).all()
    assert (s <= quadratic.high[:, done] + 1e-12).all()
    pull = quadratic.half_gradient[:, done] + np.einsum("bij,jb->ib", dense[done], s)
    pull += (a * step.multipliers[:, done][:, None]).sum(axis=0)
    active = step.active[:, done]
    scale = np.abs(pull).max() + 1.0
    assert np.abs(pull[(active == 0)]).max(initial=0.0) < 1e-7 * scale
    assert (pull[active > 0] <= 1e-7 * scale).all()
    assert (pull[active < 0] >= -1e-7 * scale).all()


def test_components_with_a_given_step_take_it():
    rng = np.random.default_rng(2)
    quadratic, _, _, dense = random_batch(rng, 5, 3)
    quadratic.low, quadratic.high = np.full((5, 3), -np.inf), np.full((5, 3), np.inf)
    quadratic.low[1] = quadratic.high[1] = 0.7
    step = solve_step(quadratic).step
    np.testing.assert_array_equal(step[1], 0.7)
    keep = [0, 2, 3, 4]
    right = -(quadratic.half_gradient[keep].T + 0.7 * dense[:, keep, 1])
    expected = np.linalg.solve(dense[:, keep][:, :, keep], right[:, :, None])[:, :, 0].T
    np.testing.assert_allclose(step[keep], expected, rtol=1e-9)


def test_a_rank_deficient_pair_of_ranges_needs_only_the_ridge():
    # s1 + s2 is measured, s1 and s2 alone are not: any split is a minimum, the box must still hold
    rows, cols = np.tril_indices(2)
    ones = np.ones((3, 1))
    for measured, expected in ((0.6, 0.6), (5.0, 2.0), (-5.0, -2.0)):
        quadratic = QuadraticBatch(
            analyse(rows, cols, 2),
            ones.copy(),
            np.full((2, 1), -measured),
            np.full((2, 1), 1e-6),
            np.full((2, 1), -1.0),
            np.full((2, 1), 1.0),
        )
        step = solve_step(quadratic)
        assert step.settled.all()
        np.testing.assert_allclose(step.step.sum(), expected, atol=1e-5)
