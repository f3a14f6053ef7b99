"""What `weakmix profile` computes: grids from the command line, profiles, regions, plain data."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import Profile, automatic_range, profile, threshold
from fitcore.minimise.regions import Region, find_regions
from observables.errors import ConvergenceError, InputError

if TYPE_CHECKING:
    from fitcore.problem import Problem
    from fitcore.studies.constraints import Constraint, Division

POINTS = {1: 201, 2: 100}
MOST_POINTS = 1_000_000
#: Standard deviations around the best fit that a plane of bands shows, and its overview's size in such planes.
BAND_FRAME = 15.0
OVERVIEW_POINTS = (73, 49)
#: A constraint that fails on more of the frame than this is not drawn.
MOSTLY_LOST = 0.5
#: Nor one whose region covers more of it than this.
SILENT = 0.9


@dataclass(frozen=True)
class Axis:
    """A name, and the range asked for."""

    name: str
    low: float | None = None
    high: float | None = None
    points: int | None = None


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


def parse_axes(texts: Sequence[str]) -> tuple[Axis, ...]:
    """Read NAME or NAME=LOW:HIGH or NAME=LOW:HIGH:POINTS.

    Raises
    ------
    InputError
        Anything else, an empty or reversed range, the same name twice, or more than two names.
    """
    axes = tuple(_axis(text) for text in texts)
    if not 1 <= len(axes) <= 2:
        raise InputError(f"profile takes one or two names, got {len(axes)}: {' '.join(texts)}")
    if len({axis.name for axis in axes}) < len(axes):
        raise InputError(f"{axes[0].name}: is given twice; two different names make a plane")
    total = math.prod(axis.points or POINTS[len(axes)] for axis in axes)
    if total > MOST_POINTS:
        raise InputError(f"{total} grid points are more than {MOST_POINTS}; ask for fewer")
    return axes


def _axis(text: str) -> Axis:
    name, equals, rest = text.partition("=")
    name = name.strip()
    if not name:
        raise InputError(f"{text!r}: a name is missing; write NAME or NAME=LOW:HIGH:POINTS")
    if not equals:
        return Axis(name)
    parts = rest.split(":")
    if len(parts) not in (2, 3):
        raise InputError(f"{text!r}: write the range as {name}=LOW:HIGH or {name}=LOW:HIGH:POINTS")
    try:
        low, high = float(parts[0]), float(parts[1])
        points = int(parts[2]) if len(parts) == 3 else None
    except ValueError:
        raise InputError(
            f"{text!r}: LOW and HIGH are numbers in the quantity's unit and POINTS is a whole number"
        ) from None
    if not (math.isfinite(low) and math.isfinite(high)):
        raise InputError(f"{text!r}: the range must be finite")
    if low == high:
        raise InputError(f"{text!r}: the range is empty; LOW must be below HIGH")
    if low > high:
        raise InputError(f"{text!r}: the range is reversed; write {name}={parts[1]}:{parts[0]}")
    if points is not None and points < 2:
        raise InputError(f"{text!r}: a grid needs at least 2 points")
    return Axis(name, low, high, points)


def check_levels(levels: Sequence[float], dof: int) -> None:
    """Refuse confidence levels outside (0, 1)."""
    for level in levels:
        threshold(level, dof)


def check_names(problem: Problem, axes: Sequence[Axis]) -> None:
    """Refuse names that cannot be scanned.

    Raises
    ------
    UnknownNameError
        Not in the catalogue.
    InputError
        Complex, not determined by the inputs, or held fixed.
    """
    for axis in axes:
        problem.unit_of(axis.name)
        if problem.is_complex(axis.name):
            raise InputError(f"{axis.name}: is complex; scan a real quantity, for instance its magnitude")
        problem.values(problem.start, (axis.name,))
        _, slopes = problem.linearise_quantities(problem.start, (axis.name,))
        if not np.any(slopes):
            raise InputError(f"{axis.name}: does not depend on any free parameter of these inputs")


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
    grids = _grids(problem, axes, near, math.sqrt(highest), each=each)
    found = profile(problem, names, grids, start=thetas[0], minima=thetas[1:])
    if not np.isfinite(found.chi2).any():
        raise InputError(
            f"no possible point has {' and '.join(_range_text(a, g) for a, g in zip(axes, grids, strict=True))}"
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


def _range_text(axis: Axis, grid: np.ndarray) -> str:
    return f"{axis.name} in [{grid[0]:.6g}, {grid[-1]:.6g}]"


def _grids(
    problem: Problem, axes: Sequence[Axis], near: Sequence[np.ndarray], width: float, *, each: bool
) -> list[np.ndarray]:
    ranges = []
    for axis in axes:
        if axis.low is not None and axis.high is not None:
            ranges.append((axis.low, axis.high))
            continue
        if each:
            low, high = automatic_range(problem, near[0], None, axis.name, width=BAND_FRAME)
        else:
            found = [automatic_range(problem, theta, None, axis.name, width=1.6 * width) for theta in near]
            low, high = min(pair[0] for pair in found), max(pair[1] for pair in found)
        ranges.append((low, high))
    if each and all(axis.low is None for axis in axes) and same_scale(problem, [axis.name for axis in axes]):
        ranges = _equal_frame(ranges)
    return [
        np.linspace(low, high, axis.points or POINTS[len(axes)])
        for axis, (low, high) in zip(axes, ranges, strict=True)
    ]


def same_scale(problem: Problem, names: Sequence[str]) -> bool:
    """Whether both axes of a plane are alike: dimensionless parameters of like size, as the apex's coordinates."""
    scales = {p.name: p.scale for p in problem.parameters}
    alike = all(name in scales and problem.unit_of(name) == "1" for name in names)
    return alike and max(scales[n] for n in names) < 3.0 * min(scales[n] for n in names)


def _equal_frame(ranges: list[tuple[float, float]]) -> list[tuple[float, float]]:
    """A frame of the page's shape in which one unit is equally long both ways."""
    from fitcore.figures.plane import BOX_HEIGHT, BOX_WIDTH

    halves = [0.5 * (high - low) for low, high in ranges]
    unit = max(halves[0] / BOX_WIDTH, halves[1] / BOX_HEIGHT)
    centres = [0.5 * (high + low) for low, high in ranges]
    wanted = (unit * BOX_WIDTH, unit * BOX_HEIGHT)
    return [(c - half, c + half) for c, half in zip(centres, wanted, strict=True)]


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
        wider = np.linspace(low, high, axes[0].points or POINTS[1])
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


def notes(scan: Scan) -> list[str]:
    """What a reader must know about the points of the grid."""
    found = scan.profile
    said = []
    unreachable = int((found.flagged & ~np.isfinite(found.chi2)).sum())
    failed = int((found.flagged & np.isfinite(found.chi2)).sum())
    if unreachable:
        said.append(
            f"{unreachable} of {found.chi2.size} grid points are out of reach: no possible point has these values"
        )
    if failed:
        said.append(
            f"{failed} of {found.chi2.size} grid points are flagged: not minimised, their chi-square is too high"
        )
    if scan.skipped:
        said.append(
            f"not drawn alone, because alone they do not determine most of the plane: {', '.join(scan.skipped)}"
        )
    if scan.silent:
        said.append(
            f"not drawn alone, because alone they allow nearly all of the plane: {', '.join(scan.silent)}"
        )
    if scan.each and any(part.profile.flagged.any() for part in scan.each):
        parts = [
            f"{p.constraint.name} ({int(p.profile.flagged.sum())})"
            for p in scan.each
            if p.profile.flagged.any()
        ]
        said.append(f"flagged points in bands: {', '.join(parts)}")
    return said


def shortcomings(scan: Scan) -> list[str]:
    """Reasons for exit code 1: failed points that could move an edge."""
    found = scan.profile
    highest = threshold(scan.levels[-1], scan.dof)
    failed = found.flagged & np.isfinite(found.chi2)
    beside = failed & (found.delta_chi2 < 1.5 * highest)
    inside = ~found.flagged & (found.delta_chi2 < highest)
    for axis in range(inside.ndim):
        for shift in (1, -1):
            moved = np.roll(inside, shift, axis)
            edge = [slice(None)] * inside.ndim
            edge[axis] = slice(0, 1) if shift == 1 else slice(-1, None)
            moved[tuple(edge)] = False
            beside |= failed & moved
    if beside.any():
        return [
            f"{int(beside.sum())} grid points beside a region could not be minimised: its edge is uncertain"
        ]
    return []


def region_data(
    regions: tuple[tuple[Any, ...], ...], levels: Sequence[float], dof: int
) -> list[dict[str, Any]]:
    """Regions as plain data."""
    data = []
    for level, parts in zip(levels, regions, strict=True):
        one: dict[str, Any] = {"cl": level, "dof": dof, "delta_chi2": threshold(level, dof)}
        if dof == 1:
            one["intervals"] = [[low, high] for low, high, _, _ in parts]
            one["open"] = [[low_open, high_open] for _, _, low_open, high_open in parts]
        else:
            one["polylines"] = [part.vertices.tolist() for part in parts]
            one["closed"] = [bool(part.closed) for part in parts]
        data.append(one)
    return data


def to_dict(scan: Scan) -> dict[str, Any]:
    """The machine-readable result."""
    found, problem = scan.profile, scan.problem
    content: dict[str, Any] = {
        "names": list(found.names),
        "units": [problem.unit_of(name) for name in found.names],
        "grids": [grid.tolist() for grid in found.grids],
        "chi2": found.chi2.tolist(),
        "flagged": found.flagged.tolist(),
        "minimum": found.minimum,
        "minimum_at": dict(zip(found.names, scan.best, strict=True)),
        "regions": region_data(scan.regions, scan.levels, scan.dof),
        "lower_minimum_found": found.better_minimum is not None,
        "notes": notes(scan),
        "hypothesis": problem.hypothesis,
        "theory_errors": problem.theory_errors,
        "inputs": {"name": problem.inputs.name, "sha256": problem.inputs.sha256},
    }
    if scan.each:
        content["each"] = [
            {
                "name": part.constraint.name,
                "entries": list(part.constraint.entries),
                "with": list(part.constraint.company),
                "chi2_share": part.constraint.chi2,
                "lowest": part.lowest,
                "chi2": part.profile.chi2.tolist(),
            }
            for part in scan.each
        ]
    if scan.others:
        content["theory_errors_compared"] = {
            way: {
                "chi2": other.chi2.tolist(),
                "minimum": other.minimum,
                "regions": region_data(scan.other_intervals[way], scan.levels, 1),
            }
            for way, other in scan.others.items()
        }
    return content


def region_minimum(scan: Scan, region: Region) -> float | None:
    """Lowest chi-square known inside an outline."""
    found = scan.profile
    x, y = (axis.ravel() for axis in np.meshgrid(*found.grids, indexing="ij"))
    own = scan.problem.linearise_quantities(found.minima, found.names)[0]
    points = np.concatenate([np.stack([x, y], 1), own])
    chi2 = np.concatenate([found.chi2.ravel(), scan.problem.chi2(found.minima)])
    inside = inside_polygon(points, region.vertices)
    return float(chi2[inside].min()) if inside.any() else None


def inside_polygon(points: np.ndarray, polygon: np.ndarray) -> np.ndarray:
    """Whether points (k, 2) lie inside a polygon, by counting crossings."""
    inside = np.zeros(len(points), dtype=bool)
    x, y = points.T
    for (x1, y1), (x2, y2) in zip(polygon, np.roll(polygon, -1, axis=0), strict=True):
        if y1 == y2:
            continue
        crosses = (y1 > y) != (y2 > y)
        inside ^= crosses & (x < x1 + (y - y1) * (x2 - x1) / (y2 - y1))
    return inside
