"""Ends of profile intervals, found directly: no grid, all quantities, sides and levels in one batch."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields
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
        Profiled point next to the end.
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
    walk = _Walk(
        levels=levels,
        stop=stop,
        side=np.where(stop > inside, 1.0, -1.0),
        stride=np.abs(guess - inside),
        origin=inside.copy(),
        origin_theta=inside_theta.copy(),
        near=inside.copy(),
        near_theta=inside_theta.copy(),
        near_delta=inside_delta.copy(),
        far=np.full(inside.size, np.nan) if outside is None else outside.copy(),
        far_delta=np.full(inside.size, np.inf),
        far_lost=np.zeros(inside.size, dtype=bool),
    )
    result = Crossings(
        x=inside.copy(),
        open=np.zeros(inside.size, dtype=bool),
        good=np.zeros(inside.size, dtype=bool),
        theta=inside_theta.copy(),
        lowest=inside_theta[0],
        lowest_chi2=np.inf,
    )
    x, start, todo = guess.copy(), guess_theta.copy(), np.arange(inside.size)
    for _ in range(ROUNDS):
        if not todo.size:
            break
        found = _solve(held, which, x, start, walk.near_theta)
        delta = np.where(found.good, found.chi2 - minimum, np.inf)
        best = int(np.argmin(delta))
        if delta[best] + minimum < result.lowest_chi2:
            result.lowest, result.lowest_chi2 = found.theta[best], float(delta[best] + minimum)
        hit = np.abs(delta - walk.levels) < LEVEL_TOLERANCE * np.maximum(1.0, walk.levels)
        newton = _newton(x, delta, found.slopes[:, 0], walk.levels)
        walk.record(x, delta, found)
        at_stop, edge = ~hit & walk.arrived(), ~hit & walk.at_an_edge()
        ended = hit | at_stop | edge
        rows = todo[ended]
        result.x[rows] = np.where(hit, newton, walk.near)[ended]
        result.open[rows] = (at_stop | (edge & np.isinf(walk.far_delta)))[ended]
        result.good[rows] = (hit | at_stop | ~walk.far_lost)[ended]
        result.theta[rows] = np.where(hit[:, None], found.theta, walk.near_theta)[ended]
        go_on = np.flatnonzero(~ended)
        todo, which, walk = todo[go_on], which[go_on], walk.rows(go_on)
        x = walk.next(x[go_on], newton[go_on], delta[go_on], found.slopes[go_on, 0])
        start = walk.start(x)
    # never higher than the level: open without end; else lost inside a bracket
    endless = np.isnan(walk.far)
    result.x[todo] = np.where(endless, walk.stop, walk.near)
    result.open[todo], result.good[todo], result.theta[todo] = endless, endless, walk.near_theta
    return result


@dataclass
class _Walk:
    """Brackets of the rows on their way out; arrays of shape (R,) or (R, n)."""

    levels: np.ndarray
    stop: np.ndarray
    side: np.ndarray
    stride: np.ndarray  # length of the first step
    origin: np.ndarray
    origin_theta: np.ndarray
    near: np.ndarray  # outermost point known to be inside
    near_theta: np.ndarray
    near_delta: np.ndarray
    far: np.ndarray  # innermost point known to be outside, nan if none
    far_delta: np.ndarray
    far_lost: np.ndarray  # outside only because the minimisation failed

    def rows(self, pick: np.ndarray) -> _Walk:
        return _Walk(*(getattr(self, field.name)[pick] for field in fields(self)))

    def record(self, x: np.ndarray, delta: np.ndarray, found: HeldPoints) -> None:
        below = delta < self.levels
        self.near[below], self.near_delta[below] = x[below], delta[below]
        self.near_theta[below] = found.theta[below]
        self.far[~below], self.far_delta[~below] = x[~below], delta[~below]
        self.far_lost[~below] = (~found.good & np.isfinite(found.chi2))[~below]

    def arrived(self) -> np.ndarray:
        """Inside at the very last point allowed."""
        return np.asarray(np.abs(self.near - self.stop) <= 1e-12 * np.abs(self.stop))

    def at_an_edge(self) -> np.ndarray:
        """The bracket closed on a jump: the reach of the quantity, or a step in the profile."""
        resolution = np.where(np.isinf(self.far_delta), REACH_RESOLUTION, 1e-9)
        # a minimum at the very end of the reach has nothing inside but itself
        floor = np.maximum(1e-3 * self.stride, 1e-9 * np.abs(self.origin))
        span = np.maximum(np.abs(self.near - self.origin), floor)
        return np.asarray(np.abs(self.far - self.near) <= resolution * span)

    def next(self, x: np.ndarray, newton: np.ndarray, delta: np.ndarray, slope: np.ndarray) -> np.ndarray:
        """Next points: Newton on sqrt(Delta), else a chord or bisection, or a longer stride."""
        side, near, far = self.side, self.near, self.far
        with np.errstate(invalid="ignore", divide="ignore"):
            usable = np.isfinite(newton) & (slope * side > 0.0) & (delta > 1e-3 * self.levels)
            usable &= (newton - near) * side > 0.0
            low, high = np.sqrt(np.maximum(self.near_delta, 0.0)), np.sqrt(self.far_delta)
            share = np.where(np.isfinite(high), (np.sqrt(self.levels) - low) / (high - low), 0.5)
            chord = near + np.clip(share, 0.1, 0.9) * (far - near)
            between = np.where(usable & ((far - newton) * side > 0.0), newton, chord)
        stride = near + 3.0 * np.where(near == self.origin, x - self.origin, near - self.origin)
        ahead = np.where(usable & ((stride - newton) * side > 0.0), newton, stride)
        ahead = np.where((ahead - self.stop) * side > 0.0, self.stop, ahead)
        return np.where(np.isfinite(far), between, ahead)

    def start(self, x: np.ndarray) -> np.ndarray:
        """Parameters for new points: the straight line from the origin through the outermost point inside."""
        run = self.near - self.origin
        share = np.divide(x - self.near, run, out=np.zeros_like(x), where=run != 0.0)
        onwards = np.clip(share, -2.0, 2.0)[:, None] * (self.near_theta - self.origin_theta)
        return np.asarray(self.near_theta + onwards)


def _solve(
    held: HeldQuantities, which: np.ndarray, x: np.ndarray, start: np.ndarray, fallback: np.ndarray
) -> HeldPoints:
    found = held.solve(x[:, None], start, which=which[:, None], tolerance=INNER_TOLERANCE)
    failed = np.flatnonzero(~found.good)
    if failed.size:
        again = held.solve(
            x[failed, None], fallback[failed], which=which[failed, None], tolerance=INNER_TOLERANCE
        )
        found.improve(failed, again)
    return found


def _newton(x: np.ndarray, delta: np.ndarray, slope: np.ndarray, levels: np.ndarray) -> np.ndarray:
    """Where sqrt(Delta), which is straight for a parabola, would reach the level."""
    with np.errstate(invalid="ignore", divide="ignore"):
        root = np.sqrt(np.maximum(delta, 0.0))
        return np.asarray(x + (np.sqrt(levels) - root) * 2.0 * root / slope)


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
        The interval that contains the minimum; separate ones around other minima need `profile`. An end is open
        where a bound, half a period or the reach of the quantity stopped it, and infinite where nothing did. Ends
        hold to 1e-3 in chi-square.
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
    which, side, level = (
        a.ravel() for a in np.meshgrid(np.arange(q), [-1.0, 1.0], np.arange(count), indexing="ij")
    )
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
        endless = np.isinf(stop)
        stop = np.where(endless, centre[which] + side * 1e6 * deviation[which], stop)
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
        never = endless & found.open & (found.x == stop)
        ends[place] = np.where(never, side * np.inf, found.x)
        opens[place], good[place] = found.open, found.good
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
