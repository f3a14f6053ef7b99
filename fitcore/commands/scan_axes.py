"""The axes of `weakmix profile`: NAME=LOW:HIGH:POINTS on the command line, and the grids that they mean."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from fitcore.minimise.profile import automatic_range, threshold
from observables.errors import InputError

if TYPE_CHECKING:
    from fitcore.problem import Problem

__all__ = [
    "Axis",
    "check_levels",
    "check_names",
    "make_grids",
    "number_of_points",
    "parse_axes",
    "range_text",
    "same_scale",
]

POINTS = {1: 201, 2: 100}
#: Points along an axis of a plane of bands in quantities that are no parameters: every point is a fit with constraints.
DERIVED_POINTS = 50
MOST_POINTS = 1_000_000
#: Standard deviations around the best fit that a plane of bands shows.
BAND_FRAME = 15.0


@dataclass(frozen=True)
class Axis:
    """A name, and the range asked for."""

    name: str
    low: float | None = None
    high: float | None = None
    points: int | None = None


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


def range_text(axis: Axis, grid: np.ndarray) -> str:
    """The range of a grid in words."""
    return f"{axis.name} in [{grid[0]:.6g}, {grid[-1]:.6g}]"


def number_of_points(axis: Axis, dof: int) -> int:
    """Grid points along an axis."""
    return axis.points or POINTS[dof]


def make_grids(
    problem: Problem, axes: Sequence[Axis], near: Sequence[np.ndarray], width: float, *, each: bool
) -> list[np.ndarray]:
    """Grids in the ranges asked for, or `width` standard deviations around the minima; wider for bands."""
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
    derived = each and any(axis.name not in problem.parameter_names for axis in axes)
    return [
        np.linspace(low, high, axis.points or (DERIVED_POINTS if derived else POINTS[len(axes)]))
        for axis, (low, high) in zip(axes, ranges, strict=True)
    ]


def same_scale(problem: Problem, names: Sequence[str]) -> bool:
    """Whether both axes of a plane are alike: dimensionless parameters of like size, as the apex's coordinates."""
    scales = {p.name: p.scale for p in problem.parameters}
    alike = all(name in scales and problem.unit_of(name) == "1" for name in names)
    return alike and max(scales[n] for n in names) < 3.0 * min(scales[n] for n in names)


def _equal_frame(ranges: list[tuple[float, float]]) -> list[tuple[float, float]]:
    """A frame of the page's shape in which one unit is equally long both ways."""
    from fitcore.figures.plane_parts import BOX_HEIGHT, BOX_WIDTH

    halves = [0.5 * (high - low) for low, high in ranges]
    unit = max(halves[0] / BOX_WIDTH, halves[1] / BOX_HEIGHT)
    centres = [0.5 * (high + low) for low, high in ranges]
    wanted = (unit * BOX_WIDTH, unit * BOX_HEIGHT)
    return [(c - half, c + half) for c, half in zip(centres, wanted, strict=True)]
