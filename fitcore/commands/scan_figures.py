"""Figures of `weakmix profile`, put together from a scan."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.minimise.profile import threshold

if TYPE_CHECKING:
    from fitcore.commands.scan import ConstraintProfile, Scan
    from fitcore.figures.plane import Band

APEX = ("wolfenstein_rhobar", "wolfenstein_etabar")


def drawings(scan: Scan) -> dict[str, style.Drawing]:
    """Name of the file -> drawing."""
    if scan.dof == 1:
        return {"profile": _one(scan)}
    return {"plane": _plane(scan)}


def footer(scan: Scan) -> str:
    """What the figure was made from."""
    inputs = scan.problem.inputs
    revision = f" revision {inputs.revision}" if inputs.revision else ""
    parts = [f"{inputs.name}{revision}", inputs.sha256[:8]]
    if scan.problem.hypothesis != "standard":
        parts.append(f"hypothesis {scan.problem.hypothesis}")
    if not (scan.others or scan.same_theory):
        parts.append(f"theory errors {scan.problem.theory_errors}")
    return " - ".join(parts)


def guides(scan: Scan) -> list[np.ndarray]:
    """Sides of the unitarity triangle, where the plane is that of its apex."""
    if tuple(scan.profile.names) != APEX:
        return []
    return [np.array([[0.0, 0.0], [1.0, 0.0], list(scan.best), [0.0, 0.0]])]


def _levels(scan: Scan) -> list[tuple[str, float]]:
    return [(f"{100 * level:.1f} %", threshold(level, scan.dof)) for level in scan.levels]


def _one(scan: Scan) -> style.Drawing:
    from fitcore.figures.one_parameter import Curve, draw

    name = scan.profile.names[0]
    curves = []
    every: dict[str, Any] = {scan.theory_words: (scan.profile, scan.regions)}
    every |= {way: (other, scan.other_intervals[way]) for way, other in scan.others.items()}
    for way, (found, intervals) in every.items():
        place = int(np.argmin(found.delta_chi2))
        best = scan.best[0] if found is scan.profile else float(found.grids[0][place])
        curves.append(
            Curve(
                way if scan.others or scan.same_theory else "",
                found.grids[0],
                found.delta_chi2,
                intervals,
                best,
            )
        )
    return draw(
        name,
        curves,
        levels=_levels(scan),
        latex=scan.problem.latex_of(name),
        unit=scan.problem.unit_of(name),
        title=scan.problem.inputs.title,
        footer=footer(scan),
    )


def _plane(scan: Scan) -> style.Drawing:
    from fitcore.commands.scan_axes import same_scale
    from fitcore.figures.plane import Band, PlaneAxis, draw

    problem, found = scan.problem, scan.profile
    first, second = (PlaneAxis(n, problem.latex_of(n), problem.unit_of(n)) for n in found.names)
    levels = _levels(scan)
    outlines = {
        level: [part.vertices for part in parts]
        for (_, level), parts in zip(levels, scan.regions, strict=True)
    }
    together = Band(
        "everything",
        "",
        style.OTHER,
        found.grids[0],
        found.grids[1],
        found.delta_chi2,
        outlines=outlines,
        overview=None
        if scan.overview is None
        else ((scan.overview.grids[0], scan.overview.grids[1], scan.overview.chi2 - found.minimum)),
    )
    caption = _caption(scan) if scan.each else ""
    return draw(
        (first, second),
        together,
        [_band(scan, part) for part in scan.each],
        levels=levels,
        best=(scan.best[0], scan.best[1]),
        chi2=found.minimum,
        guides=guides(scan),
        equal=same_scale(problem, found.names) and bool(scan.each),
        title=problem.inputs.title,
        footer=footer(scan),
        caption=caption,
    )


def _caption(scan: Scan) -> str:
    """What a band is."""
    from fitcore.figures.symbols import symbol_text
    from fitcore.rounding import with_error

    division = scan.division
    if division is None:
        return ""
    words, level = _levels(scan)[0]
    text = (
        f"Each band: {words} region for two parameters (Delta chi-square below {level:.2f}) of one measured quantity "
        "alone, counted from its lowest point in the frame, refitted with the theory inputs that it needs"
    )
    shown = [h for h in division.held if not h.across]
    if shown:
        held = ", ".join(
            f"{symbol_text(scan.problem.latex_of(h.parameter), h.parameter)} = {with_error(h.value, h.error, h.error)}"
            for h in shown
        )
        text += (
            f" and with {held}, as the {len(division.fixing)} measurements that hardly change over the frame give "
            "them at the best fit (the same for every band)"
        )
    text += "."
    if any(len(part.constraint.quantities) > 1 for part in scan.each):
        text += " Two symbols joined: both measured quantities at once, so that common theory errors cancel."
    return text


#: Beginnings of names of quantities, and a group whose family they belong to where an entry's groups say nothing.
_FAMILY_OF_NAMES = (
    ("epsilon_K", "kaon-epsilon"),
    ("mixing_frequency", "oscillation"),
    ("width_difference", "oscillation"),
    ("sine_2", "cp-asymmetry"),
    ("cosine_2", "cp-asymmetry"),
    ("asymmetry", "cp-asymmetry"),
    ("semileptonic_asymmetry", "cp-asymmetry"),
    ("isospin_alpha", "cp-asymmetry"),
    ("angle_alpha", "cp-asymmetry"),
    ("angle_beta", "cp-asymmetry"),
    ("phase_phi", "cp-asymmetry"),
    ("angle_gamma", "tree-phase"),
    ("magnitude_", "magnitude"),
    ("branching_Bu_tau_nu", "magnitude"),
    ("branching_", "rare"),
)


def _family(groups: tuple[str, ...], quantity: str) -> style.Family:
    """Family by the groups, or else by the quantity."""
    family = style.family_of(groups)
    if family is not style.OTHER:
        return family
    group = next((word for start, word in _FAMILY_OF_NAMES if quantity.startswith(start)), "")
    return style.family_of((group,)) if group else family


def _band(scan: Scan, part: ConstraintProfile) -> Band:
    from fitcore.figures.outlines import refine
    from fitcore.figures.plane import Band

    problem, constraint = scan.problem, part.constraint
    latex = [problem.latex_of(quantity) for quantity in constraint.quantities]
    overview = None
    if part.overview is not None:
        around = part.overview
        delta = np.where(around.flagged, np.inf, around.chi2 - part.lowest)
        times = 5 if around.grids[0].size < 60 else 2
        overview = refine(around.grids[0], around.grids[1], delta, around.slopes, times)
    return Band(
        constraint.name,
        r"\,{+}\,".join(latex) if all(latex) else "",
        _family(constraint.groups, constraint.quantities[0]),
        part.profile.grids[0],
        part.profile.grids[1],
        part.profile.chi2 - part.lowest,
        share=constraint.chi2,
        overview=overview,
    )
