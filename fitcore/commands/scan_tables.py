"""Tables of `weakmix profile`."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.commands import tables
from fitcore.minimise.profile import threshold
from fitcore.rounding import interval, like_error, number, with_error

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.commands.scan import Scan

__all__ = ["caution", "number", "percent", "point", "regions"]

#: Does not break where a head wraps.
CHI2 = "chi\N{NON-BREAKING HYPHEN}square"
_EXACT = {0.683: 68.27, 0.954: 95.45, 0.9545: 95.45, 0.997: 99.73, 0.9973: 99.73}


def percent(level: float, digits: int = 2) -> str:
    """Write a confidence level; the rounded ones stand for whole standard deviations."""
    return f"{_EXACT.get(level, 100.0 * level):.{digits}f} %"


def point(scan: Scan) -> Table:
    """Parameters at the lowest minimum."""
    made = tables.table("Lowest minimum", ("parameter", "whole"), ("value", "right"), "unit")
    for parameter, value in zip(scan.problem.parameters, scan.profile.minimum_parameters, strict=True):
        made.add_row(parameter.name, number(float(value)), tables.shown_unit(parameter.unit))
    return made


def regions(scan: Scan) -> list[Table]:
    """Intervals of one quantity, or regions of two."""
    return _intervals(scan) if scan.dof == 1 else [_plane(scan), *_each(scan)]


def _intervals(scan: Scan) -> list[Table]:
    name = scan.profile.names[0]
    unit = tables.shown_unit(scan.problem.unit_of(name))
    made = tables.table(
        f"Intervals of {name}" + (f" in {unit}" if unit else ""),
        ("theory errors", "whole"),
        ("level", "right"),
        (f"Delta {CHI2}", "right"),
        ("interval", "whole"),
        "ends",
    )
    ways = {scan.theory_words: scan.regions, **scan.other_intervals}
    for way, parts in ways.items():
        for level, pieces in zip(scan.levels, parts, strict=True):
            head = (way, percent(level), f"{threshold(level, 1):.3f}")
            if not pieces:
                made.add_row(*head, "none in this range", "")
            for low, high, low_open, high_open in pieces:
                made.add_row(*head, interval(low, high), _ends(low_open, high_open))
    return [made]


def _ends(low_open: bool, high_open: bool) -> str:
    cut = [word for word, is_open in (("lower", low_open), ("upper", high_open)) if is_open]
    return f"{' and '.join(cut)} end set by the range, a bound or the reach of the quantity" if cut else ""


def _plane(scan: Scan) -> Table:
    from fitcore.commands.scan_report import region_minimum

    first, second = scan.profile.names
    made = tables.table(
        "Regions, two parameters",
        ("level", "right"),
        (f"Delta {CHI2}", "right"),
        (first, "whole"),
        (second, "whole"),
        (f"lowest {CHI2}", "right"),
        "outline",
    )
    for level, parts in zip(scan.levels, scan.regions, strict=True):
        head = (percent(level), f"{threshold(level, 2):.3f}")
        if not parts:
            made.add_row(*head, "none in this range", "", "", "")
        for part in parts:
            low, high = part.vertices.min(axis=0), part.vertices.max(axis=0)
            lowest = region_minimum(scan, part)
            made.add_row(
                *head,
                interval(float(low[0]), float(high[0])),
                interval(float(low[1]), float(high[1])),
                "-" if lowest is None else f"{lowest:.3f}",
                "closed" if part.closed else "cut by the range",
            )
    return made


def _each(scan: Scan) -> list[Any]:
    if not scan.each or scan.division is None:
        return []
    first, second = scan.profile.names
    level = scan.levels[0]
    held = ", ".join(
        f"{h.parameter} = {with_error(h.value, h.error, h.error)}" for h in scan.division.held if not h.across
    )
    caption = (
        "counted from the constraint's lowest point in the range; 'beyond' means that it goes on outside"
    )
    if held:
        caption += f"\nthe same for all: {held}, from the {len(scan.division.fixing)} measurements that hardly change"
    made = tables.table(
        f"Constraints, each alone: {percent(level)} (Delta chi-square {threshold(level, 2):.3f}, two parameters)",
        ("constraint", "name"),
        "entries",
        (f"{CHI2} at best fit", "right"),
        (first, "whole"),
        (second, "whole"),
        caption=caption,
    )
    for part in scan.each:
        inside = part.profile.chi2 - part.lowest < threshold(level, 2)
        cells = [
            _extent(part.profile.grids[axis], np.flatnonzero(inside.any(axis=1 - axis))) for axis in (0, 1)
        ]
        made.add_row(
            part.constraint.name, ", ".join(part.constraint.entries), f"{part.constraint.chi2:.2f}", *cells
        )
    return [made]


def _extent(grid: np.ndarray, at: np.ndarray) -> str:
    """From where to where grid points lie inside; an end at the edge of the range is none."""
    if not at.size:
        return "-"
    low_open, high_open = at[0] == 0, at[-1] == grid.size - 1
    step = float(np.ptp(grid)) / 10.0
    low, high = like_error(float(grid[at[0]]), step), like_error(float(grid[at[-1]]), step)
    if low_open and high_open:
        return "beyond both ends"
    if low_open:
        return f"beyond {low} to {high}"
    if high_open:
        return f"{low} to beyond {high}"
    return interval(float(grid[at[0]]), float(grid[at[-1]]), step)


def caution(dof: int) -> str:
    """What the levels assume."""
    what = "one quantity" if dof == 1 else "two quantities together"
    return (
        f"Levels are chi-square differences for {what}: they hold as far as such differences follow their "
        "large-sample distribution (Wilks' theorem), every error is Gaussian as written, and correlations that the "
        "inputs do not state are absent."
    )
