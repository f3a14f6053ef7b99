"""The plane: what each constraint says about two quantities, and what all say together.

Flat fills are 68.3 % regions, ticked edges 95.4 % regions, both for two parameters. Nothing is written on the bands:
a rail in the margin names each one where it leaves the frame, with its share of chi-square as a strip.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.margin_rail import Exit, find_exit, spread
from fitcore.figures.outlines import contour_lines, draw_edge, height
from fitcore.figures.symbols import glyphs, symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["Band", "PlaneAxis", "draw"]

WIDTH, HEIGHT = 9.6, 6.75
LEFT, BOTTOM, BOX_WIDTH, BOX_HEIGHT = 0.78, 1.08, 6.1, 4.42
RAIL_GAP = 0.34
LINE_STYLES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.3)), (0, (5, 1.4, 1.2, 1.4)), (0, (2.6, 1.2)))
STRIP = 0.95
#: Bands wider than their partner's pair, which needs less ink, are drawn thinner.
FAINT = 0.45
OVERVIEW_BOTTOM = 0.78
#: Room for names at the left and below, in inches.
SIDE_ROOM, BELOW_ROOM = 1.62, 0.55


@dataclass(frozen=True)
class PlaneAxis:
    """One of the two quantities.

    Attributes
    ----------
    name, latex, unit : str
    """

    name: str
    latex: str = ""
    unit: str = "1"

    @property
    def label(self) -> str:
        """Symbol with its unit."""
        unit = "" if self.unit == "1" else f"  [{self.unit}]"
        return symbol_text(self.latex, self.name) + unit


@dataclass(frozen=True)
class Band:
    """One constraint alone, or everything combined.

    Attributes
    ----------
    name : str
    latex : str
    family : Family
        Gives the colour; members of a family differ by line style.
    x, y : ndarray
    delta : ndarray, shape (x.size, y.size)
        Chi-square above its lowest value.
    share : float
        Contribution to chi-square at the best fit of everything.
    outlines : dict
        Level -> polished outlines; where absent they are interpolated on the grid.
    overview : tuple of (x, y, delta), or None
    """

    name: str
    latex: str
    family: style.Family
    x: np.ndarray
    y: np.ndarray
    delta: np.ndarray
    share: float = 0.0
    outlines: dict[float, list[np.ndarray]] = field(default_factory=dict)
    overview: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None

    @property
    def grid(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """x, y and delta."""
        return self.x, self.y, self.delta

    def lines(self, level: float) -> list[np.ndarray]:
        """Outlines at a level."""
        return self.outlines[level] if level in self.outlines else contour_lines(*self.grid, level)


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
        _rails(
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


class Sheet:
    """The page in inches. Room that names need at the left or below is added outside: nothing else moves.

    Parameters
    ----------
    left, below : float
        Extra room.
    """

    def __init__(self, left: float, below: float) -> None:
        self.left, self.below = left, below
        self.figure: Figure = style.new_figure(WIDTH + left, HEIGHT + below)
        self.page = self.axes(-left, -below, WIDTH + left, HEIGHT + below, label="page", zorder=-1)
        self.page.set_axis_off()
        self.page.set_xlim(-left, WIDTH)
        self.page.set_ylim(-below, HEIGHT)

    def axes(self, x: float, y: float, width: float, height: float, **more: Any) -> Axes:
        """Axes at a place of the page."""
        wide, tall = WIDTH + self.left, HEIGHT + self.below
        return self.figure.add_axes(
            ((x + self.left) / wide, (y + self.below) / tall, width / wide, height / tall), **more
        )


@dataclass(frozen=True)
class Box:
    """Where the plane lies on the page, in inches."""

    left: float
    bottom: float
    width: float
    height: float


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


def _rails(
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
    """Names in the margins."""
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
    inside = [k for k, leaving in enumerate(exits) if leaving is None]
    for number, k in enumerate(
        inside
    ):  # a closed band never leaves the frame: named below the others, without leader
        place = (box.left + box.width + RAIL_GAP, OVERVIEW_BOTTOM + overview + 0.3 + 0.42 * number)
        _name(page, bands[k], styles[k], "right", *place, chi2)


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
