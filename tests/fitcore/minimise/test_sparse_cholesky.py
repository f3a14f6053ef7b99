"""Batched sparse L D L^T against numpy.linalg, and its behaviour on singular members of a batch."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitcore.minimise.normal_matrix import SparseNormal
from fitcore.minimise.sparse_cholesky import FROZEN, analyse


def random_normal(rng, size, terms, batch):
    """Normal matrices of random sparse Jacobians, every parameter measured once besides."""
    mask = np.vstack([rng.random((terms, size)) < 0.3, np.eye(size, dtype=bool)])
    jacobian = rng.normal(size=(batch, *mask.shape)) * mask
    jacobian[:, terms:] += mask[terms:]
    dense = np.einsum("bmi,bmj->bij", jacobian, jacobian)
    rows, cols = np.nonzero(np.tril(mask.T.astype(int) @ mask > 0))
    return SparseNormal(rows, cols, np.ascontiguousarray(dense[:, rows, cols].T)), dense


@given(st.integers(1, 12), st.integers(0, 15), st.integers(1, 5), st.integers(0, 2**32 - 1))
@settings(max_examples=60, deadline=None)
def test_solves_and_multiplies_like_dense_algebra(size, terms, batch, seed):
    rng = np.random.default_rng(seed)
    normal, dense = random_normal(rng, size, terms, batch)
    assert normal.size == size
    np.testing.assert_array_equal(normal.dense(), np.where(normal.dense() != 0, dense, 0.0))
    pattern = analyse(normal.rows, normal.cols, size)
    extra = rng.random((size, batch))
    factor = pattern.factor(normal.values, extra)
    assert not factor.singular.any()
    matrix = dense + extra.T[:, :, None] * np.eye(size)
    one = rng.normal(size=(size, batch))
    many = rng.normal(size=(size, 3, batch))
    condition = np.linalg.cond(matrix).max()
    tolerance = 1e-14 * condition * size
    expected = np.linalg.solve(matrix, one.T[:, :, None])[:, :, 0].T
    np.testing.assert_allclose(
        factor.solve(one), expected, rtol=tolerance, atol=tolerance * np.abs(expected).max()
    )
    expected = np.linalg.solve(matrix, many.transpose(2, 0, 1)).transpose(1, 2, 0)
    np.testing.assert_allclose(
        factor.solve(many), expected, rtol=tolerance, atol=tolerance * np.abs(expected).max()
    )
    product = np.einsum("bij,jb->ib", dense, one)
    np.testing.assert_allclose(pattern.product(normal.values, one), product, rtol=1e-12, atol=1e-12)
    np.testing.assert_allclose(pattern.diagonal(normal.values), np.einsum("bii->ib", dense), rtol=1e-13)


def test_minimum_degree_order_leaves_an_arrow_without_fill():
    # worst order: the hub first fills everything; minimum degree takes it last
    size = 40
    rows = np.concatenate([np.arange(size), np.arange(1, size)])
    cols = np.concatenate([np.arange(size), np.zeros(size - 1, dtype=int)])
    assert analyse(rows, cols, size).n_below == size - 1


def test_singular_members_are_marked_and_leave_the_others_alone():
    rows, cols = np.tril_indices(3)
    good = np.array([[4.0, 1.0, 0.5], [1.0, 3.0, 0.2], [0.5, 0.2, 2.0]])
    rank_two = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    batch = np.stack([good, rank_two, np.zeros((3, 3)), np.full((3, 3), np.nan), good])
    pattern = analyse(rows, cols, 3)
    right = np.ones((3, 5))
    factor = pattern.factor(np.ascontiguousarray(batch[:, rows, cols].T))
    assert factor.singular.tolist() == [False, True, True, True, False]
    alone = pattern.factor(np.ascontiguousarray(batch[[0], :][:, rows, cols].T)).solve(right[:, :1])
    np.testing.assert_array_equal(factor.solve(right)[:, [0, 4]], np.repeat(alone, 2, axis=1))
    assert np.isfinite(factor.solve(right)[:, 1]).all()


def test_frozen_components_do_not_move():
    rng = np.random.default_rng(5)
    normal, dense = random_normal(rng, 6, 8, 2)
    pattern = analyse(normal.rows, normal.cols, 6)
    weight = np.zeros((6, 2))
    weight[2] = FROZEN
    right = rng.normal(size=(6, 2))
    right[2] = 0.0
    solution = pattern.factor(normal.values, weight).solve(right)
    keep = [0, 1, 3, 4, 5]
    expected = np.linalg.solve(dense[:, keep][:, :, keep], right[keep].T[:, :, None])[:, :, 0].T
    np.testing.assert_allclose(solution[keep], expected, rtol=1e-10)
    assert np.abs(solution[2]).max() < 1e-25


@pytest.mark.parametrize(
    ("rows", "cols", "size"),
    [
        ([0], [0], 2),
        ([0, 1, 0], [0, 1, 1], 2),
        ([0, 1, 1, 1], [0, 1, 0, 0], 2),
        ([0, 2], [0, 2], 2),
        ([], [], 1),
    ],
)
def test_refuses_what_is_not_a_lower_triangle(rows, cols, size):
    with pytest.raises(ValueError, match="lower triangle"):
        analyse(np.array(rows, dtype=int), np.array(cols, dtype=int), size)
