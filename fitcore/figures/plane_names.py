"""Names of bands on the rails around a plane, with their leaders and strips."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.margin_rail import Exit, spread
from fitcore.figures.plane_parts import OVERVIEW_BOTTOM, Band, Box
from fitcore.figures.symbols import glyphs, symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["draw_names"]

RAIL_GAP = 0.34
#: Length of a strip with its sample of line, in inches.
STRIP = 0.95


def draw_names(
    page: Axes,
    main: Axes,
    box: Box,
    bands: Sequence[Band],
    styles: Sequence[Any],
    exits: Sequence[Exit | None],
    chi2: float | None,
    overview: float,
    title_ends: float,
) -> None:
    """Names in the margins, each tied to its band.

    Parameters
    ----------
    page, main : matplotlib Axes
        The page in inches, and the plane with its final limits.
    box : Box
        Where the plane lies on the page.
    bands, styles, exits : sequences
        Bands, their line styles, and where they leave the frame.
    chi2 : float or None
        Of which the strips show shares.
    overview : float
        Height of the inset, above which names must stay.
    title_ends : float
        Where the title ends, beside which names must stay.
    """
    for side in ("right", "top", "left", "bottom"):
        chosen = [
            (k, leaving.at) for k, leaving in enumerate(exits) if leaving is not None and leaving.side == side
        ]
        if not chosen:
            continue
        upright = side in ("right", "left")
        limits = main.get_ylim() if upright else main.get_xlim()
        length, origin = (box.height, box.bottom) if upright else (box.width, box.left)
        at = [origin + (where - limits[0]) / (limits[1] - limits[0]) * length for _, where in chosen]
        room = [0.42 if upright else 1.45] * len(chosen)
        reach = (0.0, 0.1) if upright else (0.5, 0.15)
        low = origin - reach[0]
        if side == "top":
            low = max(low, title_ends)
        if side == "right" and overview:
            low = max(low, OVERVIEW_BOTTOM + overview + 0.12)
        placed = spread(at, room, low, origin + length + reach[1])
        edge, rail = {
            "right": (box.left + box.width, box.left + box.width + RAIL_GAP),
            "top": (box.bottom + box.height, box.bottom + box.height + 0.24),
            "left": (box.left, box.left - 0.82),
            "bottom": (box.bottom, box.bottom - 0.5),
        }[side]
        ends = (min(placed) - 0.14, max(placed) + 0.14)
        line = ([rail, rail], ends) if upright else (ends, [rail, rail])
        page.plot(*line, color=style.RULE, lw=2.2, solid_capstyle="round", zorder=1)
        out = 1.0 if side in ("right", "top") else -1.0
        for (k, _), start, end in zip(chosen, at, placed, strict=True):
            colour = bands[k].family.colour
            path = [
                (edge, start),
                (edge + 0.05 * out, start),
                (rail - 0.05 * out, end),
                (rail + 0.06 * out, end),
            ]
            points = np.array(path if upright else [point[::-1] for point in path])
            page.plot(
                *points.T,
                color=colour,
                lw=0.9,
                solid_joinstyle="round",
                zorder=2,
                gid=f"leader:{bands[k].name}",
            )
            page.plot(*points[-2:].T, color=colour, lw=2.6, solid_capstyle="butt", zorder=3)
            _name(page, bands[k], styles[k], side, rail, end, chi2)
    for number, k in enumerate(k for k, leaving in enumerate(exits) if leaving is None):
        _name_inside(
            page, main, box, bands[k], styles[k], chi2, OVERVIEW_BOTTOM + overview + 0.3 + 0.42 * number
        )


def _name_inside(
    page: Axes, main: Axes, box: Box, band: Band, dashes: Any, chi2: float | None, at: float
) -> None:
    """A band that never leaves the frame: a line leads from its name into the frame, to a dot where it is lowest."""
    place = np.unravel_index(
        int(np.argmin(np.where(np.isfinite(band.delta), band.delta, np.inf))), band.delta.shape
    )
    low, high = main.get_xlim(), main.get_ylim()
    x = box.left + (band.x[place[0]] - low[0]) / (low[1] - low[0]) * box.width
    y = box.bottom + (band.y[place[1]] - high[0]) / (high[1] - high[0]) * box.height
    rail = box.left + box.width + RAIL_GAP
    over = page.figure.add_axes(page.get_position().bounds, zorder=30, label="leaders")
    over.set_axis_off()
    over.set_xlim(page.get_xlim())
    over.set_ylim(page.get_ylim())
    path = np.array([(x, y), (box.left + box.width, at), (rail + 0.06, at)])
    for width, colour in ((2.2, "white"), (0.8, band.family.colour)):
        over.plot(*path.T, color=colour, lw=width, solid_joinstyle="round", gid=f"leader:{band.name}")
    over.plot([x], [y], "o", ms=3.0, mfc=band.family.colour, mec="white", mew=0.6)
    _name(page, band, dashes, "right", rail, at, chi2)


def _name(page: Axes, band: Band, dashes: Any, side: str, rail: float, at: float, chi2: float | None) -> None:
    from matplotlib.patches import Rectangle

    symbol = symbol_text(band.latex, band.name)
    size = 9.5 * min(1.0, 14 / max(glyphs(symbol), 1))
    colour = band.family.colour
    if side in ("right", "left"):
        x, y = (rail + 0.14, at) if side == "right" else (rail - 0.14, at)
        sign, align = (1.0, "left") if side == "right" else (-1.0, "right")
        page.text(x, y + 0.045, symbol, fontsize=size, ha=align, va="center")
        strip_x, strip_y = (x if sign > 0 else x - STRIP - 0.24), y - 0.135
    else:
        up = side == "top"
        x, y = at, rail + (0.24 if up else -0.22)
        page.text(x, y + 0.055, symbol, fontsize=size, ha="center", va="center")
        strip_x, strip_y = x - 0.5 * STRIP, y - 0.115
    sample = strip_x
    page.plot([sample, sample + 0.24], [strip_y + 0.02] * 2, color=colour, lw=1.4, ls=dashes, zorder=3)
    strip_x, full = strip_x + 0.3, STRIP - 0.3
    part = 0.0 if not chi2 else min(max(band.share / chi2, 0.0), 1.0)
    page.add_patch(Rectangle((strip_x, strip_y), full, 0.045, facecolor=style.RULE, lw=0, zorder=2))
    page.add_patch(
        Rectangle(
            (strip_x, strip_y),
            max(full * part, 0.012),
            0.045,
            facecolor=colour,
            lw=0,
            zorder=3,
            gid=f"share:{band.name}",
        )
    )
    page.text(
        strip_x + full + 0.05,
        strip_y + 0.02,
        f"{band.share:.1f}",
        fontsize=6,
        color=style.FAINT_INK,
        va="center",
    )
