"""Factorise many symmetric matrices of one sparsity pattern at once.

The pattern is analysed once: minimum-degree order and fill-in (Tinney and Walker, Proc. IEEE 55, 1801 (1967);
George and Liu, "Computer Solution of Large Sparse Positive Definite Systems", 1981). The numbers then run through
a right-looking L D L^T whose every operation is a NumPy operation along the batch axis, so the cost of Python is
shared by the whole batch and one singular matrix never disturbs its neighbours.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

SINGULAR_PIVOT = 1e-13
"""A pivot below this fraction of its diagonal element is rounding noise: the matrix counts as singular."""

FROZEN = 1e30
"""Relative weight put on a diagonal element to hold a component still."""


@dataclass(frozen=True, eq=False)
class Pattern:
    """Symbolic factorisation of a symmetric sparsity pattern; make it with `analyse`.

    Attributes
    ----------
    size : int
        Dimension n.
    order : ndarray of int, shape (n,)
        Elimination order: position k of the factor is component ``order[k]``.
    columns : tuple of (start, stop, rows, updates)
        For each column of L: its slice in the factor's storage, the positions below the diagonal, and, for each of
        those positions q, where the products with the later ones go.
    """

    size: int
    order: np.ndarray
    columns: tuple
    n_below: int
    diagonal_from: np.ndarray
    diagonal_to: np.ndarray
    below_from: np.ndarray
    below_to: np.ndarray
    product_from: np.ndarray
    product_with: np.ndarray
    product_starts: np.ndarray
    diagonal_of: np.ndarray

    def diagonal(self, values: np.ndarray) -> np.ndarray:
        """Diagonal elements, (n, B), of matrices stored as (nnz, B)."""
        diagonal: np.ndarray = values[self.diagonal_of]
        return diagonal

    def product(self, values: np.ndarray, vectors: np.ndarray) -> np.ndarray:
        """Matrix times vector for every member of the batch: (nnz, B), (n, B) -> (n, B)."""
        terms = values[self.product_from]
        terms *= vectors[self.product_with]
        return np.add.reduceat(terms, self.product_starts, axis=0)

    def factor(self, values: np.ndarray, added: np.ndarray | None = None) -> Factor:
        """L D L^T of every matrix of the batch, with `added` on the diagonal.

        Parameters
        ----------
        values : ndarray, shape (nnz, B)
            Lower triangles in the order of the pattern given to `analyse`.
        added : ndarray, shape (n, B), optional
            Non-negative numbers added to the diagonals: a ridge, damping, or a huge one that freezes a component.

        Returns
        -------
        Factor
            Never raises: rows with a pivot that is not safely positive are marked in ``Factor.singular``; the
            components concerned are frozen there, so that `Factor.solve` stays finite.
        """
        batch = values.shape[1]
        pivots = np.empty((self.size, batch))
        pivots[self.diagonal_to] = values[self.diagonal_from]
        if added is not None:
            pivots += added[self.order]
        smallest = SINGULAR_PIVOT * np.abs(pivots)
        below = np.zeros((self.n_below, batch))
        below[self.below_to] = values[self.below_from]
        singular = np.zeros(batch, dtype=bool)
        for k, (start, stop, rows, updates) in enumerate(self.columns):
            pivot = pivots[k]
            bad = ~(pivot > smallest[k])
            if bad.any():
                singular |= bad
                pivot[bad] = FROZEN * np.maximum(smallest[k][bad] / SINGULAR_PIVOT, 1.0)
            if start == stop:
                continue
            column = below[start:stop]
            scaled = column / pivot
            pivots[rows] -= scaled * column
            for q, target in updates:
                below[target] -= scaled[q + 1 :] * column[q]
            column[...] = scaled
        return Factor(self, pivots, below, singular)


@dataclass(frozen=True, eq=False)
class Factor:
    """Numbers of a batch of L D L^T factorisations (`Pattern.factor`).

    Attributes
    ----------
    pattern : Pattern
    pivots : ndarray, shape (n, B)
        D in elimination order.
    below : ndarray, shape (n_below, B)
        L below its unit diagonal, column by column.
    singular : ndarray of bool, shape (B,)
        True where a pivot was zero, negative, nan or lost in rounding.
    """

    pattern: Pattern
    pivots: np.ndarray
    below: np.ndarray
    singular: np.ndarray

    def solve(self, right: np.ndarray) -> np.ndarray:
        """Solve for one right-hand side, (n, B), or k of them, (n, k, B), per matrix; same shape comes back."""
        pattern = self.pattern
        x: np.ndarray = right[pattern.order]
        many = right.ndim == 3
        pivots = self.pivots[:, None, :] if many else self.pivots
        below = self.below[:, None, :] if many else self.below
        for k, (start, stop, rows, _) in enumerate(pattern.columns):
            if start != stop:
                x[rows] -= below[start:stop] * x[k]
        x /= pivots
        for k in range(pattern.size - 1, -1, -1):
            start, stop, rows, _ = pattern.columns[k]
            if start != stop:
                x[k] -= (below[start:stop] * x[rows]).sum(axis=0)
        solution = np.empty_like(x)
        solution[pattern.order] = x
        return solution


def analyse(rows: np.ndarray, cols: np.ndarray, size: int) -> Pattern:
    """Elimination order and fill-in of a symmetric pattern, remembered between calls.

    Parameters
    ----------
    rows, cols : array of int, shape (nnz,)
        Lower triangle (``rows >= cols``), every diagonal position present, none twice.
    size : int
        Dimension n.

    Raises
    ------
    ValueError
        If the pattern is not such a lower triangle.
    """
    rows = np.ascontiguousarray(rows, dtype=np.int64)
    cols = np.ascontiguousarray(cols, dtype=np.int64)
    return _analyse(rows.tobytes(), cols.tobytes(), int(size))


@lru_cache(maxsize=64)
def _analyse(row_bytes: bytes, col_bytes: bytes, size: int) -> Pattern:
    rows = np.frombuffer(row_bytes, dtype=np.int64)
    cols = np.frombuffer(col_bytes, dtype=np.int64)
    inside = (
        rows.size == cols.size
        and rows.size
        and rows.max() < size
        and cols.min() >= 0
        and (rows >= cols).all()
    )
    if not inside or len(set(zip(rows, cols, strict=True))) != rows.size or np.sum(rows == cols) != size:
        raise ValueError(f"not the lower triangle of a {size} x {size} pattern with its whole diagonal")
    order, structures = _eliminate(rows, cols, size)
    place = np.empty(size, dtype=np.int64)
    place[order] = np.arange(size)

    position: dict[tuple[int, int], int] = {}
    spans = []
    for k, structure in enumerate(structures):
        start = len(position)
        for row in structure:
            position[row, k] = len(position)
        spans.append((start, len(position)))
    columns = []
    for (start, stop), structure in zip(spans, structures, strict=True):
        updates = [
            (q, _as_slice([position[row, col] for row in structure[q + 1 :]]))
            for q, col in enumerate(structure)
            if q + 1 < len(structure)
        ]
        columns.append((start, stop, _as_slice(structure), tuple(updates)))

    on_diagonal = np.flatnonzero(rows == cols)
    off = np.flatnonzero(rows != cols)
    low, high = np.minimum(place[rows], place[cols]), np.maximum(place[rows], place[cols])
    below_to = np.array([position[int(high[t]), int(low[t])] for t in off], dtype=np.int64)
    diagonal_of = on_diagonal[np.argsort(rows[on_diagonal])]

    # the full symmetric matrix, row by row, for products with vectors
    left, right = np.concatenate([rows, cols[off]]), np.concatenate([cols, rows[off]])
    entry = np.concatenate([np.arange(rows.size), off])
    by_row = np.lexsort((right, left))
    starts = np.searchsorted(left[by_row], np.arange(size))
    return Pattern(
        size=size,
        order=order,
        columns=tuple(columns),
        n_below=len(position),
        diagonal_from=on_diagonal,
        diagonal_to=place[rows[on_diagonal]],
        below_from=off,
        below_to=below_to,
        product_from=entry[by_row],
        product_with=right[by_row],
        product_starts=starts,
        diagonal_of=diagonal_of,
    )


def _eliminate(rows: np.ndarray, cols: np.ndarray, size: int) -> tuple[np.ndarray, list[list[int]]]:
    """Minimum-degree order and, in that order, the sorted positions below each pivot."""
    neighbours: list[set[int]] = [set() for _ in range(size)]
    for row, col in zip(rows.tolist(), cols.tolist(), strict=True):
        if row != col:
            neighbours[row].add(col)
            neighbours[col].add(row)
    left = set(range(size))
    order, members = [], []
    while left:
        pivot = min(left, key=lambda i: (len(neighbours[i]), i))
        left.remove(pivot)
        around = neighbours[pivot]
        for other in around:
            neighbours[other] |= around
            neighbours[other] -= {other, pivot}
        order.append(pivot)
        members.append(around)
    place = {component: k for k, component in enumerate(order)}
    return np.array(order, dtype=np.int64), [sorted(place[i] for i in around) for around in members]


def _as_slice(positions: list[int]) -> slice | np.ndarray:
    """A slice where the positions are a run (NumPy then works in place), else an index array."""
    if not positions or positions == list(range(positions[0], positions[0] + len(positions))):
        return slice(positions[0], positions[0] + len(positions)) if positions else slice(0, 0)
    return np.array(positions, dtype=np.int64)
