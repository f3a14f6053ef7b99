"""What `weakmix profile` computes: grids from the command line, profiles, regions, plain data."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.commands.scan_axes import Axis, make_grids, number_of_points, range_text
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import Profile, profile, threshold
from fitcore.minimise.regions import find_regions
from observables.errors import ConvergenceError, InputError

if TYPE_CHECKING:
    from fitcore.problem import Problem
    from fitcore.studies.constraints import Constraint, Division

#: Points of the overview of a plane of bands.
OVERVIEW_POINTS = (45, 37)
#: A constraint that fails on more of the frame than this is not drawn.
MOSTLY_LOST = 0.5
#: Nor one whose region covers more of it than this.
SILENT = 0.9


@dataclass(frozen=True)
class ConstraintProfile:
    """A constraint alone: its profile on the frame and on the overview, counted from its lowest point in the frame."""

    constraint: Constraint
    profile: Profile
    overview: Profile | None
    lowest: float


@dataclass(frozen=True)
class Scan:
    """All that one run of the command found."""

    problem: Problem
    levels: tuple[float, ...]
    profile: Profile
    regions: tuple[tuple[Any, ...], ...]
    start_chi2: float
    division: Division | None = None
    each: tuple[ConstraintProfile, ...] = ()
    skipped: tuple[str, ...] = ()
    silent: tuple[str, ...] = ()
    overview: Profile | None = None
    others: Mapping[str, Profile] = field(default_factory=dict)
    other_intervals: Mapping[str, tuple[tuple[Any, ...], ...]] = field(default_factory=dict)

    @property
    def dof(self) -> int:
        """Number of quantities."""
        return len(self.profile.names)

    @property
    def best(self) -> tuple[float, ...]:
        """The quantities at the lowest minimum."""
        values = self.problem.values(self.profile.minimum_parameters, self.profile.names)
        return tuple(float(values[name]) for name in self.profile.names)


def run(
    problem: Problem,
    axes: Sequence[Axis],
    levels: tuple[float, ...],
    *,
    each: bool = False,
    others: Mapping[str, Problem] | None = None,
    seed: int = 0,
    report: Callable[[int, int], None] = lambda done, total: None,
) -> Scan:
    """Profile, find regions, and profile every constraint alone where asked.

    Raises
    ------
    ConvergenceError
        The fit itself has no converged minimum.
    InputError
        A range that no possible point reaches.
    """
    levels = tuple(sorted(set(levels)))
    names = tuple(axis.name for axis in axes)
    others = others or {}
    report(0, 1 + len(others))
    minima = find_minima(problem, rng=seed)
    if not minima or not minima[0].converged:
        raise ConvergenceError("the fit has no converged minimum; see weakmix fit", minima)
    thetas = [minimum.theta for minimum in minima]
    highest = threshold(levels[-1], len(axes))
    near = [m.theta for m in minima if m.chi2 < minima[0].chi2 + highest]
    grids = make_grids(problem, axes, near, math.sqrt(highest), each=each)
    found = profile(problem, names, grids, start=thetas[0], minima=thetas[1:])
    if not np.isfinite(found.chi2).any():
        raise InputError(
            f"no possible point has {' and '.join(range_text(a, g) for a, g in zip(axes, grids, strict=True))}"
        )
    found = _widened(problem, axes, found, levels, thetas)
    report(1, 1 + len(others))
    scan = Scan(problem, levels, found, _regions(found, levels), minima[0].chi2)
    if each:
        return _with_each(scan, report)
    if others:
        profiles, intervals = {}, {}
        for number, (way, other) in enumerate(others.items()):
            there = find_minima(other, rng=seed)
            if not there:
                raise ConvergenceError(f"theory errors {way}: no possible start", there)
            profiles[way] = profile(
                other, names, found.grids, start=there[0].theta, minima=[m.theta for m in there[1:6]]
            )
            intervals[way] = _regions(profiles[way], levels)
            report(2 + number, 1 + len(others))
        return Scan(
            problem, levels, found, scan.regions, scan.start_chi2, others=profiles, other_intervals=intervals
        )
    return scan


def _widened(
    problem: Problem,
    axes: Sequence[Axis],
    found: Profile,
    levels: Sequence[float],
    thetas: Sequence[np.ndarray],
) -> Profile:
    """Widen an automatic range of one quantity until the outermost interval ends inside it."""
    if len(axes) != 1 or axes[0].low is not None:
        return found
    from fitcore.minimise.held_quantities import HeldQuantities

    low_limit, high_limit = (float(limit[0]) for limit in HeldQuantities(problem, found.names).limits())
    period = problem.period_of(axes[0].name)
    level = threshold(levels[-1], 1)
    for _ in range(4):
        grid, delta = found.grids[0], found.delta_chi2
        span = float(np.ptp(grid))
        if period is not None and span >= period:
            break
        low = grid[0] - 0.6 * span if delta[0] < 1.2 * level else grid[0]
        high = grid[-1] + 0.6 * span if delta[-1] < 1.2 * level else grid[-1]
        low, high = max(low, low_limit), min(high, high_limit)
        if (low, high) == (grid[0], grid[-1]):
            break
        wider = np.linspace(low, high, number_of_points(axes[0], 1))
        found = profile(problem, found.names, [wider], start=found.minimum_parameters, minima=list(thetas))
    return found


def _regions(found: Profile, levels: Sequence[float]) -> tuple[tuple[Any, ...], ...]:
    if len(found.names) == 1:
        return tuple(tuple(found.interval(level)) for level in levels)
    return tuple(tuple(find_regions(found, threshold(level, 2))) for level in levels)


def _with_each(scan: Scan, report: Callable[[int, int], None]) -> Scan:
    from fitcore.studies.constraints import divide, profile_constraint

    found, problem = scan.profile, scan.problem
    theta = found.minimum_parameters
    half = [0.5 * float(np.ptp(grid)) for grid in found.grids]
    division = divide(problem, theta, found.names, half)
    wide = _overview_grids(scan)
    frames = (found.grids, wide) if wide else (found.grids,)
    steps = 1 + len(division.constraints)
    overview = None
    if wide:  # everything together is a spot at this scale: a coarse grid finds its other regions, the frame draws it
        overview = profile(
            problem, found.names, [grid[::2] for grid in wide], start=theta, minima=list(found.minima[1:4])
        )
    done, skipped, silent = [], [], []
    for number, constraint in enumerate(division.constraints):
        report(number + 1, steps)
        both = profile_constraint(problem, constraint, found.names, frames, theta)
        if not both or both[0].flagged.mean() > MOSTLY_LOST:
            skipped.append(constraint.name)
            continue
        alone, around = both[0], both[1] if wide else None
        lowest = float(np.min(np.where(alone.converged, alone.chi2, np.inf)))
        if (alone.chi2 - lowest < threshold(scan.levels[0], 2)).mean() > SILENT:
            silent.append(constraint.name)
            continue
        done.append(ConstraintProfile(constraint, alone, around, lowest))
    report(steps, steps)
    return Scan(
        problem,
        scan.levels,
        found,
        scan.regions,
        scan.start_chi2,
        division,
        tuple(done),
        tuple(skipped),
        tuple(silent),
        overview,
    )


def _overview_grids(scan: Scan) -> list[np.ndarray]:
    """The whole triangle, where the plane is that of its apex; other planes have no natural whole."""
    from fitcore.commands.scan_figures import guides

    lines = guides(scan)
    if not lines:
        return []
    grids = []
    for axis, (grid, margin) in enumerate(zip(scan.profile.grids, (0.12, 0.05), strict=True)):
        every = np.concatenate([line[:, axis] for line in lines])
        low = min(float(every.min()) - margin, float(grid[0]) - 0.05)
        high = max(float(every.max()) + 2.0 * margin, float(grid[-1]) + 0.08)
        grids.append(np.linspace(low, high, OVERVIEW_POINTS[axis]))
    return grids
