"""Smooth densities of samples in one and two dimensions, and the credible regions they give."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

__all__ = [
    "Credible",
    "Density1D",
    "Density2D",
    "credible",
    "density_1d",
    "density_2d",
    "highest_density",
    "shortest_interval",
]

_GRID = 2048
_ORDER_FACTOR = 1.6
#: A density is flat when it varies by less than this many of its sampling errors over its middle 68.27 %:
#: largest and smallest of some ten independent values lie about 3 errors apart, 6 hardly ever.
FLAT_ERRORS = 6.0
#: ... or by less than this share of its height (a Gaussian: 0.4): there the region of highest density is about
#: 2 % shorter than the equal-tailed one, and a little more or less slope moves it across the whole range.
FLAT_SHARE = 0.15


@dataclass(frozen=True)
class Density1D:
    """Density on a uniform grid.

    Attributes
    ----------
    grid, density : ndarray (G,)
        Points and density (integrates to one).
    bandwidth : float
        Standard deviation of the smoothing kernel.
    effective : float
        Effective number of draws behind it.
    """

    grid: np.ndarray
    density: np.ndarray
    bandwidth: float
    effective: float = np.inf


@dataclass(frozen=True)
class Density2D:
    """Density on a rectangular grid.

    Attributes
    ----------
    x, y : ndarray (G,)
    density : ndarray (G, G)
        First axis y, as contour routines want it.
    """

    x: np.ndarray
    y: np.ndarray
    density: np.ndarray

    def level(self, cl: float) -> float:
        """Density above which the share ``cl`` of the posterior lies."""
        ordered = np.sort(self.density, axis=None)[::-1]
        mass = np.cumsum(ordered)
        return float(ordered[min(int(np.searchsorted(mass, cl * mass[-1])), len(ordered) - 1)])


@dataclass(frozen=True)
class Credible:
    """Credible regions of one quantity that lie inside each other.

    Attributes
    ----------
    regions : dict of float -> tuple of (low, high)
        By credibility.
    kind : {"highest-density", "equal-tailed"}
    reason : str
        Why they are not of highest density although that was asked for: "flat", "not nested" or "".
    """

    regions: dict[float, tuple[tuple[float, float], ...]]
    kind: str
    reason: str = ""


def density_1d(
    draws: np.ndarray,
    *,
    lower: float = -np.inf,
    upper: float = np.inf,
    effective: float | None = None,
    grid: int = _GRID,
) -> Density1D:
    """Kernel density by diffusion, with its own bandwidth.

    Parameters
    ----------
    draws : ndarray (N,)
    lower, upper : float
        Bounds; the density is reflected there when draws come close, so it keeps its height at an edge.
    effective : float, optional
        Effective number of independent draws, default N.
    grid : int
        Number of grid points.

    Returns
    -------
    Density1D

    Notes
    -----
    Z. I. Botev, J. F. Grotowski, D. P. Kroese, Annals of Statistics 38, 2916 (2010): the bandwidth is the
    fixed point of their eq. 30, which does not assume a single Gaussian mode.
    """
    from scipy.fft import dct, idct

    low, high = float(draws.min()), float(draws.max())
    span = high - low
    if not span > 0:
        width = abs(low) * 1e-12 + 1e-300
        return Density1D(np.array([low - width, low, low + width]), np.array([0.0, 1.0 / width, 0.0]), width)
    low = max(lower, low - 0.1 * span) if np.isfinite(lower) else low - 0.1 * span
    high = min(upper, high + 0.1 * span) if np.isfinite(upper) else high + 0.1 * span
    edges = np.linspace(low, high, grid + 1)
    mass = np.histogram(draws, edges)[0] / len(draws)
    # The cosine transform reflects at both ends.
    transform = dct(mass)
    count = float(len(draws) if effective is None else effective)
    time = _diffusion_time(transform, count)
    k = np.arange(grid)
    smooth = idct(transform * np.exp(-0.5 * k**2 * np.pi**2 * time))
    density = np.maximum(smooth, 0.0) * grid / (high - low)
    density /= density.sum() * (high - low) / grid
    return Density1D(0.5 * (edges[1:] + edges[:-1]), density, float(np.sqrt(time) * (high - low)), count)


def _diffusion_time(transform: np.ndarray, count: float) -> float:
    """Squared bandwidth in units of the squared range."""
    from scipy.optimize import brentq

    k2 = np.arange(1, len(transform), dtype=np.float64) ** 2
    a2 = (0.5 * transform[1:]) ** 2

    def norm(order: int, time: float) -> float:
        return float(2.0 * np.pi ** (2 * order) * np.sum(k2**order * a2 * np.exp(-k2 * np.pi**2 * time)))

    def difference(time: float) -> float:
        f = norm(7, time)
        for order in range(6, 1, -1):
            odd = np.prod(np.arange(1.0, 2 * order, 2)) / np.sqrt(2.0 * np.pi)
            const = (1.0 + 0.5 ** (order + 0.5)) / 3.0
            f = norm(order, (2.0 * const * odd / (count * f)) ** (2.0 / (3.0 + 2.0 * order)))
        return float(time - (2.0 * count * np.sqrt(np.pi) * f) ** -0.4)

    with np.errstate(over="ignore", divide="ignore", invalid="ignore"):
        times = np.geomspace(1e-9, 0.1, 33)
        values = np.array([difference(t) for t in times])
        usable = np.isfinite(values)
        crossing = np.flatnonzero(usable[:-1] & usable[1:] & (values[:-1] < 0) & (values[1:] >= 0))
        if not len(crossing):
            return float(0.014 * max(count, 2.0) ** -0.4)
        first = crossing[0]
        root = brentq(difference, times[first], times[first + 1], rtol=1e-6)
        return float(root)


def highest_density(density: Density1D, cl: float) -> tuple[tuple[float, float], ...]:
    """Credible region of highest density: one or more intervals.

    Parameters
    ----------
    density : Density1D
    cl : float
        Share of the posterior inside, 0 to 1.

    Returns
    -------
    tuple of (low, high)
        In ascending order; more than one when the region is disconnected.

    Notes
    -----
    A dip that is no deeper than three times the density's own sampling error does not divide a region: on
    a plateau the answer would otherwise be a list of noise.
    """
    grid, height = density.grid, density.density
    step = grid[1] - grid[0]
    order = np.argsort(height)[::-1]
    mass = np.cumsum(height[order]) / height.sum()
    level = height[order[min(int(np.searchsorted(mass, cl)), len(order) - 1)]]
    inside = height >= level
    change = np.diff(inside.astype(np.int8), prepend=0, append=0)
    starts, ends = np.flatnonzero(change == 1), np.flatnonzero(change == -1) - 1
    noise = _sampling_error(density, level)
    real = [
        i for i in range(len(starts) - 1) if height[ends[i] + 1 : starts[i + 1]].min() < level - 3.0 * noise
    ]
    if len(starts) > 1 and not real:
        return (_shortest(density, cl),)
    starts = starts[[0, *(i + 1 for i in real)]]
    ends = ends[[*real, len(ends) - 1]]
    regions = []
    for start, end in zip(starts.tolist(), ends.tolist(), strict=True):
        low = grid[start] - 0.5 * step
        high = grid[end] + 0.5 * step
        if start > 0:
            low = _crossing(grid, height, start - 1, start, level)
        if end < len(grid) - 1:
            high = _crossing(grid, height, end, end + 1, level)
        regions.append((float(low), float(high)))
    return tuple(regions)


def credible(density: Density1D, levels: Sequence[float]) -> Credible:
    """Credible regions of highest density, or equal-tailed where those would say nothing.

    Parameters
    ----------
    density : Density1D
    levels : sequence of float
        Credibilities, 0 to 1.

    Returns
    -------
    Credible

    Notes
    -----
    Where a density is flat within its Monte Carlo error, noise decides where it is highest. It is taken for
    flat when, between the quantiles that enclose the middle 68.27 %, it varies by less than ``FLAT_ERRORS`` of
    its own sampling errors (standard deviation of the kernel estimate at its mean height) or less than
    ``FLAT_SHARE`` of its mean height. Flat densities, and those whose regions would not lie inside each other,
    get equal-tailed intervals, which always do.
    """
    if _is_flat(density):
        return Credible(equal_tailed(density, levels), "equal-tailed", "flat")
    step = float(density.grid[1] - density.grid[0])
    regions: dict[float, tuple[tuple[float, float], ...]] = {}
    inner: tuple[tuple[float, float], ...] = ()
    for level in sorted(levels):
        outer = highest_density(density, level)
        for low, high in inner:
            # A grid step is rounding; more than that is a region somewhere else.
            if not any(a <= low + step and high - step <= b for a, b in outer):
                return Credible(equal_tailed(density, levels), "equal-tailed", "not nested")
            outer = tuple(
                (min(a, low), max(b, high)) if a <= low + step and high - step <= b else (a, b)
                for a, b in outer
            )
        regions[level] = inner = outer
    return Credible({level: regions[level] for level in levels}, "highest-density")


def equal_tailed(density: Density1D, levels: Sequence[float]) -> dict[float, tuple[tuple[float, float], ...]]:
    """Intervals of a density that leave as much on their left as on their right."""
    found: dict[float, tuple[tuple[float, float], ...]] = {}
    for level in levels:
        low, high = _quantiles(density, np.array([0.5 - 0.5 * level, 0.5 + 0.5 * level]))
        found[level] = ((float(low), float(high)),)
    return found


def _is_flat(density: Density1D) -> bool:
    low, high = _quantiles(density, np.array([0.5 - 0.34135, 0.5 + 0.34135]))
    middle = density.density[(density.grid >= low) & (density.grid <= high)]
    if len(middle) < 3:
        return False
    height = float(middle.mean())
    allowed = max(FLAT_ERRORS * _sampling_error(density, height), FLAT_SHARE * height)
    return bool(np.ptp(middle) < allowed)


def _sampling_error(density: Density1D, height: float) -> float:
    """Standard deviation of a Gaussian kernel estimate: its variance is f / (2 sqrt(pi) n h)."""
    return float(np.sqrt(height / (2.0 * np.sqrt(np.pi) * density.effective * density.bandwidth)))


def _quantiles(density: Density1D, shares: np.ndarray) -> np.ndarray:
    step = density.grid[1] - density.grid[0]
    edges = np.append(density.grid - 0.5 * step, density.grid[-1] + 0.5 * step)
    below = np.concatenate([[0.0], np.cumsum(density.density)])
    return np.asarray(np.interp(shares, below / below[-1], edges))


def _crossing(grid: np.ndarray, height: np.ndarray, a: int, b: int, level: float) -> float:
    if height[a] == height[b]:
        return float(0.5 * (grid[a] + grid[b]))
    return float(grid[a] + (grid[b] - grid[a]) * (level - height[a]) / (height[b] - height[a]))


def _shortest(density: Density1D, cl: float) -> tuple[float, float]:
    """Shortest single interval of a density that holds the share ``cl``."""
    step = density.grid[1] - density.grid[0]
    edges = np.append(density.grid - 0.5 * step, density.grid[-1] + 0.5 * step)
    share = np.concatenate([[0.0], np.cumsum(density.density)])
    share /= share[-1]
    ends = np.interp(share + cl, share, edges, right=np.nan)
    best = int(np.nanargmin(ends - edges))
    return float(edges[best]), float(ends[best])


def shortest_interval(draws: np.ndarray, cl: float) -> tuple[float, float]:
    """Shortest single interval that holds the share ``cl`` of the draws."""
    ordered = np.sort(draws)
    count = max(int(np.ceil(cl * len(ordered))), 1)
    if count >= len(ordered):
        return float(ordered[0]), float(ordered[-1])
    widths = ordered[count:] - ordered[: len(ordered) - count]
    best = int(widths.argmin())
    return float(ordered[best]), float(ordered[best + count])


def density_2d(
    x: np.ndarray,
    y: np.ndarray,
    *,
    bounds: tuple[tuple[float, float], tuple[float, float]] = ((-np.inf, np.inf), (-np.inf, np.inf)),
    effective: float | None = None,
    grid: int = 160,
) -> Density2D:
    """Density of two parameters, smoothed with a kernel of their own correlation.

    Parameters
    ----------
    x, y : ndarray (N,)
    bounds : pair of (lower, upper)
        Where to reflect.
    effective : float, optional
        Effective number of independent draws, default N.
    grid : int

    Returns
    -------
    Density2D

    Notes
    -----
    Histogram, then a Gaussian kernel of fourth order, exp(-a) (1 + a) of the wave number: its bias is of fourth
    order in the bandwidth, so regions do not grow by being smoothed (M. P. Wand, M. C. Jones, "Kernel Smoothing",
    1995, section 2.8). Bandwidth per axis as in one dimension, times N^(1/5 - 1/6) and a factor of 1.6 for the
    higher order (tried on known densities). Where draws come close to a bound the kernel has no correlation: it is
    reflected there.
    """
    from scipy.fft import dctn, fftfreq, idctn, irfftn, rfftfreq, rfftn

    count = len(x) if effective is None else effective
    axes, edges, widths, free = [], [], [], True
    for draws, (lower, upper) in zip((x, y), bounds, strict=True):
        smooth = density_1d(draws, lower=lower, upper=upper, effective=count, grid=512)
        span = float(draws.max() - draws.min()) or 1.0
        low = max(lower, float(draws.min()) - 0.1 * span)
        high = min(upper, float(draws.max()) + 0.1 * span)
        free &= low > lower and high < upper
        edge = np.linspace(low, high, grid + 1)
        edges.append(edge)
        axes.append(0.5 * (edge[1:] + edge[:-1]))
        widths.append(_ORDER_FACTOR * smooth.bandwidth * count ** (1.0 / 5.0 - 1.0 / 6.0) / (high - low))
    mass = np.histogram2d(x, y, bins=edges)[0]
    if free:
        with np.errstate(divide="ignore", invalid="ignore"):
            correlation = float(np.nan_to_num(np.corrcoef(x, y)[0, 1]))
        first = 2.0 * np.pi * widths[0] * fftfreq(grid, 1.0 / grid)[:, None]
        second = 2.0 * np.pi * widths[1] * rfftfreq(grid, 1.0 / grid)[None, :]
        a = 0.5 * (first**2 + 2.0 * correlation * first * second + second**2)
        smooth2 = irfftn(rfftn(mass) * np.exp(-a) * (1.0 + a), s=mass.shape)
    else:
        k = np.pi * np.arange(grid)
        a = 0.5 * ((widths[0] * k[:, None]) ** 2 + (widths[1] * k[None, :]) ** 2)
        smooth2 = idctn(dctn(mass) * np.exp(-a) * (1.0 + a))
    density = np.maximum(smooth2.T, 0.0)
    area = (axes[0][1] - axes[0][0]) * (axes[1][1] - axes[1][0])
    return Density2D(axes[0], axes[1], density / (density.sum() * area))
