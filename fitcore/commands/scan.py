"""What `weakmix profile` computes: grids from the command line, profiles, regions, plain data."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
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

#: Points of the overview of a plane of bands, for constraints that need no other inputs and for those that do.
OVERVIEW_POINTS = {True: (129, 81), False: (45, 37)}
#: A constraint that fails on more of the frame than this is not drawn.
LOST = 0.1
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
class Overview:
    """The surroundings of the frame, and chi-square there; infinite where no other minimum is near."""

    grids: list[np.ndarray]
    chi2: np.ndarray


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
    overview: Overview | None = None
    others: Mapping[str, Profile] = field(default_factory=dict)
    other_intervals: Mapping[str, tuple[tuple[Any, ...], ...]] = field(default_factory=dict)
    same_theory: tuple[str, ...] = ()

    @property
    def dof(self) -> int:
        """Number of quantities."""
        return len(self.profile.names)

    @property
    def theory_words(self) -> str:
        """Treatment of theory errors, with the others that come to the same."""
        return " = ".join((self.problem.theory_errors, *self.same_theory))

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
        profiles, intervals, same = {}, {}, []
        for number, (way, other) in enumerate(others.items()):
            if _same_terms(problem, other):  # the two treatments are one: a second curve would hide the first
                same.append(way)
                report(2 + number, 1 + len(others))
                continue
            there = find_minima(other, rng=seed)
            if not there:
                raise ConvergenceError(f"theory errors {way}: no possible start", there)
            profiles[way] = profile(
                other, names, found.grids, start=there[0].theta, minima=[m.theta for m in there[1:6]]
            )
            intervals[way] = _regions(profiles[way], levels)
            report(2 + number, 1 + len(others))
        return replace(scan, others=profiles, other_intervals=intervals, same_theory=tuple(same))
    return scan


def _same_terms(first: Problem, second: Problem) -> bool:
    """Whether two treatments of theory errors leave the same problem."""
    return (
        first.parameters == second.parameters
        and [(e.id, e.value, e.plus, e.minus) for e in first.entries]
        == [(e.id, e.value, e.plus, e.minus) for e in second.entries]
        and np.array_equal(first.terms.correlation, second.terms.correlation)
    )


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
    from fitcore.studies.outline_refinement import refine_outline

    heights = [threshold(level, 2) for level in levels]
    return tuple(
        tuple(refine_outline(found, region, height) for region in find_regions(found, height))
        for height in heights
    )


def _with_each(scan: Scan, report: Callable[[int, int], None]) -> Scan:
    from fitcore.studies.constraints import divide, profile_constraint

    found, problem = scan.profile, scan.problem
    theta = found.minimum_parameters
    half = [0.5 * float(np.ptp(grid)) for grid in found.grids]
    division = divide(problem, theta, found.names, half)
    wide = {simple: _overview_grids(scan, points) for simple, points in OVERVIEW_POINTS.items()}
    steps = 1 + len(division.constraints)
    overview = _elsewhere(scan, wide[False]) if wide[False] else None
    derived = any(name not in problem.parameter_names for name in found.names)
    highest = threshold(scan.levels[0], 2)
    done: list[ConstraintProfile] = []
    verdicts: dict[str, list[str]] = {"skipped": [], "silent": []}
    for number, constraint in enumerate(division.constraints):
        report(number + 1, steps)
        around = wide[not (constraint.company or constraint.held)]
        frames = (found.grids, around) if around else (found.grids,)
        if derived:  # each point is a fit with constraints: a look at a few first
            probe = profile_constraint(
                problem, constraint, found.names, [[g[::8] for g in found.grids]], theta
            )
            if verdict := _unfit(probe, highest):
                verdicts[verdict].append(constraint.name)
                continue
        both = profile_constraint(problem, constraint, found.names, frames, theta)
        if verdict := _unfit(both, highest):
            verdicts[verdict].append(constraint.name)
            continue
        alone = both[0]
        lowest = _lowest(alone)
        done.append(ConstraintProfile(constraint, alone, both[1] if around else None, lowest))
    report(steps, steps)
    return replace(
        scan,
        division=division,
        each=tuple(done),
        skipped=tuple(verdicts["skipped"]),
        silent=tuple(verdicts["silent"]),
        overview=overview,
    )


def _lowest(alone: Profile) -> float:
    return float(np.min(np.where(alone.converged, alone.chi2, np.inf)))


def _unfit(profiles: Sequence[Profile], level: float) -> str:
    """Why a constraint makes no band: "skipped" where it does not determine the plane, "silent" where it allows all."""
    if not profiles or profiles[0].flagged.mean() > LOST:
        return "skipped"
    alone = profiles[0]
    return "silent" if (alone.chi2 - _lowest(alone) < level).mean() > SILENT else ""


def _elsewhere(scan: Scan, grids: list[np.ndarray]) -> Overview:
    """Everything together, seen from afar: the frame draws it, unless another minimum as low lies outside the frame."""
    found, problem = scan.profile, scan.problem
    at = problem.linearise_quantities(found.minima, found.names)[0]
    low = problem.chi2(found.minima) < found.minimum + threshold(scan.levels[-1], 2)
    inside = np.all([(g[0] <= v) & (v <= g[-1]) for v, g in zip(at.T, found.grids, strict=True)], axis=0)
    if not (low & ~inside).any():
        return Overview(grids, np.full([grid.size for grid in grids], np.inf))
    around = profile(
        problem, found.names, grids, start=found.minimum_parameters, minima=list(found.minima[1:4])
    )
    return Overview(grids, around.chi2)


def _overview_grids(scan: Scan, points: tuple[int, int]) -> list[np.ndarray]:
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
        grids.append(np.linspace(low, high, points[axis]))
    return grids
