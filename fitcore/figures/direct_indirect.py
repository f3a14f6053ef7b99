"""Direct against indirect: two bars per quantity, its own measurement above what everything else implies."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from fitcore.figures import style
from fitcore.figures.scales import bar, draw_scale, scale_for
from fitcore.figures.symbols import glyphs, symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Pair", "draw"]

WIDTH = 8.2
ROW, TOP, BOTTOM = 0.56, 1.0, 0.48
LEFT, RIGHT = 2.15, 6.55
COLUMNS = (
    *("quantity", "unit", "direct", "direct_plus", "direct_minus", "indirect"),
    *("indirect_low_68", "indirect_high_68", "indirect_low_95", "indirect_high_95", "tension"),
)


@dataclass(frozen=True)
class Pair:
    """A quantity; `direct` and `tension` are None where it has no measurement of its own."""

    name: str
    latex: str
    unit: str
    family: style.Family
    value: float
    interval_68: tuple[float, float]
    interval_95: tuple[float, float]
    direct: float | None = None
    direct_error: tuple[float, float] | None = None
    tension: float | None = None


def draw(pairs: Sequence[Pair], *, title: str = "", footer: str = "") -> style.Drawing:
    """Draw paired bars, the largest tension first.

    Parameters
    ----------
    pairs : sequence of Pair
    title, footer : str

    Returns
    -------
    Drawing
    """
    ordered = sorted(pairs, key=lambda pair: -abs(pair.tension or 0.0))
    height = TOP + BOTTOM + ROW * len(ordered)
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
        axes.set_axis_off()
        axes.set_xlim(0, WIDTH)
        axes.set_ylim(height, 0)
        axes.text(0.2, 0.32, "Direct against indirect", fontsize=13, fontweight="bold", va="center")
        axes.text(0.2, 0.56, title, fontsize=7.5, color=style.FAINT_INK, va="center")
        _key(axes)
        for number, pair in enumerate(ordered):
            y = TOP + ROW * (number + 0.5)
            if number % 2 == 0:
                axes.fill_between(
                    [0.16, WIDTH - 0.16], y - ROW / 2, y + ROW / 2, color="#f5f6f8", lw=0, zorder=0
                )
            _row(axes, pair, y)
        style.footer(figure, footer, left=0.2 / WIDTH, baseline=0.13 / height)
        style.own_scales(figure, right=0.2 / WIDTH, baseline=0.13 / height)
    rows = tuple(
        (
            *(p.name, p.unit, p.direct, *(p.direct_error or (None, None)), p.value),
            *(end if math.isfinite(end) else None for end in (*p.interval_68, *p.interval_95)),
            p.tension,
        )
        for p in ordered
    )
    return style.Drawing(figure, COLUMNS, rows)


def _key(axes: Axes) -> None:
    y = 0.8
    axes.plot([LEFT, LEFT + 0.3], [y, y], color=style.FAINT_INK, lw=6.2, solid_capstyle="butt")
    axes.text(LEFT + 0.38, y, "direct, in the colour of its family", fontsize=7, va="center")
    axes.plot([LEFT + 2.35, LEFT + 2.65], [y, y], color=style.NAVY, lw=6.2, solid_capstyle="butt")
    axes.text(LEFT + 2.73, y, "everything else (thin: 95.0 %)", fontsize=7, va="center")
    axes.text(WIDTH - 0.3, y, "tension (bold: 2 or more)", fontsize=7, va="center", ha="right")


def _row(axes: Axes, pair: Pair, y: float) -> None:
    symbol = symbol_text(pair.latex, pair.name)
    unit = "" if pair.unit == "1" else f"  {pair.unit}"
    axes.text(0.28, y - 0.06, symbol, fontsize=9.5 * min(1.0, 20 / max(glyphs(symbol), 1)), va="center")
    axes.text(0.28, y + 0.14, pair.name + unit, fontsize=5.4, va="center", color=style.FAINT_INK)
    shown = [*pair.interval_68, *(end for end in pair.interval_95 if math.isfinite(end))]
    own: tuple[float, float] | None = None
    if pair.direct is not None and pair.direct_error is not None:
        own = (pair.direct - pair.direct_error[1], pair.direct + pair.direct_error[0])
        shown += own
    width = 2.5 * (pair.interval_68[1] - pair.interval_68[0])
    if own is not None:
        width = max(width, 2.5 * (own[1] - own[0]))
    if math.isfinite(width):  # a long tail of the 95 % interval must not squeeze the rest
        shown = [
            min(max(end, pair.value - width), pair.value + width) if end not in (own or ()) else end
            for end in shown
        ]
    scale = scale_for(shown, LEFT, RIGHT)
    draw_scale(axes, scale, y, below=0.16, unit=pair.unit)
    if own is not None and pair.direct is not None:
        bar(axes, scale, y - 0.085, own, None, pair.direct, pair.family.colour, f"direct:{pair.name}")
    bar(
        axes,
        scale,
        y + 0.06,
        pair.interval_68,
        pair.interval_95,
        pair.value,
        style.NAVY,
        f"indirect:{pair.name}",
    )
    if pair.tension is not None:
        axes.text(
            WIDTH - 0.3,
            y,
            style.sign(pair.tension),
            fontsize=9,
            ha="right",
            va="center",
            fontweight="bold" if abs(pair.tension) >= 2 else "normal",
        )
