"""Correlations between fitted parameters, as a triangle of signed bars.

A bar grows from the left edge of its cell, filled, for a positive coefficient, and from the right edge,
open, for a negative one; a full cell is 100 %. Length, side and filling say all; colour only helps. The
other triangle has the numbers.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from fitcore.figures import style

if TYPE_CHECKING:
    from fitcore.result import FitResult

CELL = 0.36
GAP = 0.06
#: More parameters than this are hard to read: the most correlated ones are drawn.
MOST = 32
#: Smaller coefficients get no number.
WORTH_A_NUMBER = 0.05
#: A shorter bar would be nothing but its edge, and look longer than it is.
WORTH_A_BAR = 0.02


def defined(result: FitResult) -> list[int]:
    """Return the positions of the parameters that have a coefficient with another one.

    Flat ranges and unconstrained parameters have none.
    """
    matrix = result.correlation_matrix
    free = [
        i
        for i, name in enumerate(result.correlation_names)
        if (one := result.parameters.get(name)) is None
        or (one.method != "range" and (one.error is not None or one.interval_68 is not None))
    ]
    return [i for i in free if any(_known(matrix[i][j]) for j in free if j != i)]


def _known(value: float | None) -> bool:
    return value is not None and math.isfinite(value)


def chosen(
    matrix: tuple[tuple[float, ...], ...], most: int = MOST, among: Sequence[int] | None = None
) -> list[int]:
    """Return the positions to draw, in order: all, or those with the largest coefficients."""
    pool = list(range(len(matrix)) if among is None else among)
    if len(pool) <= most:
        return pool
    largest = {
        i: max((abs(matrix[i][j]) for j in pool if j != i and _known(matrix[i][j])), default=0.0)
        for i in pool
    }
    return sorted(sorted(pool, key=lambda i: -largest[i])[:most])


def draw(result: FitResult, *, latex: Mapping[str, str] | None = None, footer: str = "") -> style.Drawing:
    """Draw the correlation matrix of a fit.

    Parameters
    ----------
    result : FitResult
        Its `correlation_names` and `correlation_matrix` are drawn. Undefined coefficients stay empty;
        parameters without any (flat ranges, unconstrained ones) are left out.
    latex : mapping, optional
        Parameter -> latex symbol.
    footer : str
        Says what the figure was made from.

    Returns
    -------
    Drawing
    """
    from matplotlib.patches import Rectangle

    latex = latex or {}
    names, matrix = result.correlation_names, result.correlation_matrix
    pool = defined(result)
    shown = chosen(matrix, among=pool)
    n = len(shown)
    side = n * CELL
    left, right, top, bottom = 3.0, 0.3, 1.0, 0.42
    width, height = max(left + side + right, 6.4), side + top + bottom
    with style.in_style():
        figure = style.new_figure(width, height)
        axes = figure.add_axes((0, 0, 1, 1))
        axes.set_axis_off()
        axes.set_xlim(-left, width - left)
        axes.set_ylim(side + bottom, -top)
        for row, i in enumerate(shown):
            y = row * CELL
            symbol = latex.get(names[i], "")
            if row % 2 == 0:
                axes.add_patch(
                    Rectangle((-left + 0.16, y), left - 0.16 + side, CELL, color="#f3f5f8", lw=0, zorder=0)
                )
            middle = y + CELL / 2
            axes.text(
                -left + 0.24, middle, names[i], fontsize=7.5, ha="left", va="center", color=style.FAINT_INK
            )
            style.draw_symbol(axes, -0.1, middle, symbol, "", size=9.5, room=0.9, align=1.0)
            diagonal = row * CELL + CELL / 2
            style.draw_symbol(axes, diagonal, middle, symbol, "", size=7.5, room=CELL - 0.04, align=0.5)
            for column, j in enumerate(shown):
                value = matrix[i][j]
                if column == row or not _known(value):
                    continue
                x = column * CELL + CELL / 2
                if column > row:
                    if abs(value) >= WORTH_A_NUMBER:
                        text = f"{100 * value:.0f}".replace("-", "\N{MINUS SIGN}")
                        shade = style.INK if abs(value) >= 0.3 else style.FAINT_INK
                        axes.text(x, middle, text, fontsize=6.5, ha="center", va="center", color=shade)
                    continue
                edge = CELL / 2 - GAP / 2
                axes.plot([x - edge, x + edge], [middle + 0.075] * 2, color=style.RULE, lw=0.6, zorder=1)
                if abs(value) < WORTH_A_BAR:
                    continue
                length = min(abs(value), 1.0) * 2 * edge
                positive = value > 0
                axes.add_patch(
                    Rectangle(
                        (x - edge if positive else x + edge - length, middle - 0.075),
                        length,
                        0.15,
                        facecolor=style.NAVY if positive else style.PAPER,
                        edgecolor=style.NAVY if positive else style.VERMILLION,
                        lw=0.9,
                        zorder=3,
                    )
                )
        axes.text(
            -left + 0.16, -top + 0.3, "Correlations of the fit", fontsize=13, fontweight="bold", va="center"
        )
        key = -top + 0.66
        x = -left + 0.16
        axes.add_patch(Rectangle((x, key - 0.06), 0.26, 0.12, facecolor=style.NAVY, lw=0))
        axes.text(x + 0.34, key, "positive, from the left", fontsize=7.5, va="center")
        axes.add_patch(
            Rectangle(
                (x + 1.75, key - 0.06), 0.26, 0.12, facecolor=style.PAPER, edgecolor=style.VERMILLION, lw=0.9
            )
        )
        axes.text(x + 2.09, key, "negative, from the right", fontsize=7.5, va="center")
        axes.text(x + 3.5, key, "full cell 100 %; numbers in %", fontsize=7.5, va="center")
        note = "" if n == len(pool) else f"  -  the {n} most correlated of {len(pool)} parameters"
        if len(pool) < len(names):
            note += (
                f"  -  {len(names) - len(pool)} without correlations (flat ranges or unconstrained) left out"
            )
        style.footer(figure, footer + note, left=0.16 / width, baseline=0.14 / height)
    rows = tuple(
        (names[i], names[j], matrix[i][j])
        for i in range(len(names))
        for j in range(i)
        if _known(matrix[i][j])
    )
    return style.Drawing(figure, ("parameter", "with", "correlation"), rows)
