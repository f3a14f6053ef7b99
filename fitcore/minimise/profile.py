"""Profile chi-square in one or two quantities: every point of a grid minimised over all the other parameters.

From coarse to fine: a grid of at most 13 points a side is minimised from the quadratic model at each known minimum and
from its neighbours; local cubic interpolation of those solutions starts the full grid, which then needs about one
linearisation per point. The slopes of the profile, known at every point, betray points that ended in a higher valley
than their neighbours: those are minimised again from the neighbour.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.held_quantities import HeldPoints, HeldQuantities
from fitcore.minimise.intervals import IntervalTable, profile_intervals
from observables.errors import InputError

__all__ = ["IntervalTable", "Profile", "automatic_range", "profile", "profile_intervals", "threshold"]

COARSE_POINTS = {1: 25, 2: 13}
COARSE_ITERATIONS = 30
SCATTERED = {1: 6, 2: 1}
COARSE_SWEEPS = 6
REPAIR_SWEEPS = 40
LOWER_BY = 1e-4
SUSPICIOUS = 2e-3

_QUOTED_LEVELS = {0.683: 1.0, 0.954: 2.0, 0.9545: 2.0, 0.997: 3.0, 0.9973: 3.0}


def threshold(cl: float, dof: int) -> float:
    """Delta chi-square that bounds a confidence region, by Wilks' theorem.

    Parameters
    ----------
    cl : float
        Confidence level. The rounded levels 0.683, 0.954 and 0.997 mean exactly 1, 2 and 3 standard deviations of one
        Gaussian variable (68.27, 95.45, 99.73 %); any other value means itself.
    dof : int
        Degrees of freedom: the number of quantities shown.

    Raises
    ------
    InputError
        If `cl` is not inside (0, 1) or `dof` is not positive.

    References
    ----------
    S. S. Wilks, Ann. Math. Statist. 9, 60 (1938).
    """
    from scipy.special import erf, gammaincinv

    if not 0.0 < cl < 1.0:
        raise InputError(f"confidence level {cl} is not between 0 and 1; give for example 0.683")
    if dof < 1 or int(dof) != dof:
        raise InputError(f"degrees of freedom {dof} is not a positive whole number")
    if cl in _QUOTED_LEVELS:
        cl = float(erf(_QUOTED_LEVELS[cl] / np.sqrt(2.0)))
    return float(2.0 * gammaincinv(0.5 * dof, cl))


@dataclass(frozen=True, eq=False)
class Profile:
    """Profile chi-square on a grid.

    Attributes
    ----------
    names : tuple of str
        One or two parameters or derived quantities.
    grids : tuple of ndarray
        Increasing values of each, in its unit.
    chi2 : ndarray, shape (n1,) or (n1, n2)
        Minimised chi-square; +inf where no possible point has these values.
    parameters : ndarray, shape (n1, [n2,] n)
        The minimising parameters; nan where `chi2` is infinite.
    minimum : float
        Lowest chi-square known, the grid included.
    minimum_parameters : ndarray, shape (n,)
    converged, flagged : ndarray of bool, shape of the grid
        Points at a minimum; points not to be trusted (the rest: unreachable values and failures).
    slopes : ndarray, shape (n1, [n2,] number of names)
        d chi2 / d (name).
    better_minimum : ndarray, shape (n,), or None
        Given when a point lower than the start by more than 1e-4 turned up: the best fit was not the best.
    minima : ndarray, shape (m, n)
        All known minima that the profile used.
    n_linearisations : int
        Points linearised for the whole profile.
    """

    names: tuple[str, ...]
    grids: tuple[np.ndarray, ...]
    chi2: np.ndarray
    parameters: np.ndarray
    minimum: float
    minimum_parameters: np.ndarray
    converged: np.ndarray
    flagged: np.ndarray
    slopes: np.ndarray
    better_minimum: np.ndarray | None
    minima: np.ndarray
    n_linearisations: int
    problem: Any = field(default=None, repr=False, compare=False)

    @property
    def delta_chi2(self) -> np.ndarray:
        """Chi-square above the lowest known minimum."""
        return self.chi2 - self.minimum

    def interval(self, cl: float = 0.683, dof: int = 1) -> list[tuple[float, float, bool, bool]]:
        """All intervals of a one-dimensional profile inside a confidence level.

        Parameters
        ----------
        cl, dof
            As for `threshold`.

        Returns
        -------
        list of (low, high, low_open, high_open)
            Ends found on the profile itself to 1e-3 in chi-square. An end is open where the grid, a bound of the
            parameter or the reach of the quantity stopped it.
        """
        from fitcore.minimise.regions import grid_intervals

        return grid_intervals(self, threshold(cl, dof))

    def regions(self, cl: float = 0.683, dof: int = 2) -> list[np.ndarray]:
        """Outlines of all regions of a two-dimensional profile inside a confidence level.

        Parameters
        ----------
        cl, dof
            As for `threshold`.

        Returns
        -------
        list of ndarray, shape (k, 2)
            Polylines in (first, second) name, closed (first point repeated) unless the frame of the grid cuts them.
            Vertices lie on the profile to 0.01 in chi-square; `fitcore.minimise.regions.find_regions` tells which, if
            any, could not be brought there.
        """
        from fitcore.minimise.regions import find_regions

        return [region.vertices for region in find_regions(self, threshold(cl, dof))]


def profile(
    problem: Any,
    names: Sequence[str] | str,
    grids: Sequence[np.ndarray] | np.ndarray,
    *,
    start: np.ndarray,
    minima: Sequence[np.ndarray] = (),
    tolerance: float = 1e-4,
    chunk: int = 1024,
) -> Profile:
    """Profile chi-square over a grid in one or two quantities.

    Parameters
    ----------
    problem : Problem
    names : str or sequence of one or two str
        Free parameters or real derived quantities.
    grids : array or sequence of arrays
        Strictly increasing values, in the unit of each quantity.
    start : array, shape (n,)
        The best fit.
    minima : sequence of array, shape (n,)
        Other known minima; every grid point is tried from each and the lowest is kept.
    tolerance : float
        Expected distance to the minimum, in chi-square, at which a point takes its last step.
    chunk : int
        Points minimised at once; bounds the memory.

    Raises
    ------
    InputError
        If the grids are empty, not finite or not increasing, or a name is repeated.
    """
    names, grids = _checked(names, grids)
    held = HeldQuantities(problem, names, chunk=chunk)
    start = np.asarray(start, dtype=float)
    seeds = np.array([start, *[np.asarray(other, dtype=float) for other in minima]])
    start_chi2 = float(problem.chi2(start[None])[0])
    polished = minimise_batch(problem, seeds, tolerance=1e-10)
    known = np.where(polished.converged[:, None], polished.theta, seeds)
    effort = int(polished.n_linearisations.sum())
    better = None
    for _ in range(3):
        points = _fill(held, grids, known, tolerance)
        effort += points.linearisations
        known_chi2 = problem.chi2(known)
        lowest = int(np.argmin(known_chi2))
        inside = np.where(points.good, points.chi2, np.inf)
        best = int(np.argmin(inside))
        if not inside[best] < min(known_chi2[lowest], start_chi2) - LOWER_BY:
            break
        # lower than every minimum we knew: start again with it
        found = minimise_batch(problem, points.theta[best][None], tolerance=1e-10)
        effort += int(found.n_linearisations.sum())
        if not found.chi2[0] < known_chi2[lowest] - LOWER_BY:
            break
        known = np.vstack([found.theta, known])
    known_chi2 = problem.chi2(known)
    lowest = int(np.argmin(known_chi2))
    minimum, minimum_parameters = float(known_chi2[lowest]), known[lowest]
    if minimum < start_chi2 - LOWER_BY:
        better = minimum_parameters
    shape = tuple(grid.size for grid in grids)
    points.theta[~np.isfinite(points.chi2)] = np.nan
    return Profile(
        names=names,
        grids=grids,
        chi2=points.chi2.reshape(shape),
        parameters=points.theta.reshape((*shape, -1)),
        minimum=minimum,
        minimum_parameters=minimum_parameters,
        converged=points.good.reshape(shape),
        flagged=~points.good.reshape(shape),
        slopes=points.slopes.reshape((*shape, len(names))),
        better_minimum=better,
        minima=known,
        n_linearisations=effort,
        problem=problem,
    )


def automatic_range(
    problem: Any, theta_min: np.ndarray, covariance: np.ndarray | None, name: str, *, width: float = 4.0
) -> tuple[float, float]:
    """A range worth scanning: `width` standard deviations around the best fit, inside the bounds.

    Parameters
    ----------
    problem : Problem
    theta_min : array, shape (n,)
    covariance : array, shape (n, n), or None
        Covariance of the parameters; None takes the quadratic model at `theta_min`.
    name : str
        Parameter or real quantity.
    """
    held = HeldQuantities(problem, (name,))
    theta = np.asarray(theta_min, dtype=float)
    values, slopes = held._linear(theta[None])
    centre = float(values[0, 0])
    if covariance is None:
        deviation = float(held.predict(theta, values)[1][0])
    else:
        deviation = float(np.sqrt(max(slopes[0, 0] @ np.asarray(covariance) @ slopes[0, 0], 0.0)))
    if not (np.isfinite(deviation) and deviation > 0.0):
        place = held.place[0]
        scale = problem.parameters[place].scale if place >= 0 else 0.1 * abs(centre)
        deviation = scale or 1.0
    low, high = held.limits()
    return max(centre - width * deviation, float(low[0])), min(centre + width * deviation, float(high[0]))


def _checked(names: Any, grids: Any) -> tuple[tuple[str, ...], tuple[np.ndarray, ...]]:
    if isinstance(names, str):
        names, grids = (names,), (grids,)
    elif len(names) == 1 and np.ndim(grids[0]) == 0:
        grids = (grids,)
    names = tuple(names)
    if not 1 <= len(names) <= 2 or len(set(names)) != len(names):
        raise InputError(f"a profile takes one or two different names, not {', '.join(names) or 'none'}")
    if len(grids) != len(names):
        raise InputError(f"{len(names)} names but {len(grids)} grids")
    checked = tuple(np.array(grid, dtype=float) for grid in grids)
    for name, grid in zip(names, checked, strict=True):
        if grid.ndim != 1 or grid.size == 0 or not np.isfinite(grid).all() or not (np.diff(grid) > 0.0).all():
            raise InputError(f"the grid of {name} must be a non-empty list of increasing finite numbers")
    return names, checked


def _fill(
    held: HeldQuantities, grids: tuple[np.ndarray, ...], minima: np.ndarray, tolerance: float
) -> HeldPoints:
    """Minimise every point of the grid; points come back flattened in grid order."""
    wanted = COARSE_POINTS[len(grids)]
    picks = [np.unique(np.round(np.linspace(0, grid.size - 1, wanted)).astype(int)) for grid in grids]
    nodes = tuple(grid[pick] for grid, pick in zip(grids, picks, strict=True))
    distance = _distance(held, grids)
    coarse = _coarse(held, nodes, minima, tolerance, distance)
    shape, small = tuple(g.size for g in grids), tuple(p.size for p in picks)
    if shape == small:
        return _repair(held, grids, coarse, tolerance, distance)

    theta = coarse.theta.reshape((*small, -1))
    theta = np.tensordot(_local_cubic(nodes[0], grids[0]), theta, axes=1)
    if len(grids) == 2:
        theta = np.moveaxis(np.tensordot(_local_cubic(nodes[1], grids[1]), theta, axes=(1, 1)), 0, 1)
    theta = theta.reshape(-1, theta.shape[-1])
    at_nodes = np.ravel_multi_index(np.meshgrid(*picks, indexing="ij"), shape).ravel()
    points = _points(grids)
    count = len(points)
    hopeful = _near_finite_nodes(points, nodes, np.isfinite(coarse.chi2).reshape(small), held.values(minima))
    hopeful[at_nodes] = False
    rest = np.flatnonzero(hopeful)
    solved = held.solve(points[rest], theta[rest], tolerance=tolerance, distance=distance)
    fine = HeldPoints(
        theta,
        np.full(count, np.inf),
        np.zeros((count, len(grids))),
        np.zeros(count, dtype=bool),
        coarse.linearisations + solved.linearisations,
    )
    fine.put(at_nodes, coarse)
    fine.put(rest, solved)
    return _repair(held, grids, fine, tolerance, distance)


def _coarse(
    held: HeldQuantities,
    nodes: tuple[np.ndarray, ...],
    minima: np.ndarray,
    tolerance: float,
    distance: np.ndarray,
) -> HeldPoints:
    """The coarse grid from every known minimum, then from the neighbours until nothing improves."""
    points = _points(nodes)
    every = np.arange(len(points))
    starts = [held.predict(theta, points)[0] for theta in minima]
    # far from the best fit another valley may be lower that no known minimum and no neighbour leads to
    starts += held.scatter(minima[0], len(points), SCATTERED[len(nodes)])
    stacked, sets = np.tile(points, (len(starts), 1)), np.arange(len(starts)) * len(points)
    tried = held.solve(
        stacked,
        np.concatenate(starts),
        tolerance=tolerance,
        distance=distance,
        max_iterations=COARSE_ITERATIONS,
    )
    best = tried.rows(every)
    best.linearisations = tried.linearisations
    for first in sets[1:]:
        best.improve(every, tried.rows(every + first))
    shape = tuple(node.size for node in nodes)
    fresh = np.ones(len(points), dtype=bool)
    for sweep in range(COARSE_SWEEPS):
        pairs = [(a[fresh[a]], b[fresh[a]]) for a, b in _neighbours(shape)]
        source = np.concatenate([a for a, _ in pairs])
        target = np.concatenate([b for _, b in pairs])
        keep = np.isfinite(best.chi2[source])
        if sweep == 0 and best.good.all() and len(minima) == 1:
            keep &= _suspicious(best, points, source, target)
        source, target = source[keep], target[keep]
        if not source.size:
            break
        changed = _try(held, best, points, source, target, tolerance, distance)
        fresh = np.zeros(len(points), dtype=bool)
        fresh[changed] = True
        if not changed.size:
            break
    return best


def _repair(
    held: HeldQuantities,
    grids: tuple[np.ndarray, ...],
    found: HeldPoints,
    tolerance: float,
    distance: np.ndarray,
) -> HeldPoints:
    """Minimise points again that lie higher than a neighbour's slope allows, or failed, from that neighbour."""
    points, shape = _points(grids), tuple(grid.size for grid in grids)
    fresh = np.ones(len(points), dtype=bool)
    for _ in range(REPAIR_SWEEPS):
        pairs = [(a[fresh[a]], b[fresh[a]]) for a, b in _neighbours(shape)]
        source = np.concatenate([a for a, _ in pairs])
        target = np.concatenate([b for _, b in pairs])
        keep = found.good[source] & _suspicious(found, points, source, target)
        source, target = source[keep], target[keep]
        if not source.size:
            break
        changed = _try(held, found, points, source, target, tolerance, distance)
        if not changed.size:
            break
        fresh = np.zeros(len(points), dtype=bool)
        fresh[changed] = True
    return found


def _suspicious(found: HeldPoints, points: np.ndarray, source: np.ndarray, target: np.ndarray) -> np.ndarray:
    """Targets that failed, or are higher than the slopes at both ends (trapezium rule) allow."""
    step = points[target] - points[source]
    expected = 0.5 * ((found.slopes[source] + found.slopes[target]) * step).sum(axis=1)
    bend = np.abs(((found.slopes[target] - found.slopes[source]) * step).sum(axis=1))
    with np.errstate(invalid="ignore"):
        excess = found.chi2[target] - found.chi2[source] - expected
        return np.asarray(~found.good[target] | (excess > SUSPICIOUS + 0.01 * bend))


def _try(
    held: HeldQuantities,
    found: HeldPoints,
    points: np.ndarray,
    source: np.ndarray,
    target: np.ndarray,
    tolerance: float,
    distance: np.ndarray,
) -> np.ndarray:
    """Minimise targets from the solutions of their sources; returns the points that improved."""
    again = held.solve(points[target], found.theta[source], tolerance=tolerance, distance=distance)
    # several sources for one target: the lowest good one speaks
    order = np.lexsort((np.where(again.good, again.chi2, np.inf), target))
    first = order[np.unique(target[order], return_index=True)[1]]
    lowest = again.rows(first)
    lowest.linearisations = again.linearisations
    return found.improve(target[first], lowest)


def _points(grids: tuple[np.ndarray, ...]) -> np.ndarray:
    return np.stack([axis.ravel() for axis in np.meshgrid(*grids, indexing="ij")], axis=1)


def _distance(held: HeldQuantities, grids: tuple[np.ndarray, ...]) -> np.ndarray:
    """Accepted distance from the wanted values: 1e-6 of the range."""
    width = [max(float(np.ptp(grid)), 1e-3 * float(np.abs(grid).max())) for grid in grids]
    return 1e-6 * np.array(width)


def _neighbours(shape: tuple[int, ...]) -> list[tuple[np.ndarray, np.ndarray]]:
    """Pairs (source, target) of flat indices of grid neighbours, both ways along every axis."""
    index = np.arange(int(np.prod(shape))).reshape(shape)
    pairs = []
    for axis in range(len(shape)):
        low, high = np.delete(index, -1, axis).ravel(), np.delete(index, 0, axis).ravel()
        pairs += [(low, high), (high, low)]
    return pairs


def _near_finite_nodes(
    points: np.ndarray, nodes: tuple[np.ndarray, ...], finite: np.ndarray, minima: np.ndarray
) -> np.ndarray:
    """Points in cells of the coarse grid with a possible corner or a known minimum inside; the others are left to be
    reached from their neighbours."""

    def cells(at: np.ndarray) -> tuple[np.ndarray, ...]:
        return tuple(
            np.clip(np.searchsorted(node, at[:, k], side="right") - 1, 0, max(node.size - 2, 0))
            for k, node in enumerate(nodes)
        )

    for axis, node in enumerate(nodes):
        if node.size > 1:
            finite = np.delete(finite, 0, axis) | np.delete(finite, -1, axis)
    finite = finite.copy()
    finite[cells(minima)] = True
    return np.asarray(finite[cells(points)])


def _local_cubic(nodes: np.ndarray, x: np.ndarray) -> np.ndarray:
    """Weights (len(x), len(nodes)) of interpolation through the four nearest nodes (Lagrange)."""
    points = min(4, nodes.size)
    left = np.clip(np.searchsorted(nodes, x, side="right") - points // 2, 0, nodes.size - points)
    near = left[:, None] + np.arange(points)
    at = nodes[near]
    weights = np.zeros((x.size, nodes.size))
    for k in range(points):
        others = [j for j in range(points) if j != k]
        ratio = np.prod([(x - at[:, j]) / (at[:, k] - at[:, j]) for j in others], axis=0)
        weights[np.arange(x.size), near[:, k]] = ratio
    return weights
