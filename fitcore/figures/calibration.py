"""Calibration figures: the chi-square of pseudo-experiments, thresholds needed against assumed, and coverage."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.symbols import symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from fitcore.studies.calibration_result import CalibratedRegion, CalibrationResult

WIDTH = 7.2
LEFT, RIGHT = 0.85, 0.62
SHADES = (1.0, 0.62, 0.42)
DASHES: tuple[Any, ...] = ("-", (0, (5, 1.6)), (0, (1.2, 1.3)))


def draw_goodness(result: CalibrationResult, *, footer: str = "") -> style.Drawing:
    """Draw the chi-square of the pseudo-experiments with that of the data.

    Parameters
    ----------
    result : CalibrationResult
        With a goodness of fit.
    footer : str
        Says what the figure was made from.
    """
    height = 4.3
    found = result.goodness
    if found is None:
        raise ValueError("the result has no calibrated goodness of fit")
    finite = result.toy_chi2[np.isfinite(result.toy_chi2)]
    edges = np.linspace(0.0, 1.06 * max(float(finite.max(initial=1.0)), result.chi2), _bins(finite.size) + 1)
    counts, _ = np.histogram(finite, edges)
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = _axes(figure, height, bottom=0.95, top=0.95)
        axes.stairs(counts, edges, fill=True, color=style.tint(style.SKY_BLUE, 0.35), zorder=1)
        tail_edges = np.concatenate([[result.chi2], edges[edges > result.chi2]])
        if tail_edges.size > 1:
            axes.stairs(
                counts[edges[1:] > result.chi2], tail_edges, fill=True, color=style.SKY_BLUE, zorder=2
            )
        axes.stairs(counts, edges, color=style.NAVY, lw=0.8, zorder=3)
        expected = None
        if result.asymptotic is not None:
            expected = _expected(edges, result.degrees_of_freedom, finite.size)
            fine = np.linspace(0.0, edges[-1] - edges[1], 300)
            smooth = _expected(np.stack([fine, fine + edges[1]]), result.degrees_of_freedom, finite.size)[0]
            axes.plot(fine + 0.5 * edges[1], smooth, color=style.VERMILLION, lw=1.4, ls=DASHES[1], zorder=4)
        top = 1.12 * max(float(counts.max(initial=1)), 0.0 if expected is None else float(expected.max()))
        axes.plot([result.chi2] * 2, [0.0, 0.93 * top], color=style.INK, lw=1.6, zorder=5)
        right = result.chi2 > 0.6 * edges[-1]
        axes.annotate(
            rf"data: $\chi^2$ = {result.chi2:.2f}",
            (result.chi2, 0.93 * top),
            xytext=(-6 if right else 6, 0),
            textcoords="offset points",
            ha="right" if right else "left",
            va="top",
            fontsize=9,
        )
        axes.set_xlim(0.0, edges[-1])
        axes.set_ylim(0.0, top)
        axes.set_xlabel(r"minimum $\chi^2$ of a pseudo-experiment", fontsize=10)
        axes.set_ylabel(f"pseudo-experiments per {edges[1]:.2g}", fontsize=10)
        _title(figure, height, "Goodness of fit, calibrated", _goodness_words(result))
        legend: list[tuple[str, Any, str]] = [
            ("all pseudo-experiments, refitted", style.tint(style.SKY_BLUE, 0.35), "fill")
        ]
        legend.append(("at least as far off as the data", style.SKY_BLUE, "fill"))
        if expected is not None:
            text = rf"$\chi^2$, {result.degrees_of_freedom} degrees of freedom"
            legend.append((text, style.VERMILLION, "dashes"))
        _legend(figure, height, legend)
        style.footer(figure, footer, left=0.16 / WIDTH, baseline=0.14 / height)
    rows = tuple(
        (float(low), float(high), int(count), None if expected is None else float(expected[k]))
        for k, (low, high, count) in enumerate(zip(edges[:-1], edges[1:], counts, strict=True))
    )
    return style.Drawing(figure, ("chi2_low", "chi2_high", "pseudo_experiments", "expected"), rows)


def _goodness_words(result: CalibrationResult) -> str:
    found = result.goodness
    assert found is not None  # checked by the caller
    words = f"p = {found.value:.3g} ± {found.error:.1g} from {found.toys:,} pseudo-experiments"
    if result.asymptotic is not None:
        words += f", {result.asymptotic:.3g} asymptotically"
    return words + (f"; {found.failed} did not converge" if found.failed else "")


def _bins(count: int) -> int:
    return int(np.clip(round(2.0 * count ** (1.0 / 3.0)), 8, 60))


def _expected(edges: np.ndarray, degrees: int, count: int) -> np.ndarray:
    from scipy.special import chdtr

    return np.asarray(count * np.diff(chdtr(degrees, edges), axis=0))


def draw_thresholds(
    region: CalibratedRegion, *, latex: dict[str, str] | None = None, footer: str = ""
) -> style.Drawing:
    """Draw the threshold needed against the threshold assumed: along one quantity, or in the plane of two.

    Parameters
    ----------
    region : CalibratedRegion
    latex : dict, optional
        Symbols by name.
    footer : str
    """
    draw = _draw_line if len(region.names) == 1 else _draw_plane
    with style.in_style():
        return draw(region, latex or {}, footer)


def _draw_line(region: CalibratedRegion, latex: dict[str, str], footer: str) -> style.Drawing:
    levels = len(region.cl)
    rail = 0.36 * levels + 0.1
    bottom, top, box = 0.95, 1.0, 2.9
    height = bottom + rail + 0.12 + box + top
    figure = style.new_figure(WIDTH, height)
    axes = figure.add_axes(
        (LEFT / WIDTH, (bottom + rail + 0.12) / height, 1 - (LEFT + RIGHT) / WIDTH, box / height)
    )
    x, nodes = region.fine_grids[0], region.grids[0]
    span = (float(x[0]), float(x[-1]))
    shown = region.needed_high[np.isfinite(region.needed_high)]
    ceiling = 1.25 * max(float(region.assumed.max()), float(shown.max(initial=0.0)))
    for c, level in reversed(list(enumerate(region.cl))):
        colour = style.tint(style.VERMILLION, SHADES[c % len(SHADES)])
        low, high = region.needed_low[c], np.minimum(region.needed_high[c], 2.0 * ceiling)
        good = np.isfinite(region.needed[c])
        axes.fill_between(
            nodes[good], low[good], high[good], color=style.tint(style.VERMILLION, 0.2), lw=0, zorder=1
        )
        axes.plot(nodes[good], region.needed[c][good], color=colour, lw=1.5, marker="o", ms=3.4, mec=style.PAPER,
                  mew=0.6, zorder=4)  # fmt: skip
        axes.plot(span, [region.assumed[c]] * 2, color=style.FAINT_INK, lw=1.1, ls=DASHES[1], zorder=3)
        axes.annotate(
            f"{_percent(level)} %",
            (span[1], region.assumed[c]),
            xytext=(5, 0),
            textcoords="offset points",
            ha="left",
            va="center",
            fontsize=7.5,
            color=style.FAINT_INK,
            annotation_clip=False,
        )
    with np.errstate(invalid="ignore"):
        curve = np.where(np.isfinite(region.delta_chi2), region.delta_chi2, np.nan)
    axes.plot(x, curve, color=style.PAPER, lw=3.4, zorder=4.5)
    axes.plot(x, curve, color=style.NAVY, lw=1.8, zorder=5)
    axes.set_xlim(*span)
    axes.set_ylim(0.0, ceiling)
    axes.set_ylabel(r"$\Delta\chi^2$", fontsize=11)
    axes.tick_params(labelbottom=False)
    _rails(figure, height, bottom, rail, region, span, _label(region, 0, latex))
    ratio = region.needed[0][np.isfinite(region.needed[0])] / region.assumed[0]
    text = "one quantity"
    if ratio.size:
        text += f"; needed / assumed {ratio.min():.2f} to {ratio.max():.2f} at {_percent(region.cl[0])} %"
    _title(figure, height, "Threshold needed against threshold assumed", text)
    _legend(
        figure,
        height,
        [
            ("data", style.NAVY, "line"),
            ("needed, with statistical band", style.VERMILLION, "line"),
            ("assumed (large samples)", style.FAINT_INK, "dashes"),
        ],
    )
    style.footer(figure, footer, left=0.16 / WIDTH, baseline=0.14 / height)
    rows = tuple(
        (level, float(value), float(region.assumed[c]), *(float(part[c][k]) for part in _bands(region)))
        for c, level in enumerate(region.cl)
        for k, value in enumerate(nodes)
    )
    columns = ("cl", region.names[0], "threshold_assumed", "threshold_needed", "needed_low", "needed_high")
    return style.Drawing(figure, columns, rows)


def _bands(region: CalibratedRegion) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    return region.needed, region.needed_low, region.needed_high


def _rails(
    figure: Figure,
    height: float,
    bottom: float,
    rail: float,
    region: CalibratedRegion,
    span: tuple[float, float],
    label: str,
) -> None:
    """Intervals beneath the curves: calibrated solid, asymptotic hollow."""
    axes = figure.add_axes((LEFT / WIDTH, bottom / height, 1 - (LEFT + RIGHT) / WIDTH, rail / height))
    axes.set_xlim(*span)
    axes.set_ylim(len(region.cl) - 0.4, -0.6)
    axes.set_yticks(range(len(region.cl)), [f"{_percent(level)} %" for level in region.cl], fontsize=7.5)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    for c in range(len(region.cl)):
        axes.axhline(c, color=style.RULE, lw=0.7, zorder=0)
        for low, high, *_ in region.calibrated[c]:
            axes.plot(
                [low, high], [c - 0.14] * 2, color=style.VERMILLION, lw=4.2, solid_capstyle="butt", zorder=2
            )
        for low, high, *_ in region.asymptotic[c]:
            axes.plot([low, high], [c + 0.2] * 2, color=style.FAINT_INK, lw=1.6, ls=DASHES[1], zorder=2)
    axes.set_xlabel(label, fontsize=11)


def _draw_plane(region: CalibratedRegion, latex: dict[str, str], footer: str) -> style.Drawing:
    height, bottom, top = 6.4, 0.95, 1.0
    figure = style.new_figure(WIDTH, height)
    axes = figure.add_axes(
        (LEFT / WIDTH, bottom / height, 1 - (LEFT + 1.25) / WIDTH, 1 - (bottom + top) / height)
    )
    x, y = np.meshgrid(*region.grids, indexing="ij")
    ratio = region.needed[0] / region.assumed[0]
    reach = max(0.1, float(np.nanmax(np.abs(np.where(np.isfinite(ratio), ratio, 1.0) - 1.0))))
    shades = axes.pcolormesh(
        x, y, np.where(np.isfinite(ratio), ratio, np.nan), cmap="PuOr_r", vmin=1 - reach, vmax=1 + reach,
        shading="nearest", alpha=0.35, rasterized=True, zorder=0,
    )  # fmt: skip
    side = figure.add_axes((1 - 1.12 / WIDTH, bottom / height, 0.2 / WIDTH, 1 - (bottom + top) / height))
    bar = figure.colorbar(shades, cax=side, format="%.3g")
    bar.outline.set_visible(False)
    bar.set_label(f"threshold needed / assumed, {_percent(region.cl[0])} %", fontsize=8)
    for c in range(len(region.cl)):
        for line in region.asymptotic[c]:
            axes.plot(*line.T, color=style.INK, lw=1.1, ls=DASHES[1], zorder=3)
        for line in region.calibrated[c]:
            axes.plot(*line.T, color=style.PAPER, lw=3.4, zorder=3.5)
            axes.plot(*line.T, color=style.NAVY, lw=1.9, zorder=4)
    axes.set_xlim(*region.grids[0][[0, -1]])
    axes.set_ylim(*region.grids[1][[0, -1]])
    axes.set_xlabel(_label(region, 0, latex), fontsize=11)
    axes.set_ylabel(_label(region, 1, latex), fontsize=11)
    levels = ", ".join(f"{_percent(level)} %" for level in region.cl)
    _title(
        figure,
        height,
        "Calibrated region",
        f"{levels} regions, two parameters" if len(region.cl) > 1 else f"{levels} region, two parameters",
    )
    _legend(
        figure, height, [("calibrated", style.NAVY, "line"), ("assumed (large samples)", style.INK, "dashes")]
    )
    style.footer(figure, footer, left=0.16 / WIDTH, baseline=0.14 / height)
    rows = tuple(
        (
            level,
            float(x[index]),
            float(y[index]),
            float(region.assumed[c]),
            *(float(p[c][index]) for p in _bands(region)),
        )
        for c, level in enumerate(region.cl)
        for index in np.ndindex(x.shape)
    )
    columns = ("cl", *region.names, "threshold_assumed", "threshold_needed", "needed_low", "needed_high")
    return style.Drawing(figure, columns, rows)


def draw_coverage(
    result: CalibrationResult, *, latex: dict[str, str] | None = None, footer: str = ""
) -> style.Drawing:
    """Draw how often intervals hold the truth, one row per quantity and level.

    Parameters
    ----------
    result : CalibrationResult
        With coverage rows.
    latex : dict, optional
    footer : str
    """
    latex = latex or {}
    levels = list(dict.fromkeys(row.cl for row in result.coverage))
    names = list(dict.fromkeys(row.name for row in result.coverage))
    bottom, top, line = 0.95, 0.95, 0.27
    height = bottom + top + line * len(names) + 0.2
    with style.in_style():
        figure = style.new_figure(WIDTH, height)
        axes = figure.add_axes(
            (2.0 / WIDTH, bottom / height, 1 - (2.0 + RIGHT) / WIDTH, 1 - (bottom + top) / height)
        )
        for c, level in enumerate(levels):
            rows = [row for row in result.coverage if row.cl == level]
            nominal = _nominal(level)
            spread = math.sqrt(nominal * (1 - nominal) / rows[0].toys)
            axes.axvspan(
                nominal - 2 * spread,
                nominal + 2 * spread,
                color=style.tint(style.SKY_BLUE, 0.16),
                lw=0,
                zorder=0,
            )
            axes.axvline(nominal, color=style.FAINT_INK, lw=1.0, ls=DASHES[1], zorder=1)
            colour = style.tint(style.NAVY, SHADES[c % len(SHADES)])
            for row in rows:
                place = names.index(row.name)
                axes.plot(row.interval, [place] * 2, color=colour, lw=1.8, zorder=3)
                axes.plot(
                    [row.coverage], [place], "o", ms=5.0, mfc=colour, mec=style.PAPER, mew=0.8, zorder=4
                )
        axes.set_yticks(
            range(len(names)), [symbol_text(latex.get(name, ""), name) for name in names], fontsize=8.5
        )
        axes.tick_params(axis="y", length=0)
        axes.spines["left"].set_visible(False)
        axes.set_ylim(len(names) - 0.4, -0.6)
        axes.set_xlabel("fraction of intervals that hold the truth", fontsize=10)
        words = ", ".join(f"{_percent(level)} %" for level in levels)
        _title(
            figure, height, "Coverage", f"{words} intervals of {result.toys:,} refitted pseudo-experiments"
        )
        _legend(
            figure,
            height,
            [
                ("found, 68.3 % interval", style.NAVY, "line"),
                ("nominal, ± 2 statistical errors", style.FAINT_INK, "dashes"),
            ],
        )
        style.footer(figure, footer, left=0.16 / WIDTH, baseline=0.14 / height)
    data = tuple(
        (row.name, row.cl, row.coverage, *row.interval, row.toys, row.pull_mean, row.pull_width)
        for row in result.coverage
    )
    columns = (
        "name",
        "cl",
        "coverage",
        "coverage_low",
        "coverage_high",
        "pseudo_experiments",
        "pull_mean",
        "pull_width",
    )
    return style.Drawing(figure, columns, data)


# -- parts ------------------------------------------------------------------------------------------------------------


def _axes(figure: Figure, height: float, *, bottom: float, top: float) -> Axes:
    return figure.add_axes(
        (LEFT / WIDTH, bottom / height, 1 - (LEFT + RIGHT) / WIDTH, 1 - (bottom + top) / height)
    )


def _label(region: CalibratedRegion, which: int, latex: dict[str, str]) -> str:
    name, unit = region.names[which], region.units[which]
    return symbol_text(latex.get(name, ""), name) + ("" if unit == "1" else f"  [{unit}]")


def _nominal(level: float) -> float:
    from fitcore.minimise.profile import threshold

    return math.erf(math.sqrt(0.5 * threshold(level, 1)))


def _percent(level: float) -> str:
    return f"{100 * level:.4g}"


def _title(figure: Figure, height: float, title: str, words: str) -> None:
    figure.text(0.16 / WIDTH, 1 - 0.28 / height, title, fontsize=12.5, fontweight="bold", va="center")
    figure.text(
        0.16 / WIDTH,
        1 - 0.53 / height,
        words.replace("-", "\N{HYPHEN-MINUS}"),
        fontsize=8,
        va="center",
        color=style.FAINT_INK,
    )


def _legend(figure: Figure, height: float, entries: list[tuple[str, Any, str]]) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Rectangle

    y, x = 1 - 0.78 / height, 0.16
    for words, colour, kind in entries:
        if kind == "fill":
            figure.add_artist(
                Rectangle((x / WIDTH, y - 0.05 / height), 0.26 / WIDTH, 0.1 / height, color=colour, lw=0)
            )
        else:
            dashes = DASHES[1] if kind == "dashes" else "-"
            figure.add_artist(
                Line2D([x / WIDTH, (x + 0.28) / WIDTH], [y, y], color=colour, lw=1.6, ls=dashes)
            )
        figure.text((x + 0.35) / WIDTH, y, words, fontsize=7.5, va="center")
        x += 0.35 + 0.053 * len(words.replace(r"$\chi^2$", "x2")) + 0.3
