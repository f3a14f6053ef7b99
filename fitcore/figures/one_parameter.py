"""One quantity: Delta chi-square curves over an interval rail."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.symbols import symbol_text

__all__ = ["Curve", "draw"]

WIDTH = 7.4
LEFT, RIGHT, BOX, ROW = 0.85, 1.15, 2.9, 0.34
COLOURS = (style.NAVY, style.VERMILLION, style.SKY_BLUE)
LINE_STYLES: tuple[Any, ...] = ("-", (0, (5, 1.8)), (0, (1.3, 1.2)))


@dataclass(frozen=True)
class Curve:
    """A profile.

    Attributes
    ----------
    label : str
        Empty for the only curve of a figure.
    x, delta : ndarray
        Values of the quantity, and chi-square above its lowest value.
    intervals : tuple, one per level, of tuples of (low, high, low_open, high_open)
    best : float
        Where the curve is lowest.
    """

    label: str
    x: np.ndarray
    delta: np.ndarray
    intervals: tuple[tuple[tuple[float, float, bool, bool], ...], ...]
    best: float


def draw(
    name: str,
    curves: Sequence[Curve],
    *,
    levels: Sequence[tuple[str, float]],
    latex: str = "",
    unit: str = "1",
    title: str = "",
    footer: str = "",
) -> style.Drawing:
    """Draw profiles of one quantity.

    Parameters
    ----------
    name : str
    curves : sequence of Curve
    levels : sequence of (str, float)
        Words such as ``"68.3 %"`` and Delta chi-square, lowest first.
    latex, unit, title, footer : str

    Returns
    -------
    Drawing
    """
    bottom = 0.82
    rail = ROW * len(curves) + 0.12
    total = bottom + rail + 0.08 + BOX + 0.78
    symbol = symbol_text(latex, name)
    with style.in_style():
        figure = style.new_figure(WIDTH, total)
        width = WIDTH - LEFT - RIGHT
        lower = figure.add_axes((LEFT / WIDTH, bottom / total, width / WIDTH, rail / total))
        upper = figure.add_axes((LEFT / WIDTH, (bottom + rail + 0.08) / total, width / WIDTH, BOX / total))
        low, high = min(float(c.x[0]) for c in curves), max(float(c.x[-1]) for c in curves)
        top = 1.55 * max(level for _, level in levels)
        upper.set_xlim(low, high)
        upper.set_ylim(0.0, top)
        upper.set_ylabel(r"$\Delta\chi^2$", fontsize=11)
        upper.tick_params(labelbottom=False, length=3)
        for words, level in levels:
            upper.plot([low, high], [level, level], color=style.RULE, lw=1.0, zorder=0)
            upper.text(high, level, f"  {words}", fontsize=7.5, va="center", color=style.FAINT_INK)
        for number, curve in enumerate(curves):
            colour, dashes = COLOURS[number % 3], LINE_STYLES[number % 3]
            delta = np.where(np.isfinite(curve.delta), np.minimum(curve.delta, 10 * top), 10 * top)
            if len(curves) == 1:
                inside = np.minimum(delta, levels[0][1])
                upper.fill_between(
                    curve.x, inside, levels[0][1], color=style.tint(colour, 0.16), lw=0, zorder=1
                )
            upper.plot(curve.x, delta, color=colour, lw=1.9, ls=dashes, zorder=3, gid=f"curve:{curve.label}")
        _rail(lower, curves, levels, (low, high))
        unit_text = "" if unit == "1" else f"  [{unit}]"
        lower.set_xlabel(symbol + unit_text, fontsize=11)
        figure.text(
            0.2 / WIDTH, 1 - 0.33 / total, f"Profile of {symbol}", fontsize=13, fontweight="bold", va="center"
        )
        figure.text(0.2 / WIDTH, 1 - 0.57 / total, title, fontsize=7.5, color=style.FAINT_INK, va="center")
        words = ", ".join(f"{text} at {level:.4g}" for text, level in levels)
        figure.text(
            1 - 0.2 / WIDTH,
            1 - 0.33 / total,
            f"intervals for one quantity: {words}",
            fontsize=7.5,
            va="center",
            ha="right",
            color=style.FAINT_INK,
        )
        style.footer(figure, footer, left=0.2 / WIDTH, baseline=0.14 / total)
    columns = ("curve", name, "delta_chi2")
    rows = tuple(
        (curve.label or "profile", float(x), float(d) if np.isfinite(d) else None)
        for curve in curves
        for x, d in zip(curve.x, curve.delta, strict=True)
    )
    return style.Drawing(figure, columns, rows)


def _rail(
    axes: Any, curves: Sequence[Curve], levels: Sequence[tuple[str, float]], limits: tuple[float, float]
) -> None:
    axes.set_xlim(*limits)
    axes.set_ylim(len(curves) - 0.5 + 0.12, -0.5 - 0.06)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    for number, curve in enumerate(curves):
        colour = COLOURS[number % 3]
        axes.plot(limits, [number, number], color=style.RULE, lw=0.8, zorder=0)
        for depth in range(len(levels) - 1, -1, -1):
            width = 7.5 - 2.8 * depth if depth < 2 else 1.2
            shade = style.tint(colour, 1.0 if depth == 0 else 0.55)
            for low, high, low_open, high_open in curve.intervals[depth]:
                axes.plot(
                    [low, high],
                    [number, number],
                    color=shade,
                    lw=width,
                    solid_capstyle="butt",
                    zorder=3 - depth,
                    gid=f"interval:{curve.label}:{depth}",
                )
                for end, cut, marker in ((low, low_open, "<"), (high, high_open, ">")):
                    if cut:  # the interval goes on, or ends only because the quantity does
                        axes.plot([end], [number], marker=marker, ms=5, color=shade, zorder=3, clip_on=False)
        axes.plot([curve.best], [number], "o", ms=4.2, mfc="white", mec=colour, mew=1.1, zorder=5)
        if curve.label:
            axes.text(limits[1], number, f"  {curve.label}", fontsize=7.5, va="center", color=colour)
