"""What a scan says: notes for a reader, reasons to fall short, plain data for result.json."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.minimise.profile import threshold
from fitcore.minimise.regions import Region

if TYPE_CHECKING:
    from fitcore.commands.scan import Scan

__all__ = ["inside_polygon", "notes", "region_data", "region_minimum", "shortcomings", "to_dict"]


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
    if scan.same_theory:
        said.append(
            f"theory errors {' and '.join(scan.same_theory)} are the same as {scan.problem.theory_errors} here: "
            "one curve stands for both"
        )
    if scan.skipped:
        said.append(
            "not drawn alone, because alone they do not determine the two quantities in much of the plane: "
            f"{', '.join(scan.skipped)}"
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
                "held": [h.parameter for h in part.constraint.held],
                "chi2_share": part.constraint.chi2,
                "lowest": part.lowest,
                "chi2": part.profile.chi2.tolist(),
            }
            for part in scan.each
        ]
    if scan.division is not None:
        content["held"] = {h.parameter: {"value": h.value, "error": h.error} for h in scan.division.held}
        content["held_from"] = list(scan.division.fixing)
    if scan.others or scan.same_theory:
        content["theory_errors_same"] = list(scan.same_theory)
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
