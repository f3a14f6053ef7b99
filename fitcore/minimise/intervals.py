"""Ends of profile intervals, found directly: no grid, all quantities, sides and levels in one batch."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.held_quantities import HeldPoints, HeldQuantities

ROUNDS = 40
LEVEL_TOLERANCE = 2e-4
REACH_RESOLUTION = 1e-3
INNER_TOLERANCE = 1e-6
LOWER_BY = 1e-4


@dataclass
class Crossings:
    """Where profiles cross their levels.

    Attributes
    ----------
    x : ndarray, shape (R,)
        The crossing, or where the search was stopped.
    open : ndarray of bool, shape (R,)
        Stopped by a bound, by the end of the allowed range or by the reach of the quantity.
    good : ndarray of bool, shape (R,)
        Found to 1e-3 in chi-square, or open.
    theta : ndarray, shape (R, n)
        Profiled point at (or nearest inside) the end.
    lowest : ndarray, shape (n,), and lowest_chi2 : float
        Lowest point met on the way.
    """

    x: np.ndarray
    open: np.ndarray
    good: np.ndarray
    theta: np.ndarray
    lowest: np.ndarray
    lowest_chi2: float


def find_crossings(
    held: HeldQuantities,
    which: np.ndarray,
    *,
    minimum: float,
    levels: np.ndarray,
    inside: np.ndarray,
    inside_theta: np.ndarray,
    inside_delta: np.ndarray,
    guess: np.ndarray,
    guess_theta: np.ndarray,
    stop: np.ndarray,
    outside: np.ndarray | None = None,
) -> Crossings:
    """Find where the profile of one quantity per row crosses a level, walking outwards from a point inside.

    Newton steps on the square root of Delta chi-square, with the slope that the profile comes with, kept inside a
    bracket as soon as there is one.

    Parameters
    ----------
    held : HeldQuantities
    which : ndarray of int, shape (R,)
        Which of the names each row is about.
    minimum : float
        Chi-square from which Delta is counted.
    levels, inside, inside_delta, guess, stop : ndarray, shape (R,)
        Delta wanted; a point with lower Delta, and its Delta; first point to try; where to give up.
    inside_theta, guess_theta : ndarray, shape (R, n)
    outside : ndarray, shape (R,), optional
        A point known to be higher (or out of reach); nan where none is known.
    """
    rows_total = inside.size
    near, near_delta, near_theta = inside.copy(), inside_delta.copy(), inside_theta.copy()
    origin, origin_theta = inside.copy(), inside_theta.copy()
    far = np.full(rows_total, np.nan) if outside is None else outside.copy()
    far_delta = np.full(rows_total, np.inf)
    x, start = guess.copy(), guess_theta.copy()
    result = Crossings(
        stop.copy(),
        np.ones(rows_total, dtype=bool),
        np.zeros(rows_total, dtype=bool),
        inside_theta.copy(),
        inside_theta[0],
        np.inf,
    )
    todo = np.arange(rows_total)
    for _ in range(ROUNDS):
        if not todo.size:
            break
        found = _solve(held, which[todo], x[todo], start[todo], near_theta[todo])
        delta = np.where(found.good, found.chi2 - minimum, np.inf)
        best = int(np.argmin(delta))
        if delta[best] + minimum < result.lowest_chi2:
            result.lowest, result.lowest_chi2 = found.theta[best], float(delta[best] + minimum)
        hit = np.abs(delta - levels[todo]) < LEVEL_TOLERANCE * np.maximum(1.0, levels[todo])
        below = delta < levels[todo]
        at_stop = below & ~hit & (np.abs(x[todo] - stop[todo]) <= 1e-12 * np.maximum(np.abs(stop[todo]), 1e-300))
        _bracket(todo, below, x, delta, found.theta, near, near_delta, near_theta, far, far_delta)
        # out of reach and the edge is known well enough
        width = np.abs(far[todo] - near[todo])
        span = np.abs(near[todo] - origin[todo])
        edge = ~hit & (width <= REACH_RESOLUTION * np.where(np.isinf(far_delta[todo]), 1.0, 1e-6) * span)

        ended = hit | at_stop | edge
        rows = todo[ended]
        result.x[rows] = np.where(hit, x[todo], near[todo])[ended]
        result.open[rows] = (at_stop | (edge & np.isinf(far_delta[todo])))[ended]
        result.good[rows] = True
        result.theta[rows] = np.where(hit[:, None], found.theta, near_theta[todo])[ended]
        on = ~ended
        todo = todo[on]
        if todo.size:
            slope = found.slopes[on, 0]
            x[todo] = _next(x[todo], delta[on], slope, levels[todo], near, near_delta, far, far_delta, origin, stop, todo)
            start[todo] = _extrapolate(x[todo], near[todo], near_theta[todo], origin[todo], origin_theta[todo])
    # never reached the level: open if it simply never rises, not good if it was lost
    left = todo
    result.x[left] = np.where(np.isnan(far[left]), stop[left], near[left])
    result.good[left] = np.isnan(far[left])
    result.theta[left] = near_theta[left]
    return result


def _solve(
    held: HeldQuantities, which: np.ndarray, x: np.ndarray, start: np.ndarray, fallback: np.ndarray
) -> HeldPoints:
    found = held.solve(x[:, None], start, which=which[:, None], tolerance=INNER_TOLERANCE)
    failed = np.flatnonzero(~found.good)
    if failed.size:
        again = held.solve(x[failed, None], fallback[failed], which=which[failed, None], tolerance=INNER_TOLERANCE)
        found.improve(failed, again)
    return found


def _bracket(todo, below, x, delta, theta, near, near_delta, near_theta, far, far_delta) -> None:
    rows = todo[below]
    near[rows], near_delta[rows], near_theta[rows] = x[rows], delta[below], theta[below]
    rows = todo[~below]
    far[rows], far_delta[rows] = x[rows], delta[~below]


def _next(x, delta, slope, levels, near, near_delta, far, far_delta, origin, stop, todo) -> np.ndarray:
    """Next points: Newton on sqrt(Delta), else bisection or a longer stride."""
    near, far, stop, origin = near[todo], far[todo], stop[todo], origin[todo]
    side = np.where(stop > origin, 1.0, -1.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        root = np.sqrt(np.maximum(delta, 0.0))
        newton = x + (np.sqrt(levels) - root) * 2.0 * root / slope
        usable = np.isfinite(newton) & (slope * side > 0.0) & (delta > 1e-3 * levels)
        bracketed = np.isfinite(far)
        # a bracket whose outer Delta is finite: chord on sqrt(Delta); else halve
        low, high = np.sqrt(np.maximum(near_delta[todo], 0.0)), np.sqrt(far_delta[todo])
        share = np.where(np.isfinite(high), (np.sqrt(levels) - low) / (high - low), 0.5)
        chord = near + np.clip(share, 0.1, 0.9) * (far - near)
        inside = (newton - near) * side > 0.0
        inside &= (far - newton) * side > 0.0
        between = np.where(usable & inside, newton, chord)
        stride = near + 3.0 * np.where(near == origin, x - origin, near - origin)
        ahead = np.where(usable & ((newton - near) * side > 0.0), newton, stride)
        ahead = np.where((ahead - stride) * side > 0.0, stride, ahead)
    ahead = np.where((ahead - stop) * side > 0.0, stop, ahead)
    return np.where(bracketed, between, ahead)


def _extrapolate(x, near, near_theta, origin, origin_theta) -> np.ndarray:
    """Straight line through the point inside and the one the row started from."""
    run = near - origin
    share = np.divide(x - near, run, out=np.zeros_like(x), where=run != 0.0)
    return near_theta + np.clip(share, -2.0, 2.0)[:, None] * (near_theta - origin_theta)


class IntervalTable(dict):
    """Name -> list of (low, high, low_open, high_open), one per level; what `profile_intervals` returns.

    Attributes
    ----------
    flagged : tuple of (name, level number, "low" or "high")
        Ends that could not be found; the value given is the last point known to be inside.
    better_minimum : ndarray, shape (n,), or None
        A point lower than the given minimum by more than 1e-4, if one turned up.
    minimum : float
        Chi-square from which the intervals are counted.
    """

    def __init__(self) -> None:
        super().__init__()
        self.flagged: tuple[tuple[str, int, str], ...] = ()
        self.better_minimum: np.ndarray | None = None
        self.minimum = np.nan


def profile_intervals(
    problem: Any,
    theta_min: np.ndarray,
    names: Sequence[str],
    delta_chi2: Sequence[float] = (1.0, 3.841),
    *,
    chunk: int = 1024,
) -> IntervalTable:
    """Profile intervals of parameters and derived quantities around one minimum.

    Parameters
    ----------
    problem : Problem
    theta_min : array, shape (n,)
        The best fit.
    names : sequence of str
        Parameters or real quantities.
    delta_chi2 : sequence of float
        Levels above the minimum: 1 for 68.27 %, 3.841 for 95.0 % (one degree of freedom, S. S. Wilks, Ann. Math.
        Statist. 9, 60 (1938)).

    Returns
    -------
    IntervalTable
        The interval that contains the minimum; separate ones around other minima need `profile`. An end is open where a
        bound, half a period or the reach of the quantity stopped it. Ends hold to 1e-3 in chi-square.
    """
    table = IntervalTable()
    names = tuple(dict.fromkeys(names))
    theta_min = np.asarray(theta_min, dtype=float)
    given = float(problem.chi2(theta_min[None])[0])
    polished = minimise_batch(problem, theta_min[None], tolerance=1e-10)
    theta = polished.theta[0] if polished.converged[0] else theta_min
    table.minimum = minimum = float(min(polished.chi2[0], given))
    if minimum < given - LOWER_BY:
        table.better_minimum = theta
    if not names:
        return table
    held = HeldQuantities(problem, names, chunk=chunk)
    centre = held.values(theta)[0]
    low, high = held.limits()
    periods = np.array([problem.period_of(name) or np.inf for name in names])
    low, high = np.maximum(low, centre - 0.5 * periods), np.minimum(high, centre + 0.5 * periods)
    deviation = held.predict(theta, centre[:1, None], which=np.zeros((1, 1), dtype=int))[1]
    moves = np.isfinite(deviation) & (deviation > 0.0)

    levels = np.asarray(delta_chi2, dtype=float)
    count, q = levels.size, len(names)
    which, side, level = (a.ravel() for a in np.meshgrid(np.arange(q), [-1.0, 1.0], np.arange(count), indexing="ij"))
    ends = np.full((q, 2, count), np.nan)
    opens = np.ones((q, 2, count), dtype=bool)
    good = np.zeros((q, 2, count), dtype=bool)
    ends[...] = centre[:, None, None]

    stop = np.where(side > 0.0, high[which], low[which])
    stuck = (stop - centre[which]) * side <= 0.0  # the minimum sits on the bound
    rows = np.flatnonzero(moves[which] & ~stuck)
    place = (which, (side > 0.0).astype(int), level)
    good[tuple(a[stuck] for a in place)] = True
    if rows.size:
        which, side, level, stop = which[rows], side[rows], level[rows], stop[rows]
        guess = centre[which] + side * deviation[which] * np.sqrt(levels[level])
        guess = np.where((guess - stop) * side > 0.0, stop, guess)
        starts, _ = held.predict(theta, guess[:, None], which=which[:, None])
        # a quantity without natural limits: far beyond any use
        stop = np.where(np.isinf(stop), centre[which] + side * 1e6 * deviation[which], stop)
        found = find_crossings(
            held,
            which,
            minimum=minimum,
            levels=levels[level],
            inside=centre[which],
            inside_theta=np.tile(theta, (rows.size, 1)),
            inside_delta=np.zeros(rows.size),
            guess=guess,
            guess_theta=starts,
            stop=stop,
        )
        place = (which, (side > 0.0).astype(int), level)
        ends[place], opens[place], good[place] = found.x, found.open, found.good
        if found.lowest_chi2 < minimum - LOWER_BY:
            lower = minimise_batch(problem, found.lowest[None], tolerance=1e-10)
            table.better_minimum = lower.theta[0]
    for k, name in enumerate(names):
        table[name] = [
            (float(ends[k, 0, j]), float(ends[k, 1, j]), bool(opens[k, 0, j]), bool(opens[k, 1, j]))
            for j in range(count)
        ]
    lost = np.argwhere(~good)
    table.flagged = tuple((names[k], int(j), ("low", "high")[s]) for k, s, j in lost)
    return table
