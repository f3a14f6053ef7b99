"""Posteriors: one parameter at a time over credible-interval rails, a plane, and a triangle of planes."""

from __future__ import annotations

import math
import textwrap
import tomllib
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.outlines import contour_lines, draw_edge
from fitcore.figures.symbols import symbol_text
from fitcore.sampling.density import Credible, Density1D, Density2D, credible, density_1d, density_2d
from fitcore.sampling.diagnostics import effective_sample_size
from fitcore.sampling.summary import stored_bounds
from fitcore.sampling.thinned import ThinnedChain
from observables.errors import InputError, UnknownNameError

__all__ = ["densities", "plane", "triangle"]

LEVELS = (0.6827, 0.9545)
MOST_PANELS = 30
MOST_IN_TRIANGLE = 9
#: Inches between lines of small print, and a wide average of its letters.
LINE = 0.155
LETTER = 0.0575
#: Panels side by side, at most.
ACROSS = 4
FIT = style.VERMILLION
#: Line of the open bars by what the interval of the fit is.
METHODS = {"profile": "-", "linear": (0, (3, 1.5)), "range": (0, (1, 1.2))}
METHOD_WORDS = {
    "profile": "full outline: profile",
    "linear": "dashed: linear",
    "range": "dotted: allowed range",
}
POSTERIOR = style.NAVY
CREDIBLE = "fill: 68.27 % credible region, edge with ticks: 95.45 %, two parameters (highest density)"


class _Draws:
    """Samples of the wanted quantities, with what their axes need."""

    def __init__(self, chain: Any, names: Sequence[str], start: int) -> None:
        parameters = list(chain.parameter_names)
        derived = tuple(name for name in names if name not in parameters)
        known = parameters + list(chain.derived_names)
        for name in derived:
            if name not in known:
                raise UnknownNameError(name, "parameter or derived quantity", known)
        thinned = ThinnedChain.read(chain, start=start, derived=derived)
        self.names = list(names)
        self.bounds = stored_bounds(chain)
        self.columns: dict[str, np.ndarray] = {}
        self.effective: dict[str, float] = {}
        for name in names:
            if name in parameters:
                draws = thinned.samples[:, :, parameters.index(name)]
            else:
                draws = thinned.derived[name]
            if np.iscomplexobj(draws):
                raise InputError(f"{name}: is complex; draw a real quantity made from it")
            self.effective[name] = effective_sample_size(np.ascontiguousarray(draws.T))
            self.columns[name] = np.ascontiguousarray(draws).reshape(-1)
        header = chain.header
        self.latex = dict(zip(parameters, header.parameter_latex, strict=False))
        self.units = dict(zip(parameters, header.parameter_units, strict=False))
        for name in derived:
            self.units[name], self.latex[name] = chain.derived_label(name)
        parts = (_set_title(header), header.inputs_sha256[:8], header.hypothesis, f"{thinned.steps} steps")
        self.footer = " - ".join(part for part in parts if part)
        self._one: dict[str, tuple[Density1D, Credible]] = {}

    def limits(self, name: str) -> tuple[float, float]:
        """Where the density may end sharply."""
        return self.bounds.get(name, (-np.inf, np.inf))

    def label(self, name: str) -> str:
        """Symbol and unit of an axis."""
        unit = self.units.get(name, "1")
        symbol = symbol_text(self.latex.get(name, ""), name)
        return symbol if unit in ("", "1") else f"{symbol}  [{unit}]"

    def one(self, name: str) -> tuple[Density1D, Credible]:
        """Density of one of them, and its credible regions."""
        if name not in self._one:
            (lower, upper), size = self.limits(name), self.effective[name]
            density = density_1d(
                self.columns[name], lower=lower, upper=upper, effective=size if size > 1 else None
            )
            self._one[name] = density, credible(density, LEVELS)
        return self._one[name]

    def exceptions(self) -> str:
        """Say whose regions are equal-tailed."""
        names = [name for name in self.names if self.one(name)[1].kind != "highest-density"]
        return f"equal-tailed, as too flat for a highest density: {', '.join(names)}" if names else ""

    def plane(self, x: str, y: str) -> Density2D:
        """Density of two of them."""
        effective = min(self.effective[x], self.effective[y])
        return density_2d(
            self.columns[x],
            self.columns[y],
            bounds=(self.limits(x), self.limits(y)),
            effective=effective if effective > 1 else None,
        )


def densities(
    chain: Any,
    names: Sequence[str] | None = None,
    *,
    fit: Mapping[str, Any] | None = None,
    start: int = 0,
    footer: str = "",
) -> style.Drawing:
    """Draw the posterior of each quantity over rails of its credible intervals and those of a fit.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    names : sequence of str, optional
        Parameters and stored derived quantities, at most 30; default: the first parameters.
    fit : mapping of name -> Estimate, optional
        Estimates of a fit, drawn as a second rail whose outline tells the method of the interval.
    start : int
        First step used.
    footer : str

    Returns
    -------
    Drawing
        Its data are the densities.

    Raises
    ------
    UnknownNameError, InputError
        For names the chain does not hold, and complex quantities.
    """
    fit = fit or {}
    available = list(chain.parameter_names if names is None else names)
    names = available[:MOST_PANELS]
    draws = _Draws(chain, names, start)
    across = _panels_across(len(names))
    down = math.ceil(len(names) / across)
    panel_width, panel_height = 2.5, 1.95
    width = max(across * panel_width + 0.2, 7.2)
    words = "dark: 68.27 %, light: 95.45 % credible (highest density, one quantity)"
    lines = _wrapped(width, words, style.FAINT_INK) + _wrapped(width, draws.exceptions(), style.FAINT_INK)
    methods = {fit[name].method for name in names if name in fit and fit[name].interval_68 is not None}
    if methods:
        words = "open bars: the fit's intervals for one quantity, 68.27 % and 95.0 % - "
        words += ", ".join(text for method, text in METHOD_WORDS.items() if method in methods)
        lines += _wrapped(width, words, FIT)
    below = _wrapped(width, (footer or draws.footer) + _left_out(available, names), style.FAINT_INK)
    head, foot = 0.45 + LINE * len(lines), 0.17 + LINE * len(below)
    height = down * panel_height + head + foot
    rows: list[tuple[Any, ...]] = []
    with style.in_style():
        figure = style.new_figure(width, height)
        for number, name in enumerate(names):
            left = 0.2 + panel_width * (number % across)
            bottom = foot + panel_height * (down - 1 - number // across) + 0.45
            axes = figure.add_axes((left / width, bottom / height, 2.25 / width, 1.4 / height))
            curve = _panel(axes, draws, name, fit.get(name))
            axes.set_xlabel(draws.label(name), fontsize=9, labelpad=1.5)
            rows += [(name, float(x), float(p)) for x, p in zip(*curve, strict=True)]
        _title(figure, height, width, "Posterior densities")
        _subtitle(figure, height, width, lines)
        _footer(figure, height, width, below)
    return style.Drawing(figure, ("name", "value", "density"), tuple(rows))


def _panel(axes: Any, draws: _Draws, name: str, one: Any) -> tuple[np.ndarray, np.ndarray]:
    column = draws.columns[name]
    density, found = draws.one(name)
    x, p = density.grid, density.density / max(density.density.max(), 1e-300)
    low, high = np.quantile(column, [0.0005, 0.9995])
    ends = [e for e in (() if one is None else (*(one.interval_95 or ()),)) if e is not None]
    low, high = min([low, *ends]), max([high, *ends])
    margin = 0.04 * (high - low) or 1.0
    axes.set_xlim(low - margin, high + margin)
    rails = 2 if one is not None else 1
    axes.set_ylim(-0.17 * rails - 0.03, 1.06)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    axes.tick_params(labelsize=7, length=2.5)
    axes.locator_params(axis="x", nbins=4)
    for shade, level in ((0.25, LEVELS[1]), (0.6, LEVELS[0])):
        for region in found.regions[level]:
            inside = (x >= region[0]) & (x <= region[1])
            axes.fill_between(x[inside], 0, p[inside], color=style.tint(POSTERIOR, shade), lw=0, zorder=1)
    axes.plot(x, p, color=POSTERIOR, lw=1.4, zorder=3, gid=f"density:{name}")
    for shade, thick, level in ((0.45, 3.0, LEVELS[1]), (1.0, 5.5, LEVELS[0])):
        for region in found.regions[level]:
            axes.plot(
                region,
                [-0.1, -0.1],
                color=style.tint(POSTERIOR, shade),
                lw=thick,
                solid_capstyle="butt",
                gid=f"credible:{name}:{level}",
            )
    if one is not None:
        for tall, ends_of in ((0.05, one.interval_95), (0.09, one.interval_68)):
            if ends_of is not None and None not in ends_of:
                a, b = ends_of
                axes.fill(
                    [a, b, b, a],
                    [-0.27 - tall / 2, -0.27 - tall / 2, -0.27 + tall / 2, -0.27 + tall / 2],
                    facecolor=style.PAPER,
                    edgecolor=FIT,
                    lw=0.9,
                    ls=METHODS.get(one.method, "-"),
                    gid=f"fit:{name}:{one.method}",
                )
        axes.plot([one.value], [-0.27], "o", ms=3.2, mfc="white", mec=FIT, mew=0.9, zorder=5)
    inside = (x >= low - margin) & (x <= high + margin)
    step = max(1, inside.sum() // 200)
    return x[inside][::step], density.density[inside][::step]


def plane(
    chain: Any,
    x: str,
    y: str,
    *,
    profile: Sequence[tuple[str, Sequence[np.ndarray]]] = (),
    start: int = 0,
    footer: str = "",
) -> style.Drawing:
    """Draw the credible regions of two quantities, with profile contours on top where given.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    x, y : str
    profile : sequence of (words, lines)
        Contours of a profile, each a list of lines (k, 2), and what they are ("68.27 %, two parameters").
    start : int
    footer : str

    Returns
    -------
    Drawing
        Its data are the contours.
    """
    draws = _Draws(chain, [x, y], start)
    width, height = 6.4, 5.6
    with style.in_style():
        figure = style.new_figure(width, height)
        axes = figure.add_axes((0.85 / width, 0.85 / height, 5.3 / width, 3.85 / height))
        axes.spines[["top", "right"]].set_visible(True)
        _frame(axes, draws, x, y, [line for _, lines in profile for line in lines])
        found = _credible(axes, draws, x, y)
        axes.set_xlabel(draws.label(x), fontsize=11)
        axes.set_ylabel(draws.label(y), fontsize=11)
        for number, (words, lines) in enumerate(profile):
            for line in lines:
                axes.plot(*np.asarray(line).T, color=FIT, lw=1.2, ls=("-", (0, (4, 2)))[number % 2], zorder=6)
                found.append((f"profile {words}", np.asarray(line)))
        _title(figure, height, width, "Posterior regions")
        _subtitle(figure, height, width, [(CREDIBLE, style.FAINT_INK)])
        if profile:
            listed = "; ".join(
                f"{('full', 'dashed')[number % 2]} line {words}" for number, (words, _) in enumerate(profile)
            )
            figure.text(
                0.2 / width,
                1 - 0.75 / height,
                f"profile likelihood: {listed}",
                fontsize=7,
                color=FIT,
                va="center",
            )
        style.footer(figure, footer or draws.footer, left=0.2 / width, baseline=0.12 / height)
    rows = tuple(
        (words, number, float(a), float(b)) for number, (words, line) in enumerate(found) for a, b in line
    )
    return style.Drawing(figure, ("region", "line", x, y), rows)


def triangle(
    chain: Any, names: Sequence[str] | None = None, *, start: int = 0, footer: str = ""
) -> style.Drawing:
    """Draw the credible regions of all pairs of a few quantities.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    names : sequence of str, optional
        At most 9 are drawn, and the footer says which are not; default: the first parameters.
    start : int
    footer : str

    Returns
    -------
    Drawing
        Its data are the contours.
    """
    available = list(chain.parameter_names if names is None else names)
    names = available[:MOST_IN_TRIANGLE]
    draws = _Draws(chain, names, start)
    n, cell = len(names), 1.25
    left = 0.85
    width = max(left + n * cell + 0.2, 5.6)
    lines = _wrapped(width, CREDIBLE, style.FAINT_INK) + _wrapped(width, draws.exceptions(), style.FAINT_INK)
    below = _wrapped(width, (footer or draws.footer) + _left_out(available, names), style.FAINT_INK)
    bottom, head = 0.67 + LINE * len(below), 0.55 + LINE * len(lines)
    height = bottom + n * cell + head
    left += max(0.0, 0.5 * (width - left - n * cell - 0.2))
    rows: list[tuple[Any, ...]] = []
    with style.in_style():
        figure = style.new_figure(width, height)
        limits = {}
        for name in names:
            low, high = np.quantile(draws.columns[name], [0.0005, 0.9995])
            margin = 0.08 * (high - low) or 1.0
            limits[name] = (low - margin, high + margin)
        for i, y in enumerate(names):
            for j, x in enumerate(names[: i + 1]):
                at = (left + j * cell, bottom + (n - 1 - i) * cell)
                axes = figure.add_axes(
                    (at[0] / width, at[1] / height, (cell - 0.08) / width, (cell - 0.08) / height)
                )
                axes.set_xlim(*limits[x])
                if i == j:
                    _diagonal(axes, draws, x)
                else:
                    axes.set_ylim(*limits[y])
                    found = _credible(axes, draws, x, y, ticks=2.2)
                    rows += [(x, y, words, float(a), float(b)) for words, line in found for a, b in line]
                axes.locator_params(nbins=3)
                axes.tick_params(labelsize=6, length=2, labelbottom=i == n - 1, labelleft=j == 0 and i > 0)
                for tick in axes.get_xticklabels():
                    tick.set_rotation(40)
                if i == n - 1:
                    axes.set_xlabel(draws.label(x), fontsize=8)
                if j == 0 and i > 0:
                    axes.set_ylabel(draws.label(y), fontsize=8)
        figure.align_labels()
        _title(figure, height, width, "Posterior of pairs")
        _subtitle(figure, height, width, lines)
        _footer(figure, height, width, below)
    return style.Drawing(figure, ("x", "y", "region", "x_value", "y_value"), tuple(rows))


def _diagonal(axes: Any, draws: _Draws, name: str) -> None:
    density, found = draws.one(name)
    top = max(density.density.max(), 1e-300)
    axes.set_ylim(0, 1.08)
    axes.set_yticks([])
    axes.spines["left"].set_visible(False)
    for region in found.regions[LEVELS[0]]:
        inside = (density.grid >= region[0]) & (density.grid <= region[1])
        axes.fill_between(
            density.grid[inside], 0, density.density[inside] / top, color=style.tint(POSTERIOR, 0.35), lw=0
        )
    axes.plot(density.grid, density.density / top, color=POSTERIOR, lw=1.2)


def _credible(
    axes: Any, draws: _Draws, x: str, y: str, *, ticks: float = 3.5
) -> list[tuple[str, np.ndarray]]:
    """Draw the two regions and return their edges."""
    density = draws.plane(x, y)
    top = density.density.max()
    # The edge tools want a surface that is low inside, as Delta chi-square is.
    with np.errstate(divide="ignore"):
        depth = np.minimum(-2.0 * np.log(density.density.T / top), 60.0)
    levels = [max(-2.0 * math.log(density.level(cl) / top), 1e-3) for cl in LEVELS]
    axes.contourf(
        density.x, density.y, depth.T, levels=[-1.0, levels[0]], colors=[style.tint(POSTERIOR, 0.45)]
    )
    found: list[tuple[str, np.ndarray]] = []
    for cl, level in zip(LEVELS, levels, strict=True):
        lines = contour_lines(density.x, density.y, depth, level)
        found += [(f"{100 * cl:.2f} %", line) for line in lines]
    edges = [line for words, line in found if words.startswith("95")]
    draw_edge(axes, edges, (density.x, density.y, depth), POSTERIOR, ticks=ticks, label=f"credible:{x}:{y}")
    return found


def _frame(axes: Any, draws: _Draws, x: str, y: str, lines: Sequence[np.ndarray]) -> None:
    """Set limits that hold the draws and the lines."""
    for number, (name, limit) in enumerate(((x, axes.set_xlim), (y, axes.set_ylim))):
        low, high = np.quantile(draws.columns[name], [0.0005, 0.9995])
        for line in lines:
            column = np.asarray(line)[:, number]
            low, high = min(low, column.min()), max(high, column.max())
        margin = 0.08 * (high - low) or 1.0
        limit(low - margin, high + margin)


def _panels_across(count: int) -> int:
    """Number of panels in a row: as few empty places as possible, then as many across as possible."""
    if count <= ACROSS:
        return count
    return min((ACROSS, ACROSS - 1), key=lambda across: (-count % across, -across))


def _set_title(header: Any) -> str:
    """Title of the inputs that a chain was sampled from; empty where its header holds none."""
    try:
        return str(tomllib.loads(header.inputs_toml).get("title", ""))
    except tomllib.TOMLDecodeError:
        return ""


def _left_out(available: Sequence[str], drawn: Sequence[str]) -> str:
    """Say what had no room."""
    missing = list(available)[len(drawn) :]
    if not missing:
        return ""
    return f" - {len(drawn)} of {len(available)} quantities drawn; not drawn: {', '.join(missing)}"


def _wrapped(width: float, words: str, colour: str) -> list[tuple[str, str]]:
    """Lines of small print that fit into a figure of this width, with their colour."""
    return [(line, colour) for line in textwrap.wrap(words, int((width - 0.4) / LETTER))]


def _subtitle(figure: Any, height: float, width: float, lines: Sequence[tuple[str, str]]) -> None:
    for number, (words, colour) in enumerate(lines):
        y = 1 - (0.57 + LINE * number) / height
        figure.text(0.2 / width, y, words, fontsize=7, color=colour, va="center")


def _footer(figure: Any, height: float, width: float, lines: Sequence[tuple[str, str]]) -> None:
    for number, (words, _) in enumerate(reversed(lines)):
        style.footer(figure, words, left=0.2 / width, baseline=(0.1 + LINE * number) / height)


def _title(figure: Any, height: float, width: float, words: str) -> None:
    figure.text(0.2 / width, 1 - 0.33 / height, words, fontsize=13, fontweight="bold", va="center")
