"""Outlines of regions: a line with short ticks that point inwards, as maps draw the edge of a basin."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["contour_lines", "draw_edge", "height", "inward_ticks", "refine"]


#: Stands for an impossible point.
HIGH = 1e6


def height(delta: np.ndarray, level: float) -> np.ndarray:
    """Square root of Delta chi-square, capped: nearly linear across an edge, and finite where nothing is possible."""
    clipped = np.clip(np.where(np.isfinite(delta), delta, np.inf), 0.0, 9.0 * level)
    return np.asarray(np.sqrt(clipped))


def contour_lines(x: np.ndarray, y: np.ndarray, delta: np.ndarray, level: float) -> list[np.ndarray]:
    """Edges of the region below a level: lines of shape (k, 2)."""
    from contourpy import contour_generator

    lines = contour_generator(x=x, y=y, z=height(delta, level).T).lines(float(np.sqrt(level)))
    return [np.asarray(line) for line in lines if len(line) > 1]


def refine(
    x: np.ndarray, y: np.ndarray, delta: np.ndarray, slopes: np.ndarray, times: int = 5
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Interpolate a surface onto a finer grid with its known slopes, so that valleys narrower than a cell stay whole.

    Parameters
    ----------
    x, y : array
    delta : array, shape (x.size, y.size)
        Impossible points count as very high.
    slopes : array, shape (x.size, y.size, 2)
    times : int
        New cells per cell and direction.

    Returns
    -------
    x, y, delta

    Notes
    -----
    Cubic Hermite interpolation in each direction with zero twist: exact across a parabolic valley, and local, so that
    a jump spoils its own cells only.
    """
    finite = np.isfinite(delta)
    delta = np.where(finite, delta, HIGH)
    slopes = np.where(finite[..., None], slopes, 0.0)
    (value_x, slope_x, fine_x), (value_y, slope_y, fine_y) = _hermite(x, times), _hermite(y, times)
    surface = value_x @ delta @ value_y.T
    surface += slope_x @ slopes[..., 0] @ value_y.T + value_x @ slopes[..., 1] @ slope_y.T
    if not finite.all():  # cells with an impossible corner: a cubic across the cliff would swing below it
        touched = (np.abs(value_x) > 0) @ (~finite).astype(float) @ (np.abs(value_y) > 0).T > 0
        surface[touched] = HIGH
    return fine_x, fine_y, surface


def _hermite(grid: np.ndarray, times: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Weights of values and of slopes at the nodes, for every point of the finer grid."""
    cell = np.repeat(np.arange(grid.size - 1), times)
    t = np.tile(np.arange(times) / times, grid.size - 1)
    cell, t = np.append(cell, grid.size - 2), np.append(t, 1.0)
    width = np.diff(grid)[cell]
    rows = np.arange(t.size)
    values, slopes = np.zeros((2, t.size, grid.size))
    values[rows, cell], values[rows, cell + 1] = 1 - 3 * t**2 + 2 * t**3, 3 * t**2 - 2 * t**3
    slopes[rows, cell], slopes[rows, cell + 1] = width * (t - 2 * t**2 + t**3), width * (t**3 - t**2)
    return values, slopes, grid[cell] + width * t


def inward_ticks(
    axes: Axes,
    line: np.ndarray,
    x: np.ndarray,
    y: np.ndarray,
    delta: np.ndarray,
    *,
    length: float,
    spacing: float,
) -> np.ndarray:
    """Ticks along a line, each pointing to where Delta chi-square is lower.

    Parameters
    ----------
    axes : matplotlib Axes
        With its final limits and position.
    line : array, shape (k, 2)
    x, y, delta : array
        Grid on which the low side is looked up.
    length, spacing : float
        In points.

    Returns
    -------
    ndarray, shape (t, 2, 2)
        Start and end of every tick, in data coordinates.
    """
    points = axes.transData.transform(line) * 72.0 / axes.figure.dpi
    steps = np.hypot(*np.diff(points, axis=0).T)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    if along[-1] < spacing:
        return np.empty((0, 2, 2))
    count = max(int(along[-1] // spacing), 1)
    where = (np.arange(count) + 0.5) * along[-1] / count
    foot = np.stack([np.interp(where, along, points[:, k]) for k in (0, 1)], axis=1)
    before, after = np.maximum(where - 0.5, 0.0), np.minimum(where + 0.5, along[-1])
    tangent = np.stack(
        [np.interp(after, along, points[:, k]) - np.interp(before, along, points[:, k]) for k in (0, 1)], 1
    )
    size = np.hypot(*tangent.T)
    keep = size > 0.0
    foot, tangent = foot[keep], tangent[keep] / size[keep, None]
    normal = np.stack([-tangent[:, 1], tangent[:, 0]], axis=1)
    back = axes.transData.inverted()

    def data(at: np.ndarray) -> np.ndarray:
        return np.asarray(back.transform(at * axes.figure.dpi / 72.0))

    def look(at: np.ndarray) -> np.ndarray:
        return _interpolate(x, y, delta, data(at))

    sign = np.where(look(foot + length * normal) < look(foot - length * normal), 1.0, -1.0)
    return np.stack([data(foot), data(foot + length * sign[:, None] * normal)], axis=1)


def draw_edge(
    axes: Axes,
    lines: Sequence[np.ndarray],
    grid: tuple[np.ndarray, np.ndarray, np.ndarray],
    colour: Any,
    *,
    width: float = 1.0,
    style: Any = "-",
    outline: float = 0.0,
    ticks: float = 0.0,
    spacing: float = 7.0,
    zorder: float = 3.0,
    label: str = "",
) -> None:
    """Draw edges, with a white outline or inward ticks (lengths in points) where asked."""
    from matplotlib.collections import LineCollection

    for number, line in enumerate(lines):
        if outline:
            axes.plot(*line.T, color="white", lw=width + 2 * outline, zorder=zorder, solid_joinstyle="round")
        axes.plot(
            *line.T,
            color=colour,
            lw=width,
            ls=style,
            zorder=zorder + 0.02,
            gid=f"{label}:{number}" if label else None,
        )
        if ticks:
            marks = inward_ticks(axes, line, *grid, length=ticks, spacing=spacing)
            if outline:
                axes.add_collection(
                    LineCollection(list(marks), colors="white", linewidths=width + 2 * outline, zorder=zorder)
                )
            axes.add_collection(
                LineCollection(list(marks), colors=[colour], linewidths=0.8 * width, zorder=zorder + 0.02)
            )


def _interpolate(x: np.ndarray, y: np.ndarray, z: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Bilinear interpolation, clamped to the grid; what is impossible counts as high."""
    finite = np.isfinite(z)
    z = np.where(finite, z, 10.0 * float(np.max(z[finite], initial=1.0)))
    i = np.clip(np.searchsorted(x, at[:, 0]) - 1, 0, x.size - 2)
    j = np.clip(np.searchsorted(y, at[:, 1]) - 1, 0, y.size - 2)
    s = np.clip((at[:, 0] - x[i]) / (x[i + 1] - x[i]), 0.0, 1.0)
    t = np.clip((at[:, 1] - y[j]) / (y[j + 1] - y[j]), 0.0, 1.0)
    low = z[i, j] * (1 - s) + z[i + 1, j] * s
    high = z[i, j + 1] * (1 - s) + z[i + 1, j + 1] * s
    return np.asarray(low * (1 - t) + high * t)
