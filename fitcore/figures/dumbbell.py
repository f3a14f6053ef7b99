"""Measured against fitted: one row per measurement, each on its own scale.

A dot with a line is the measured value with its error, a bar the fitted value with its own, and a thin link
between them the distance. Rows are scaled so that one measured error is equally long in all of them: the
link's length is the pull.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from fitcore.figures import style
from fitcore.rounding import fixed, shared_power, significant

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from fitcore.result import FitResult, MeasurementRow

COLUMNS = (
    *("id", "quantity", "unit", "family", "measured", "error_plus", "error_minus"),
    *("fitted", "fitted_error", "pull", "source"),
)

#: More rows than this do not fit on a page: auxiliary inputs go first, those with small pulls before others.
MOST = 40
#: Groups of measurements that serve the others, as theory inputs do.
AUXILIARY = frozenset({"lifetime", "mass", "form-factor-shape"})
ROW_HEIGHT = 0.36
WIDTH = 8.6


def arrange(rows: tuple[MeasurementRow, ...]) -> list[tuple[style.Family, list[MeasurementRow]]]:
    """Put rows into family lanes: lanes by their largest pull, rows inside by the size of theirs."""
    lanes: dict[style.Family, list[MeasurementRow]] = {}
    for row in rows:
        lanes.setdefault(style.family_of(row.groups, row.kind), []).append(row)
    ordered = [(family, sorted(members, key=_size, reverse=True)) for family, members in lanes.items()]
    return sorted(ordered, key=lambda lane: (lane[0] is not style.THEORY, _size(lane[1][0])), reverse=True)


def is_auxiliary(row: MeasurementRow) -> bool:
    """Whether a row is a theory input, or a measurement such as a lifetime that says nothing of the matrix alone."""
    return row.kind == "theory" or not AUXILIARY.isdisjoint(row.groups)


def selection(rows: tuple[MeasurementRow, ...], most: int = MOST) -> tuple[MeasurementRow, ...]:
    """Return the rows to draw: every measurement of the matrix, then auxiliary ones by pull while there is room."""
    ranked = sorted(rows, key=lambda row: (is_auxiliary(row), -_size(row)))
    return tuple(ranked[: max(most, sum(not is_auxiliary(row) for row in rows))])


def _size(row: MeasurementRow) -> float:
    return abs(row.pull) if row.pull is not None and math.isfinite(row.pull) else -1.0


def draw(result: FitResult, *, latex: Mapping[str, str] | None = None, footer: str = "") -> style.Drawing:
    """Draw the measured against the fitted values of a fit.

    Parameters
    ----------
    result : FitResult
        Its `measurements` are drawn.
    latex : mapping, optional
        Quantity -> latex symbol.
    footer : str
        Says what the figure was made from.

    Returns
    -------
    Drawing
    """
    latex = latex or {}
    chosen = selection(result.measurements)
    lanes = arrange(chosen)
    n_rows = sum(len(members) for _, members in lanes)
    top, bottom = 0.92, 0.42
    height = n_rows * ROW_HEIGHT + 0.16 * max(len(lanes) - 1, 0) + top + bottom
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = figure.add_axes((0.0, bottom / height, 1.0, 1.0 - (top + bottom) / height))
        axes.set_axis_off()
        axes.set_xlim(0, WIDTH)
        axes.set_ylim(height - top - bottom, 0)  # inches downwards: rows are laid out like lines of text
        reach = max([1.8, *(_size(row) / 2 + 1.35 for _, members in lanes for row in members)])
        rail = Rail(middle=5.0, half=1.5, reach=reach)
        y = 0.0
        for family, members in lanes:
            _lane(axes, family, y, len(members) * ROW_HEIGHT)
            for row in members:
                _row(axes, rail, family, row, y + ROW_HEIGHT / 2 - 0.025, latex.get(row.quantity, ""))
                y += ROW_HEIGHT
            y += 0.16
        _head(figure, height, result)
        if len(chosen) < len(result.measurements):
            own = sum(not is_auxiliary(row) for row in chosen)
            others = len(result.measurements) - own
            note = f"all {own} measurements; {len(chosen) - own} of {others} auxiliary inputs, by pull"
            y = 1 - 0.68 / height
            figure.text(0.16 / WIDTH, y, note, fontsize=6.5, va="center", color=style.FAINT_INK)
        style.footer(figure, footer, left=0.16 / WIDTH, baseline=0.14 / height)
        figure.text(
            1 - 0.16 / WIDTH,
            0.14 / height,
            "one measured error has the same length in every row; small numbers are each row's own scale",
            fontsize=6.5,
            color=style.FAINT_INK,
            ha="right",
            va="bottom",
        )
    data = tuple(
        (
            *(row.id, row.quantity, row.unit, family.label, row.measured, row.error_plus, row.error_minus),
            *(row.fitted, row.fitted_error, row.pull, row.source),
        )
        for family, members in arrange(result.measurements)
        for row in members
    )
    return style.Drawing(figure, COLUMNS, data)


class Rail:
    """Where a row's values lie on the page.

    Parameters
    ----------
    middle, half : float
        Middle and half-length of the rail in inches.
    reach : float
        How many measured errors the half-length stands for.
    """

    def __init__(self, middle: float, half: float, reach: float) -> None:
        self.middle, self.half, self.reach = middle, half, reach

    def scale(self, row: MeasurementRow) -> tuple[float, float]:
        """Return the value in the middle of a row's rail, and the inches per unit of the row."""
        # the error that faces the fit, as in the pull
        sigma = row.error_plus if row.fitted > row.measured else row.error_minus
        centre = (row.measured + row.fitted) / 2
        return centre, self.half / (self.reach * sigma)


def _lane(axes: Axes, family: style.Family, y: float, height: float) -> None:
    from matplotlib.patches import Rectangle

    axes.add_patch(
        Rectangle((0.16, y), WIDTH - 0.32, height, color=style.tint(family.colour, 0.09), lw=0, zorder=0)
    )
    axes.add_patch(Rectangle((0.16, y), 0.055, height, color=family.colour, lw=0, zorder=1))
    axes.text(
        WIDTH - 0.24,
        y + 0.04,
        fold(family.label),
        fontsize=6.5,
        color=style.FAINT_INK,
        ha="right",
        va="top",
        style="italic",
        linespacing=1.25,
        zorder=5,
    )


def fold(label: str, width: int = 20) -> str:
    """Break a label into lines, so that it fits beside the pulls."""
    return textwrap.fill(label, width)


def _row(axes: Axes, rail: Rail, family: style.Family, row: MeasurementRow, y: float, latex: str) -> None:
    from matplotlib.patches import FancyBboxPatch

    centre, per_unit = rail.scale(row)

    def place(value: float) -> float:
        return rail.middle + (value - centre) * per_unit

    style.draw_symbol(axes, 0.32, y, latex, row.quantity, size=9.5, room=1.27)
    fitting = 6.5 * min(1.0, 33 / len(row.id))
    axes.text(1.66, y, row.id, fontsize=fitting, va="center", ha="left", color=style.FAINT_INK)
    left, right = rail.middle - rail.half, rail.middle + rail.half
    axes.plot([left, right], [y, y], color=style.tint(family.colour, 0.28), lw=0.7, zorder=1)
    marks = ticks(centre - rail.half / per_unit, centre + rail.half / per_unit)
    words, power = tick_texts(marks)
    small: dict[str, Any] = {"fontsize": 4.8, "color": style.FAINT_INK, "va": "top", "zorder": 1}
    for tick, word in zip(marks, words, strict=True):
        x = place(tick)
        axes.plot([x, x], [y + 0.07, y + 0.1], color=style.FAINT_INK, lw=0.6, zorder=1)
        axes.text(x, y + 0.108, word, ha="center", **small)
    axes.text(right + 0.07, y + 0.108, scale_unit(row.unit, power), ha="left", **small)
    measured, fitted = place(row.measured), place(row.fitted)
    axes.plot([measured, fitted], [y, y], color=family.colour, lw=1.0, zorder=2)
    half = (row.fitted_error or 0.0) * per_unit
    bar = max(half, 0.02)
    axes.add_patch(
        FancyBboxPatch(
            (fitted - bar, y - 0.06),
            2 * bar,
            0.12,
            boxstyle="round,pad=0,rounding_size=0.02",
            facecolor=style.NAVY,
            edgecolor=style.PAPER,
            lw=0.9,
            zorder=3,
        )
    )
    ends = [place(row.measured - row.error_minus), place(row.measured + row.error_plus)]
    axes.plot(ends, [y, y], color=style.PAPER, lw=3.2, solid_capstyle="butt", zorder=3.5)
    axes.plot(ends, [y, y], color=family.colour, lw=1.8, solid_capstyle="butt", zorder=4)
    axes.plot([measured], [y], "o", ms=5.4, mfc=family.colour, mec=style.PAPER, mew=0.9, zorder=5)
    strong = row.pull is not None and abs(row.pull) >= 2
    axes.text(
        7.1,
        y,
        "" if row.pull is None else style.sign(row.pull),
        fontsize=8.5,
        va="center",
        ha="right",
        fontweight="bold" if strong else "normal",
    )


def ticks(low: float, high: float) -> list[float]:
    """Return at least two round values inside a range, as few as the steps 5, 2 and 1 allow."""
    margin = 0.04 * (high - low)
    power = 10.0 ** math.floor(math.log10(high - low))
    found: list[float] = []
    for factor in (5.0, 2.0, 1.0, 0.5, 0.2):
        step = factor * power
        first, last = math.ceil((low + margin) / step), math.floor((high - margin) / step)
        found = [index * step for index in range(first, last + 1)]
        if len(found) >= 2:
            break
    return found


def tick_texts(marks: Sequence[float]) -> tuple[list[str], int]:
    """Write ticks with equally many decimals, and the power of ten that they leave to the unit."""
    power = shared_power(*marks)
    scaled = [mark * 10.0**-power for mark in marks]
    decimals = max((len(f"{x:.6g}".partition(".")[2]) for x in scaled if "e" not in f"{x:.6g}"), default=0)
    if any("e" in f"{x:.6g}" for x in scaled):
        return [f"{x:.6g}" for x in scaled], power
    return [fixed(x, decimals) for x in scaled], power


def scale_unit(unit: str, power: int) -> str:
    """Write the unit of a scale, after the power of ten that its ticks leave out."""
    parts = [f"$\\times 10^{{{power}}}$"] if power else []
    return " ".join([*parts, *([] if unit == "1" else [unit])])


def _head(figure: Any, height: float, result: FitResult) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Rectangle

    figure.text(
        0.16 / WIDTH, 1 - 0.3 / height, "Measured against fitted", fontsize=13, fontweight="bold", va="center"
    )
    p = "" if result.p_value is None else f", p = {significant(result.p_value)}"
    broken = "" if result.valid else "  -  NOT CONVERGED"
    figure.text(
        1 - 0.16 / WIDTH,
        1 - 0.3 / height,
        f"chi-square {result.chi2:.2f} for {result.degrees_of_freedom} degrees of freedom{p}{broken}",
        fontsize=8.5,
        ha="right",
        va="center",
        color=style.INK if result.valid else style.VERMILLION,
    )
    y = 1 - 0.68 / height

    def sample(x: float) -> float:
        return x / WIDTH

    figure.add_artist(Line2D([sample(3.5), sample(3.8)], [y, y], color=style.FAINT_INK, lw=1.8))
    figure.add_artist(
        Line2D(
            [sample(3.65)], [y], marker="o", ms=5.4, mfc=style.FAINT_INK, mec=style.PAPER, mew=0.9, ls="none"
        )
    )
    figure.text(sample(3.88), y, "measured, with its error", fontsize=7.5, va="center")
    figure.add_artist(
        Rectangle((sample(5.3), y - 0.06 / height), 0.3 / WIDTH, 0.12 / height, color=style.NAVY, lw=0)
    )
    figure.text(sample(5.68), y, "fitted, 68.27 %", fontsize=7.5, va="center")
    figure.text(sample(7.2), y, "(bold: 2 or more)", fontsize=6.5, va="center", color=style.FAINT_INK)
    figure.text(sample(7.1), y, "pull", fontsize=7.5, va="center", ha="right")
