"""Confidence intervals and regions of a profile: every disconnected piece, with its edge on the profile itself."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitcore.minimise.held_quantities import HeldPoints, HeldQuantities
from fitcore.minimise.intervals import find_crossings
from observables.errors import InputError

if TYPE_CHECKING:
    from fitcore.minimise.profile import Profile

POLISH_ROUNDS = 8
VERTEX_TOLERANCE = 3e-3
SAME_VALLEY = 2e-3
SUBGRID = 37
DEEPEST = 3


@dataclass(frozen=True, eq=False)
class Region:
    """Outline of one region (or of a hole in one).

    Attributes
    ----------
    vertices : ndarray, shape (k, 2)
        In (first, second) name; the first point is repeated at the end of a closed outline.
    closed : bool
        False where the frame of the grid cuts the region.
    polished : ndarray of bool, shape (k,)
        Vertices brought to the level within 0.01 in chi-square; the others are interpolated on the grid.
    """

    vertices: np.ndarray
    closed: bool
    polished: np.ndarray


def grid_intervals(profile: Profile, level: float) -> list[tuple[float, float, bool, bool]]:
    """All intervals of a one-dimensional profile below `level` (`Profile.interval`)."""
    if len(profile.names) != 1:
        raise InputError(
            f"interval() is for one quantity; this profile has {' and '.join(profile.names)}: use regions()"
        )
    held = HeldQuantities(profile.problem, profile.names)
    x, delta, theta = profile.grids[0], profile.delta_chi2, profile.parameters
    own = held.values(profile.minima)[:, 0]
    # known minima between grid points: an interval narrower than the grid must not be lost
    keep = (own > x[0]) & (own < x[-1]) & ~np.isin(own, x)
    own_delta = profile.problem.chi2(profile.minima) - profile.minimum
    x = np.concatenate([x, own[keep]])
    order = np.argsort(x, kind="stable")
    x, delta = x[order], np.concatenate([delta, own_delta[keep]])[order]
    theta = np.concatenate([theta, profile.minima[keep]])[order]
    inside = np.concatenate([[False], delta < level, [False]])
    first = np.flatnonzero(inside[1:] & ~inside[:-1])  # in indices of x
    last = np.flatnonzero(inside[:-1] & ~inside[1:]) - 1
    if not first.size:
        return []

    ends = np.concatenate([first, last])
    beyond = np.concatenate([first - 1, last + 1])
    cut = (beyond < 0) | (beyond >= x.size)
    found_x, found_open = x[ends].copy(), cut.copy()
    rows = np.flatnonzero(~cut)
    if rows.size:
        a, b = ends[rows], beyond[rows]
        root_a, root_b = np.sqrt(np.maximum(delta[a], 0.0)), np.sqrt(np.maximum(delta[b], 0.0))
        with np.errstate(invalid="ignore"):
            share = np.where(np.isfinite(root_b), (np.sqrt(level) - root_a) / (root_b - root_a), 0.5)
        share = np.clip(share, 0.02, 0.98)
        usable = np.isfinite(delta[b])
        guess_theta = np.where(usable[:, None], theta[a] + share[:, None] * (theta[b] - theta[a]), theta[a])
        crossing = find_crossings(
            held,
            np.zeros(rows.size, dtype=int),
            minimum=profile.minimum,
            levels=np.full(rows.size, level),
            inside=x[a],
            inside_theta=theta[a],
            inside_delta=delta[a],
            guess=x[a] + share * (x[b] - x[a]),
            guess_theta=guess_theta,
            stop=x[b],
            outside=x[b].copy(),
        )
        found_x[rows], found_open[rows] = crossing.x, crossing.open
    count = first.size
    return [
        (float(found_x[k]), float(found_x[count + k]), bool(found_open[k]), bool(found_open[count + k]))
        for k in range(count)
    ]


def find_regions(profile: Profile, level: float, *, depth: int = 0) -> list[Region]:
    """All regions of a two-dimensional profile below `level` (`Profile.regions`)."""
    if len(profile.names) != 2:
        raise InputError(
            f"regions() needs two quantities; this profile has {profile.names[0]}: use interval()"
        )
    from contourpy import contour_generator

    x, y = profile.grids
    delta = profile.delta_chi2
    found = []
    if x.size > 1 and y.size > 1:
        # the square root is nearly linear along a parabola; what cannot be reached is simply far outside
        height = np.sqrt(np.clip(np.where(np.isfinite(delta), delta, np.inf), 0.0, 9.0 * level))
        lines = contour_generator(x=x, y=y, z=height.T).lines(float(np.sqrt(level)))
        outlines = [np.asarray(line) for line in lines if len(line) > 1]
        if outlines:
            vertices, polished = _polish(profile, np.concatenate(outlines), level)
            cuts = np.cumsum([len(line) for line in outlines])[:-1]
            for line, part, good in zip(
                outlines, np.split(vertices, cuts), np.split(polished, cuts), strict=True
            ):
                found.append(_region(line, part, good))
    return found + _small_regions(profile, level, depth)


def _region(line: np.ndarray, vertices: np.ndarray, polished: np.ndarray) -> Region:
    closed = bool((line[0] == line[-1]).all()) and len(line) > 3
    if closed:
        vertices = vertices.copy()
        vertices[-1] = vertices[0]
    return Region(vertices, closed, polished)


def _polish(profile: Profile, vertices: np.ndarray, level: float) -> tuple[np.ndarray, np.ndarray]:
    """Bring vertices onto the level by Newton steps along the gradient of the profile."""
    held = HeldQuantities(profile.problem, profile.names)
    low = np.array([grid[0] for grid in profile.grids])
    high = np.array([grid[-1] for grid in profile.grids])
    cell = np.array([np.diff(grid).mean() for grid in profile.grids])
    on_frame = (vertices == low) | (vertices == high)
    points, good = vertices.copy(), np.zeros(len(vertices), dtype=bool)
    theta = np.empty((len(vertices), profile.parameters.shape[-1]))
    todo = np.arange(len(vertices))
    for round_number in range(POLISH_ROUNDS):
        if round_number == 0:
            found = _from_both_ends(held, profile, points)
        else:
            found = held.solve(points[todo], theta[todo], tolerance=1e-5)
        theta[todo] = found.theta
        delta = np.where(found.good, found.chi2 - profile.minimum, np.inf)
        close = np.abs(delta - level) < VERTEX_TOLERANCE
        good[todo[close]] = True
        on = ~close & np.isfinite(delta)
        todo, delta, slope = todo[on], delta[on], found.slopes[on]
        if not todo.size:
            break
        slope = np.where(on_frame[todo], 0.0, slope) * cell
        root = np.sqrt(np.maximum(delta, 1e-12))
        steep = np.maximum((slope**2).sum(axis=1), 1e-300)
        stride = ((np.sqrt(level) - root) * 2.0 * root / steep)[:, None] * slope
        length = np.maximum(np.sqrt((stride**2).sum(axis=1)), 1.0)  # at most one cell at a time
        points[todo] = np.clip(points[todo] + stride / length[:, None] * cell, low, high)
    return np.where(good[:, None], points, vertices), good


def _from_both_ends(held: HeldQuantities, profile: Profile, points: np.ndarray) -> HeldPoints:
    """Profile at vertices, which lie on grid lines, started from the solutions at both ends of the segment.

    Where the ends share a valley the start lies between them; where the slopes say they do not, each end is tried.
    """
    low_end, high_end, share = [], [], np.zeros(len(points))
    for k, grid in enumerate(profile.grids):
        low = np.clip(np.searchsorted(grid, points[:, k], side="right") - 1, 0, grid.size - 1)
        high = np.clip(np.searchsorted(grid, points[:, k], side="left"), 0, grid.size - 1)
        between = high > low
        share[between] = ((points[:, k] - grid[low]) / np.where(between, grid[high] - grid[low], 1.0))[
            between
        ]
        low_end.append(low)
        high_end.append(high)
    a, b = tuple(low_end), tuple(high_end)
    good = profile.converged[a] & profile.converged[b]
    run = np.stack([grid[h] - grid[m] for grid, m, h in zip(profile.grids, a, b, strict=True)], axis=1)
    rise = 0.5 * ((profile.slopes[a] + profile.slopes[b]) * run).sum(axis=1)
    bend = np.abs(((profile.slopes[b] - profile.slopes[a]) * run).sum(axis=1))
    with np.errstate(invalid="ignore"):
        apart = ~(np.abs(profile.chi2[b] - profile.chi2[a] - rise) < SAME_VALLEY + 0.01 * bend) | ~good
    share = np.where(apart, 0.0, share)[:, None]
    first, last = profile.parameters[a], profile.parameters[b]
    found = held.solve(points, np.where(share > 0.0, first + share * (last - first), first), tolerance=1e-5)
    again = np.flatnonzero(apart)
    if again.size:
        found.improve(again, held.solve(points[again], last[again], tolerance=1e-5))
    return found


def _small_regions(profile: Profile, level: float, depth: int) -> list[Region]:
    """Regions around known minima that fall between the points of the grid: look again with a finer one."""
    from fitcore.minimise.profile import profile as make_profile

    if depth >= DEEPEST or min(grid.size for grid in profile.grids) < 2:
        return []
    held = HeldQuantities(profile.problem, profile.names)
    own = held.values(profile.minima)
    delta = profile.problem.chi2(profile.minima) - profile.minimum
    inside = profile.delta_chi2 < level
    found: list[Region] = []
    for point, height in zip(own, delta, strict=True):
        cell = []
        for value, grid in zip(point, profile.grids, strict=True):
            if grid[0] <= value <= grid[-1]:
                cell.append(int(np.clip(np.searchsorted(grid, value) - 1, 0, grid.size - 2)))
        if len(cell) < 2 or not height < level or any(_contains(region, point) for region in found):
            continue
        if inside[cell[0] : cell[0] + 2, cell[1] : cell[1] + 2].any():
            continue
        fine = [
            np.linspace(grid[max(k - 1, 0)], grid[min(k + 2, grid.size - 1)], SUBGRID)
            for grid, k in zip(profile.grids, cell, strict=True)
        ]
        local = make_profile(
            profile.problem,
            profile.names,
            fine,
            start=profile.minimum_parameters,
            minima=list(profile.minima),
        )
        # other minima in the window have windows of their own
        found += [
            region for region in find_regions(local, level, depth=depth + 1) if _contains(region, point)
        ]
    return found


def _contains(region: Region, point: np.ndarray) -> bool:
    """Is the point inside the outline (crossing number), or inside the frame of an open one?"""
    x, y = region.vertices.T
    if not region.closed:
        return bool(x.min() <= point[0] <= x.max() and y.min() <= point[1] <= y.max())
    above = y > point[1]
    crossing = np.flatnonzero(above[1:] != above[:-1])
    share = (point[1] - y[crossing]) / (y[crossing + 1] - y[crossing])
    return bool(np.sum(x[crossing] + share * (x[crossing + 1] - x[crossing]) > point[0]) % 2)
