"""The budget: which input makes which part of an uncertainty, as sorted bars.

A bar is the change of the result when the input moves up by its uncertainty, in per cent of the whole uncertainty; a
short stroke marks what would vanish if the input were known exactly.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from fitcore.figures import style
from fitcore.figures.symbols import symbol_text
from fitcore.rounding import significant

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Bar", "draw"]

WIDTH = 8.2
ROW, TOP, BOTTOM, GAP = 0.25, 1.16, 0.5, 0.46
LEFT, RIGHT = 2.75, 7.3
MOST = 18


@dataclass(frozen=True)
class Bar:
    """An entry or group, with its shift and removal in the quantity's unit."""

    name: str
    family: style.Family
    shift: float
    removal: float


def draw(
    name: str,
    bars: Sequence[Bar],
    groups: Sequence[Bar] = (),
    *,
    error: float,
    latex: str = "",
    unit: str = "1",
    title: str = "",
    footer: str = "",
) -> style.Drawing:
    """Draw the budget of one quantity.

    Parameters
    ----------
    name : str
    bars, groups : sequence of Bar
        Entries, and groups that may share entries.
    error : float
        The whole uncertainty.
    latex, unit, title, footer : str

    Returns
    -------
    Drawing
    """
    entries = sorted(bars, key=lambda bar: -abs(bar.shift))
    together = sorted(groups, key=lambda bar: -abs(bar.shift))
    shown = entries[:MOST]
    count = len(shown) + len(together)
    height = TOP + BOTTOM + ROW * count + (GAP if together else 0.0)
    symbol = symbol_text(latex, name)
    unit_text = "" if unit == "1" else f" {unit}"
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
        axes.set_axis_off()
        axes.set_xlim(0, WIDTH)
        axes.set_ylim(height, 0)
        head = f"What makes the uncertainty of {symbol}"
        axes.text(0.2, 0.32, head, fontsize=13, fontweight="bold", va="center")
        axes.text(0.2, 0.57, title, fontsize=7.5, color=style.FAINT_INK, va="center")
        axes.text(
            WIDTH - 0.2,
            0.57,
            f"the whole: {significant(error)}{unit_text}",
            fontsize=8,
            ha="right",
            va="center",
        )
        reach = max(
            [
                1.0,
                *(bar.removal / error for bar in (*shown, *together)),
                *(abs(b.shift) / error for b in shown),
            ]
        )
        _scale(axes, reach, height)
        y = TOP
        for bar in shown:
            _row(axes, bar, y + ROW / 2, error, reach, signed=True)
            y += ROW
        if together:
            y += GAP
            axes.text(
                0.2, y - 0.14, "in groups, which may share inputs", fontsize=7.5, va="center", style="italic"
            )
            for bar in together:
                _row(axes, bar, y + ROW / 2, error, reach, signed=False)
                y += ROW
        if len(entries) > MOST:
            footer += f"  -  the {MOST} largest of {len(entries)} inputs"
        style.footer(figure, footer, left=0.2 / WIDTH, baseline=0.13 / height)
    rows = tuple(
        (
            kind,
            bar.name,
            bar.family.label if kind == "input" else None,
            bar.shift,
            bar.removal,
            bar.shift / error,
        )
        for kind, part in (("input", entries), ("group", together))
        for bar in part
    )
    return style.Drawing(
        figure, ("kind", "name", "family", "shift", "removal", "shift_over_uncertainty"), rows
    )


def _scale(axes: Axes, reach: float, height: float) -> None:
    per_cent = (RIGHT - LEFT) / (100.0 * reach)
    for tick in range(0, int(100 * reach) + 1, 25):
        x = LEFT + tick * per_cent
        axes.plot([x, x], [TOP - 0.06, height - BOTTOM], color=style.RULE, lw=0.6, zorder=0)
        axes.text(x, TOP - 0.1, f"{tick} %", fontsize=6.5, color=style.FAINT_INK, ha="center", va="bottom")
    axes.plot([LEFT, LEFT], [TOP - 0.06, height - BOTTOM], color=style.FAINT_INK, lw=0.8, zorder=1)
    y = 0.78
    axes.fill_between([0.2, 0.5], y - 0.05, y + 0.05, color=style.FAINT_INK, lw=0)
    axes.text(0.58, y, "shift: refitted with this input up by its error", fontsize=6.5, va="center")
    axes.plot([3.5, 3.5], [y - 0.08, y + 0.08], color=style.INK, lw=1.4)
    axes.text(3.58, y, "if exact: what vanishes if this were known exactly", fontsize=6.5, va="center")


def _row(axes: Axes, bar: Bar, y: float, error: float, reach: float, *, signed: bool) -> None:
    from matplotlib.patches import Rectangle

    per_unit = (RIGHT - LEFT) / (reach * error)
    length = abs(bar.shift) * per_unit
    colour = bar.family.colour if signed else style.NAVY
    size = 7.5 * min(1.0, 36 / len(bar.name))
    axes.text(LEFT - 0.1, y, bar.name, fontsize=size, ha="right", va="center")
    axes.add_patch(
        Rectangle(
            (LEFT, y - 0.07), max(length, 0.008), 0.14, color=colour, lw=0, zorder=2, gid=f"shift:{bar.name}"
        )
    )
    stroke = LEFT + bar.removal * per_unit
    axes.plot(
        [stroke, stroke], [y - 0.095, y + 0.095], color=style.INK, lw=1.4, zorder=3, gid=f"removal:{bar.name}"
    )
    words = f"{100 * abs(bar.shift) / error:.0f} %"
    if signed:  # an input that moves up moves the result up or down
        words = ("+" if bar.shift >= 0 else "\N{MINUS SIGN}") + words
    axes.text(WIDTH - 0.2, y, words, fontsize=7, ha="right", va="center", color=style.FAINT_INK)
