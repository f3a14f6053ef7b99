"""Intervals and regions with calibrated thresholds: where the data's Delta chi-square stays below what is needed."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.held_quantities import HeldQuantities
from fitcore.minimise.minima import Minimum
from fitcore.minimise.profile import Profile, profile, profile_intervals, threshold
from fitcore.studies.calibration_result import CalibratedRegion, quantile_with_error
from observables.errors import InputError

__all__ = ["RegionPlan", "finish_region", "plan_region"]

#: Values per quantity at which pseudo-experiments are thrown, for one quantity and for two.
NODES = {1: 13, 2: 7}
#: Points of the data's profile per interval between nodes.
REFINEMENT = {1: 10, 2: 6}
#: How far beyond the asymptotic end the search reaches, in sqrt(Delta chi2).
MARGIN = 1.0


@dataclass
class RegionPlan:
    """Where the thresholds of a region are calibrated, and the data's profile.

    Attributes
    ----------
    names : tuple of str
    levels : tuple of float
    nodes_of : tuple of ndarray
        Grid of the pseudo-experiments.
    step : int
        Every so manyth point of the profile is a node.
    profile : Profile
    limits : tuple of (float, float)
        Natural limits of the quantities.
    """

    names: tuple[str, ...]
    levels: tuple[float, ...]
    nodes_of: tuple[np.ndarray, ...]
    step: int
    profile: Profile
    limits: tuple[tuple[float, float], ...]

    def nodes(self) -> Iterator[tuple[tuple[float, ...], np.ndarray, bool]]:
        """Values, profiled parameters and usability of every node, in grid order."""
        shape = tuple(grid.size for grid in self.nodes_of)
        for index in np.ndindex(shape):
            fine = tuple(self.step * i for i in index)
            values = tuple(float(grid[i]) for grid, i in zip(self.nodes_of, index, strict=True))
            yield values, self.profile.parameters[fine], bool(self.profile.converged[fine])


def plan_region(
    problem: Any, minima: Sequence[Minimum], names: tuple[str, ...], grids: Any, levels: tuple[float, ...]
) -> RegionPlan:
    """Choose the grid and profile the data on it.

    Parameters
    ----------
    problem : Problem
    minima : sequence of Minimum
        Best first.
    names : tuple of one or two str
    grids : sequence of arrays, or None
        Values of the nodes; by default equally spaced ones that reach a little beyond the asymptotic region.
    levels : tuple of float
    """
    dof = len(names)
    low, high = HeldQuantities(problem, names).limits()
    limits = tuple((float(a), float(b)) for a, b in zip(low, high, strict=True))
    if grids is None:
        reach = (np.sqrt(max(threshold(level, dof) for level in levels)) + MARGIN) ** 2
        nodes_of = tuple(np.linspace(*ends, NODES[dof]) for ends in _ranges(problem, minima, names, reach))
    else:
        nodes_of = tuple(np.asarray(grid, dtype=float) for grid in grids)
    for name, grid in zip(names, nodes_of, strict=True):
        if grid.ndim != 1 or grid.size < 2 or not np.isfinite(grid).all() or not (np.diff(grid) > 0.0).all():
            raise InputError(f"{name}: the grid needs at least two increasing finite values")
    step = REFINEMENT[dof]
    fine = tuple(_refined(grid, step) for grid in nodes_of)
    best, *others = [minimum.theta for minimum in minima]
    return RegionPlan(
        names, levels, nodes_of, step, profile(problem, names, fine, start=best, minima=others), limits
    )


def _ranges(
    problem: Any, minima: Sequence[Minimum], names: tuple[str, ...], reach: float
) -> list[tuple[float, float]]:
    """For each quantity the span of the intervals around all minima up to Delta chi2 = `reach`."""
    ends: dict[str, list[float]] = {name: [] for name in names}
    for minimum in minima:
        left = reach - (minimum.chi2 - minima[0].chi2)
        if left > 0.0:
            for name, [(low, high, *_)] in profile_intervals(problem, minimum.theta, names, (left,)).items():
                ends[name] += [low, high]
    ranges = []
    for name in names:
        low, high = min(ends[name]), max(ends[name])
        if not (np.isfinite(low) and np.isfinite(high) and low < high):
            raise InputError(f"{name}: the data do not limit it; give a range, for instance {name}=0:1:11")
        ranges.append((low, high))
    return ranges


def _refined(grid: np.ndarray, step: int) -> np.ndarray:
    position = np.arange(step * (grid.size - 1) + 1) / step
    fine = np.asarray(np.interp(position, np.arange(grid.size), grid))
    fine[::step] = grid
    return fine


def finish_region(
    plan: RegionPlan, nodes: Sequence[Sequence[Mapping[str, np.ndarray]]], unit_of: Callable[[str], str]
) -> CalibratedRegion:
    """Thresholds from the pseudo-experiments of each node, and the region that they give.

    Parameters
    ----------
    plan : RegionPlan
    nodes : sequence, in grid order
        For each node the columns of its truths; none where it is out of reach. The largest threshold counts.
    unit_of : callable
    """
    dof = len(plan.names)
    shape = tuple(grid.size for grid in plan.nodes_of)
    assumed = np.array([threshold(level, dof) for level in plan.levels])
    needed = np.full((3, len(plan.levels), len(nodes)), np.nan)
    toys = failed = 0
    for k, truths in enumerate(nodes):
        toys += sum(columns["t"].size for columns in truths)
        failed += int(sum(columns["failed"].sum() for columns in truths))
        for c, level in enumerate(plan.levels):
            content = _content(level)
            found = [quantile_with_error(columns["t"], content) for columns in truths]
            if found:
                needed[:, c, k] = max(found)
    needed = needed.reshape(3, len(plan.levels), *shape)
    delta = plan.profile.delta_chi2
    drawn = _draw_intervals if dof == 1 else _draw_polylines
    calibrated, asymptotic, messages = [], [], []
    for c in range(len(plan.levels)):
        limit = np.sqrt(_interpolated(plan, needed[0, c]))
        if not np.isfinite(limit).all():
            messages.append(
                f"too few pseudo-experiments for cl = {plan.levels[c]:g}: the threshold is infinite somewhere"
            )
        calibrated.append(
            drawn(plan, np.sqrt(np.maximum(delta, 0.0)) - np.where(np.isfinite(limit), limit, 1e6))
        )
        asymptotic.append(drawn(plan, np.sqrt(np.maximum(delta, 0.0)) - np.sqrt(assumed[c])))
    if dof == 1 and any(_cut(plan, ends) for parts in calibrated for ends in parts):
        messages.append("the interval reaches the end of the grid: give a wider one")
    return CalibratedRegion(
        names=plan.names,
        units=tuple(unit_of(name) for name in plan.names),
        cl=plan.levels,
        assumed=assumed,
        grids=plan.nodes_of,
        needed=needed[0],
        needed_low=needed[1],
        needed_high=needed[2],
        fine_grids=plan.profile.grids,
        delta_chi2=delta,
        calibrated=tuple(calibrated),
        asymptotic=tuple(asymptotic),
        toys=toys,
        failed=failed,
        message="; ".join(dict.fromkeys(messages)),
    )


def _content(level: float) -> float:
    """Probability content that a confidence level means (0.683 is 68.27 %)."""
    from scipy.special import chdtr

    return float(chdtr(1, threshold(level, 1)))


def _interpolated(plan: RegionPlan, needed: np.ndarray) -> np.ndarray:
    """Thresholds on the fine grid, linear between nodes; nodes out of reach take their neighbours'."""
    for axis, (grid, fine) in enumerate(zip(plan.nodes_of, plan.profile.grids, strict=True)):
        needed = np.apply_along_axis(_interpolated_line, axis, needed, grid, fine)
    known = needed[~np.isnan(needed)]
    return np.where(np.isnan(needed), known.max(), needed)


def _interpolated_line(line: np.ndarray, grid: np.ndarray, fine: np.ndarray) -> np.ndarray:
    known = ~np.isnan(line)
    if not known.any():
        return np.full(fine.size, np.nan)
    return np.asarray(np.interp(fine, grid[known], line[known]))


def _draw_intervals(plan: RegionPlan, height: np.ndarray) -> list[tuple[float, float, bool, bool]]:
    """Where `height` is not positive, ends interpolated linearly; open where the grid ends."""
    x = plan.profile.grids[0]
    height = np.where(np.isfinite(height), height, np.inf)
    inside = height <= 0.0
    parts = []
    edges = np.flatnonzero(np.diff(np.concatenate([[False], inside, [False]]).astype(int)))
    for first, last in zip(edges[::2], edges[1::2] - 1, strict=True):
        low_open, high_open = first == 0, last == x.size - 1
        low = x[first] if low_open else _crossing(x, height, first - 1, first)
        high = x[last] if high_open else _crossing(x, height, last + 1, last)
        parts.append((float(low), float(high), bool(low_open), bool(high_open)))
    return parts


def _crossing(x: np.ndarray, height: np.ndarray, outside: int, inside: int) -> float:
    if not np.isfinite(height[outside]):  # out of reach
        return float(x[inside])
    share = height[inside] / (height[inside] - height[outside])
    return float(x[inside] + share * (x[outside] - x[inside]))


def _cut(plan: RegionPlan, ends: Any) -> bool:
    """Whether the grid, rather than a natural limit, ended an interval."""
    low, high, low_open, high_open = ends
    (natural_low, natural_high) = plan.limits[0]
    return bool((low_open and low > natural_low) or (high_open and high < natural_high))


def _draw_polylines(plan: RegionPlan, height: np.ndarray) -> list[np.ndarray]:
    from contourpy import contour_generator

    x, y = plan.profile.grids
    filled = np.where(np.isfinite(height), height, 10.0)
    return [np.asarray(line) for line in contour_generator(x, y, filled.T).lines(0.0)]
