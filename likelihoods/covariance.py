"""The correlation matrix of all entries: blocks, single coefficients and shared error sources."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from likelihoods.entries import Block, Correlation, Entry

#: A correlation matrix counts as positive definite when its lowest eigenvalue exceeds this.
LOWEST_EIGENVALUE = 1e-12


def shared_sources(entries: Iterable[Entry]) -> dict[str, tuple[int, ...]]:
    """Find the named error sources that at least two entries have.

    Returns
    -------
    dict
        Source name to the positions of the entries that have it.
    """
    users: dict[str, list[int]] = {}
    for position, entry in enumerate(entries):
        for name in entry.shared_errors:
            users.setdefault(name, []).append(position)
    return {name: tuple(positions) for name, positions in users.items() if len(positions) > 1}


def correlation_matrix(
    entries: Sequence[Entry], blocks: Iterable[Block] = (), correlations: Iterable[Correlation] = ()
) -> NDArray[np.float64]:
    """Correlation matrix R of all entries, in their order.

    A shared source s contributes ``e_i^s e_j^s`` to the covariance of entries i and j, with the signed
    absolute errors at the quoted values; ``inflate`` multiplies all errors of an entry and so leaves R
    unchanged. Blocks and single coefficients give elements of R directly.

    Returns
    -------
    ndarray, shape (m, m)
        Symmetric with unit diagonal; not checked for positive definiteness.
    """
    position = {entry.id: i for i, entry in enumerate(entries)}
    matrix = np.eye(len(entries))
    for users in shared_sources(entries).items():
        name, members = users
        index = np.array(members)
        share = np.array([entries[i].errors[name] / entries[i].plus for i in members])
        matrix[np.ix_(index, index)] += np.outer(share, share)
    for block in blocks:
        index = np.array([position[name] for name in block.ids])
        matrix[np.ix_(index, index)] += np.array(block.correlation)
    for correlation in correlations:
        i, j = (position[name] for name in correlation.between)
        matrix[i, j] += correlation.coefficient
        matrix[j, i] += correlation.coefficient
    np.fill_diagonal(matrix, 1.0)
    return matrix


def connected_components(matrix: NDArray[np.float64]) -> list[NDArray[np.intp]]:
    """Find the groups of two or more rows that are linked by nonzero off-diagonal elements."""
    linked = matrix != 0.0
    unseen = set(np.flatnonzero(linked.sum(axis=1) > 1).tolist())
    components = []
    while unseen:
        component: set[int] = set()
        front = {min(unseen)}
        while front:
            component |= front
            front = set(np.flatnonzero(linked[sorted(front)].any(axis=0)).tolist()) - component
        unseen -= component
        components.append(np.array(sorted(component)))
    return components


def lowest_eigenvalue(matrix: NDArray[np.float64]) -> float:
    """Lowest eigenvalue of a symmetric matrix."""
    return float(np.linalg.eigvalsh(matrix)[0])
