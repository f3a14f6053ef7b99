"""All minima of chi-square that a multi-start finds, ranked and told apart."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Minimum", "distinct_minima", "find_minima", "start_points"]

#: Minima this far above the best one are dropped: five standard deviations for one parameter.
WORTH_LISTING = 25.0
#: A start that is not at a minimum after so many steps is given up: the others have found what there is.
SEARCH_ITERATIONS = 60
#: Two points closer than this many standard deviations are one minimum.
SAME_MINIMUM = 0.1


@dataclass(frozen=True)
class Minimum:
    """A minimum of chi-square.

    Attributes
    ----------
    theta : ndarray, shape (n,)
    chi2 : float
    start : ndarray, shape (n,)
        From where it was reached.
    count : int
        How many starts ended here.
    converged : bool
    """

    theta: np.ndarray
    chi2: float
    start: np.ndarray
    count: int
    converged: bool


def start_points(problem: Any, size: int = 64, *, rng: np.random.Generator | int | None = 0) -> np.ndarray:
    """Starts for a multi-start.

    Low-discrepancy points inside the bounds for parameters that no entry measures directly. The others start from
    their own terms: every second row at the measured value, the rest thrown around it, twice as wide as its error.
    Parameters without a term and without bounds are thrown around their start. The first row is the problem's own
    start.

    Parameters
    ----------
    problem : Problem
    size : int
    rng : Generator or seed
        Shifts the sequence.

    Returns
    -------
    ndarray, shape (size, n)

    Notes
    -----
    A Kronecker sequence with the powers of the generalised golden ratio: as even as Sobol points at these sizes, for
    any size, and without an import that takes longer than the whole search.
    """
    start = np.asarray(problem.start, dtype=float)
    measured = {entry.quantity for entry in problem.entries}
    spread = [
        i
        for i, p in enumerate(problem.parameters)
        if p.name not in measured and np.isfinite(p.lower) and np.isfinite(p.upper)
    ]
    generator = np.random.default_rng(rng)
    points = np.tile(start, (size, 1))
    rest = [i for i in range(len(start)) if i not in spread]
    steps = np.array([p.scale * (2.0 if p.name in measured else 5.0) for p in problem.parameters])
    thrown = start + steps * generator.standard_normal(points.shape)
    inside = np.clip(thrown, [p.lower for p in problem.parameters], [p.upper for p in problem.parameters])
    points[2::2, rest] = inside[2::2, rest]
    if spread:
        lower = np.array([problem.parameters[i].lower for i in spread])
        upper = np.array([problem.parameters[i].upper for i in spread])
        unit = _kronecker(size, len(spread), generator)
        points[1:, spread] = lower + unit[1:] * (upper - lower)
    return points


def _kronecker(size: int, dimensions: int, rng: np.random.Generator) -> np.ndarray:
    ratio = 2.0
    for _ in range(64):  # the positive root of x^(d+1) = x + 1, by its fixed point
        ratio = (1.0 + ratio) ** (1.0 / (dimensions + 1))
    steps = ratio ** -np.arange(1.0, dimensions + 1)
    return np.asarray((rng.random(dimensions) + np.outer(np.arange(size), steps)) % 1.0)


def find_minima(
    problem: Any,
    *,
    size: int = 64,
    rng: np.random.Generator | int | None = 0,
    data: np.ndarray | None = None,
    extra: Sequence[np.ndarray] = (),
) -> list[Minimum]:
    """Multi-start by the batch solver; distinct minima, best first.

    Parameters
    ----------
    problem : Problem
    size : int
        Number of starts.
    rng : Generator or seed
    data : ndarray, shape (m,), optional
        Measured values in place of the entries' own.
    extra : sequence of ndarray, shape (n,)
        Further starts.

    Returns
    -------
    list of Minimum
        Empty when no start leads to a possible point.
    """
    from fitcore.minimise.batch_solver import minimise_batch

    starts = np.concatenate(
        [start_points(problem, size, rng=rng), *(np.atleast_2d(point) for point in extra)]
    )
    rows = None if data is None else np.broadcast_to(data, (len(starts), problem.n_entries))
    alive = np.isfinite(problem.chi2(starts, rows))
    if not alive.any():
        return []
    starts = starts[alive]
    found = minimise_batch(
        problem, starts, data=None if rows is None else rows[alive], max_iterations=SEARCH_ITERATIONS
    )
    return distinct_minima(problem, found.theta, found.chi2, found.converged, starts)


def distinct_minima(
    problem: Any, theta: np.ndarray, chi2: np.ndarray, converged: np.ndarray, starts: np.ndarray
) -> list[Minimum]:
    """Tell minima apart by their distance in standard deviations, as each one's own curvature measures it."""
    usable = np.isfinite(chi2)
    # A row that did not converge is no minimum, unless nothing better is known.
    if (usable & converged).any():
        usable &= converged
    order = np.flatnonzero(usable)[np.argsort(chi2[usable], kind="stable")]
    if order.size == 0:
        return []
    order = order[chi2[order] <= chi2[order[0]] + WORTH_LISTING]
    periods = np.array([p.period or 0.0 for p in problem.parameters])
    turning = periods > 0
    # Where a flat range ends up is a matter of taste, not another minimum.
    ranges = np.array([getattr(p, "is_range", False) for p in problem.parameters])
    listed: list[Minimum] = []
    while order.size:
        best = order[0]
        normal = problem.linearise(theta[best : best + 1]).normal.dense()[0]
        difference = theta[order] - theta[best]
        turns = np.rint(difference[:, turning] / periods[turning])
        difference[:, turning] -= turns * periods[turning]
        difference[:, ranges] = 0.0
        distance = np.sqrt(np.clip(np.einsum("bi,ij,bj->b", difference, normal, difference), 0.0, None))
        # Along an unconstrained direction the normal matrix sees no distance: such rows are one minimum.
        same = distance < SAME_MINIMUM
        same[0] = True
        listed.append(
            Minimum(
                theta[best].copy(),
                float(chi2[best]),
                starts[best].copy(),
                int(same.sum()),
                bool(converged[best]),
            )
        )
        order = order[~same]
    return listed
