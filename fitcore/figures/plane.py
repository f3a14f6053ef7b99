"""The plane: what each constraint says about two quantities, and what all say together.

Flat fills are 68.3 % regions, ticked edges 95.4 % regions, both for two parameters. Nothing is written on the bands:
a rail in the margin names each one where it leaves the frame, with its share of chi-square as a strip.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.margin_rail import Exit, find_exit
from fitcore.figures.outlines import draw_edge, height
from fitcore.figures.plane_names import draw_names
from fitcore.figures.plane_parts import (
    BOTTOM,
    BOX_HEIGHT,
    BOX_WIDTH,
    HEIGHT,
    LEFT,
    OVERVIEW_BOTTOM,
    WIDTH,
    Band,
    Box,
    PlaneAxis,
    Sheet,
)
from fitcore.figures.symbols import symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Band", "PlaneAxis", "draw"]

LINE_STYLES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.3)), (0, (5, 1.4, 1.2, 1.4)), (0, (2.6, 1.2)))
#: Bands wider than their partner's pair, which needs less ink, are drawn thinner.
FAINT = 0.45
#: Room for names at the left and below, in inches.
SIDE_ROOM, BELOW_ROOM = 1.62, 0.55


def draw(
    axes_of: tuple[PlaneAxis, PlaneAxis],
    combined: Band,
    bands: Sequence[Band] = (),
    *,
    levels: Sequence[tuple[str, float]],
    best: tuple[float, float] | None = None,
    chi2: float | None = None,
    guides: Sequence[np.ndarray] = (),
    equal: bool = False,
    title: str = "",
    footer: str = "",
    caption: str = "",
) -> style.Drawing:
    """Draw a plane.

    Parameters
    ----------
    axes_of : (PlaneAxis, PlaneAxis)
    combined : Band
        Everything together; its grid is the frame. Its `overview`, if there is one, makes the inset.
    bands : sequence of Band
        Constraints alone, on the same grid.
    levels : sequence of (str, float)
        Words such as ``"68.3 %"`` and Delta chi-square, innermost first: the first is filled, the others are edges.
    best : (float, float), optional
        Best fit.
    chi2 : float, optional
        Of the best fit of everything; the strips show shares of it.
    guides : sequence of array, shape (k, 2)
        Lines to steady the eye, such as the sides of a triangle.
    equal : bool
        One unit is equally long in both directions.
    title, footer, caption : str

    Returns
    -------
    Drawing
    """
    with style.in_style():
        exits: list[Exit | None] = []
        for band in bands:
            exits.append(find_exit(*band.grid, levels[0][1], [e for e in exits if e is not None]))
        sides = {leaving.side for leaving in exits if leaving is not None}
        sheet = Sheet(SIDE_ROOM if "left" in sides else 0.0, BELOW_ROOM if "bottom" in sides else 0.0)
        box = _box(combined, equal)
        main = sheet.axes(box.left, box.bottom, box.width, box.height)
        _frame(main, combined.x, combined.y)
        main.set_xlabel(axes_of[0].label, fontsize=12)
        main.set_ylabel(axes_of[1].label, fontsize=12)
        styles = _line_styles(bands)
        for guide in guides:
            main.plot(*guide.T, color=style.FAINT_INK, lw=0.6, zorder=1.0)
        for band, dashes in zip(bands, styles, strict=True):
            contained = any(other.name.startswith(f"{band.name}+") for other in bands)
            _band(main, band, dashes, levels, FAINT if contained else 1.0)
        _together(main, combined, levels, best, alone=not bands)
        draw_names(
            sheet.page,
            main,
            box,
            bands,
            styles,
            exits,
            chi2,
            _overview_size(combined.overview, equal)[1],
            0.2 + 0.06 * len(title) - sheet.left,
        )
        _summary(sheet.page, bands, levels, chi2)
        _overview(sheet, combined, bands, levels, guides, equal)
        _texts(sheet, axes_of, title, caption, footer)
    return style.Drawing(sheet.figure, *_data(axes_of, combined, bands))


def _box(combined: Band, equal: bool) -> Box:
    width, tall = BOX_WIDTH, BOX_HEIGHT
    if equal:
        shape = float(np.ptp(combined.x) / np.ptp(combined.y))
        width = min(width, tall * shape)
        tall = width / shape
    # what the shape leaves free goes to the bottom, away from the rail at the top
    return Box(LEFT, BOTTOM + BOX_HEIGHT - tall, width, tall)


def _frame(axes: Axes, x: np.ndarray, y: np.ndarray) -> None:
    axes.set_xlim(float(x[0]), float(x[-1]))
    axes.set_ylim(float(y[0]), float(y[-1]))
    for side in ("top", "right"):
        axes.spines[side].set_visible(True)
    for spine in axes.spines.values():
        spine.set_color(style.FAINT_INK)
        spine.set_linewidth(0.7)
        spine.set_zorder(20)
    axes.tick_params(length=3, width=0.7, labelsize=8.5)
    axes.set_facecolor("#fbfbfc")


def _line_styles(bands: Sequence[Band]) -> list[Any]:
    seen: dict[str, int] = {}
    chosen = []
    for band in bands:
        number = seen.get(band.family.colour, 0)
        seen[band.family.colour] = number + 1
        chosen.append(LINE_STYLES[number % len(LINE_STYLES)])
    return chosen


def _fill(
    axes: Axes, grid: tuple[np.ndarray, np.ndarray, np.ndarray], level: float, colour: Any, **more: Any
) -> None:
    x, y, delta = grid
    surface = height(delta, level)
    if surface.min() < np.sqrt(level):
        axes.contourf(x, y, surface.T, levels=[-1.0, float(np.sqrt(level))], colors=[colour], **more)


def _band(axes: Axes, band: Band, dashes: Any, levels: Sequence[tuple[str, float]], ink: float) -> None:
    inner, colour = levels[0][1], band.family.colour
    _fill(axes, band.grid, inner, colour, alpha=0.22 * ink, zorder=2.0)
    draw_edge(
        axes,
        band.lines(inner),
        band.grid,
        colour,
        width=0.6 + 0.6 * ink,
        style=dashes,
        zorder=3.0,
        label=band.name,
    )
    pale = style.tint(colour, 0.55)
    for _, level in levels[1:]:
        draw_edge(axes, band.lines(level), band.grid, pale, width=0.45, ticks=2.2, spacing=9.0, zorder=2.5)


def _together(
    axes: Axes,
    combined: Band,
    levels: Sequence[tuple[str, float]],
    best: tuple[float, float] | None,
    *,
    alone: bool,
) -> None:
    from matplotlib.patches import Polygon

    inner = levels[0][1]
    lines = combined.lines(inner)
    closed = [line for line in lines if np.allclose(line[0], line[-1])]
    if len(closed) == len(lines):
        for line in lines:
            axes.add_patch(Polygon(line, closed=True, facecolor=style.NAVY, lw=0, zorder=6.0))
    else:
        _fill(axes, combined.grid, inner, style.NAVY, zorder=6.0)
    draw_edge(axes, lines, combined.grid, "white", width=3.2, zorder=5.9, label="all")
    for _, level in levels[1:]:
        draw_edge(
            axes,
            combined.lines(level),
            combined.grid,
            style.NAVY,
            width=1.3,
            outline=0.0 if alone else 1.1,
            ticks=4.0,
            spacing=8.0,
            zorder=6.2,
        )
    if best is not None:
        axes.plot(*best, marker="o", ms=2.8, mfc="white", mec="white", zorder=6.5)


def _summary(
    page: Axes, bands: Sequence[Band], levels: Sequence[tuple[str, float]], chi2: float | None
) -> None:
    """What fills and edges mean, and all together."""
    from matplotlib.patches import Rectangle

    x, y = 6.88, HEIGHT - 0.3
    page.add_patch(Rectangle((x, y - 0.075), 0.3, 0.15, facecolor=style.NAVY, lw=0))
    page.text(x + 0.4, y, f"everything: {levels[0][0]} region, two parameters", fontsize=7, va="center")
    for number, (words, _) in enumerate(levels[1:], start=1):
        row = y - 0.2 * number
        page.plot([x, x + 0.3], [row + 0.03] * 2, color=style.NAVY, lw=1.3)
        for tick in np.linspace(x + 0.05, x + 0.25, 3):
            page.plot([tick, tick], [row + 0.03, row - 0.04], color=style.NAVY, lw=1.0)
        page.text(x + 0.4, row, f"{words} region, two parameters", fontsize=7, va="center")
    if bands:
        row = y - 0.2 * len(levels)
        words = "each name: line of its band; strip: its share of"
        total = "" if chi2 is None else rf" $\chi^2$ = {chi2:.1f}"
        page.text(x, row, words + total, fontsize=6.2, va="center", color=style.FAINT_INK)


def _overview_size(
    overview: tuple[np.ndarray, np.ndarray, np.ndarray] | None, equal: bool
) -> tuple[float, float]:
    if overview is None:
        return 0.0, 0.0
    shape = float(np.ptp(overview[0]) / np.ptp(overview[1])) if equal else 2.2 / 1.5
    return (2.2, 2.2 / shape) if shape > 2.2 / 1.55 else (1.55 * shape, 1.55)


def _overview(
    sheet: Sheet,
    combined: Band,
    bands: Sequence[Band],
    levels: Sequence[tuple[str, float]],
    guides: Sequence[np.ndarray],
    equal: bool,
) -> None:
    from matplotlib.patches import Rectangle

    overview = combined.overview
    if overview is None:
        return
    x, y, _ = overview
    width, tall = _overview_size(overview, equal)
    small = sheet.axes(WIDTH - 0.22 - width, OVERVIEW_BOTTOM, width, tall)
    _frame(small, x, y)
    small.tick_params(length=2, labelsize=5.5, pad=1.5)
    small.locator_params(nbins=4)
    for band in bands:
        if band.overview is not None:
            _fill(small, band.overview, levels[0][1], band.family.colour, alpha=0.3, zorder=2.0)
    for guide in guides:
        small.plot(*guide.T, color=style.INK, lw=0.7, zorder=4)
    _fill(small, overview, levels[-1][1], style.NAVY, zorder=5)
    for line in combined.lines(levels[-1][1]):
        small.fill(*line.T, color=style.NAVY, lw=0, zorder=5)
    corner = (float(combined.x[0]), float(combined.y[0]))
    small.add_patch(
        Rectangle(
            corner,
            float(np.ptp(combined.x)),
            float(np.ptp(combined.y)),
            fill=False,
            ec=style.INK,
            lw=0.9,
            zorder=6,
        )
    )


def _texts(sheet: Sheet, axes_of: tuple[PlaneAxis, PlaneAxis], title: str, caption: str, footer: str) -> None:
    head = "Constraints on " + " and ".join(symbol_text(axis.latex, axis.name) for axis in axes_of)
    left, bottom, page = 0.2 - sheet.left, -sheet.below, sheet.page
    page.text(left, HEIGHT - 0.34, head, fontsize=14, fontweight="bold", va="center")
    page.text(left, HEIGHT - 0.61, title, fontsize=8, color=style.FAINT_INK, va="center")
    if caption:
        text = textwrap.fill(caption, 196)
        page.text(
            left, bottom + 0.3, text, fontsize=5.8, color=style.FAINT_INK, va="bottom", linespacing=1.35
        )
    page.text(left, bottom + 0.12, footer, fontsize=6.5, color=style.FAINT_INK, va="bottom")


def _data(
    axes_of: tuple[PlaneAxis, PlaneAxis], combined: Band, bands: Sequence[Band]
) -> tuple[tuple[str, ...], tuple[tuple[Any, ...], ...]]:
    columns = (axes_of[0].name, axes_of[1].name, "delta_chi2", *(f"delta_chi2 {band.name}" for band in bands))
    parts = [band.delta for band in (combined, *bands)]
    rows = tuple(
        (float(x), float(y), *(float(part[i, j]) if np.isfinite(part[i, j]) else None for part in parts))
        for i, x in enumerate(combined.x)
        for j, y in enumerate(combined.y)
    )
    return columns, rows
