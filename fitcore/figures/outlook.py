"""Before and after: today's interval of each quantity above the one expected with future uncertainties."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from fitcore.figures import style
from fitcore.figures.scales import bar, draw_scale, scale_for
from fitcore.figures.symbols import glyphs, symbol_text

__all__ = ["BeforeAfter", "draw"]

WIDTH = 8.2
ROW, TOP, BOTTOM = 0.6, 1.0, 0.48
LEFT, RIGHT = 2.15, 6.7
NOW = "#a3abb8"
COLUMNS = (
    *("quantity", "unit", "value", "now_low_68", "now_high_68", "now_low_95", "now_high_95"),
    *("future_low_68", "future_high_68", "future_low_95", "future_high_95", "narrower_by"),
)


@dataclass(frozen=True)
class BeforeAfter:
    """A quantity with its intervals now and in the future; `gain` is the ratio of the 68.27 % widths."""

    name: str
    latex: str
    unit: str
    value: float
    now_68: tuple[float, float]
    now_95: tuple[float, float]
    future_68: tuple[float, float]
    future_95: tuple[float, float]
    gain: float


def draw(rows: Sequence[BeforeAfter], *, title: str = "", footer: str = "") -> style.Drawing:
    """Draw intervals before and after, one row per quantity on its own scale.

    Parameters
    ----------
    rows : sequence of BeforeAfter
    title, footer : str

    Returns
    -------
    Drawing
    """
    height = TOP + BOTTOM + ROW * len(rows)
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
        axes.set_axis_off()
        axes.set_xlim(0, WIDTH)
        axes.set_ylim(height, 0)
        axes.text(0.2, 0.32, "Outlook", fontsize=13, fontweight="bold", va="center")
        axes.text(0.2, 0.56, title, fontsize=7.5, color=style.FAINT_INK, va="center")
        y = 0.8
        for x, colour, words in ((LEFT, NOW, "now"), (LEFT + 0.9, style.NAVY, "expected (thin: 95.0 %)")):
            axes.plot([x, x + 0.3], [y, y], color=colour, lw=6.2, solid_capstyle="butt")
            axes.text(x + 0.38, y, words, fontsize=7, va="center")
        axes.text(WIDTH - 0.3, y, "narrower by", fontsize=7, va="center", ha="right")
        for number, row in enumerate(rows):
            y = TOP + ROW * (number + 0.5)
            if number % 2 == 0:
                axes.fill_between(
                    [0.16, WIDTH - 0.16], y - ROW / 2, y + ROW / 2, color="#f5f6f8", lw=0, zorder=0
                )
            symbol = symbol_text(row.latex, row.name)
            unit = "" if row.unit == "1" else f"  {row.unit}"
            axes.text(
                0.28, y - 0.06, symbol, fontsize=10 * min(1.0, 20 / max(glyphs(symbol), 1)), va="center"
            )
            axes.text(0.28, y + 0.14, row.name + unit, fontsize=5.4, va="center", color=style.FAINT_INK)
            ends = (*row.now_68, *row.now_95, *row.future_68, *row.future_95)
            scale = scale_for([end for end in ends if math.isfinite(end)] or [row.value], LEFT, RIGHT)
            draw_scale(axes, scale, y, below=0.17, unit=row.unit)
            bar(axes, scale, y - 0.085, row.now_68, row.now_95, row.value, NOW, f"now:{row.name}")
            bar(
                axes,
                scale,
                y + 0.07,
                row.future_68,
                row.future_95,
                row.value,
                style.NAVY,
                f"future:{row.name}",
            )
            axes.text(
                WIDTH - 0.3, y, f"\N{MULTIPLICATION SIGN}{row.gain:.2f}", fontsize=9, ha="right", va="center"
            )
        style.footer(figure, footer, left=0.2 / WIDTH, baseline=0.13 / height)
        style.own_scales(figure, right=0.2 / WIDTH, baseline=0.13 / height)
    data = tuple(
        (
            *(row.name, row.unit, row.value),
            *(
                end if math.isfinite(end) else None
                for end in (*row.now_68, *row.now_95, *row.future_68, *row.future_95)
            ),
            row.gain,
        )
        for row in rows
    )
    return style.Drawing(figure, COLUMNS, data)
