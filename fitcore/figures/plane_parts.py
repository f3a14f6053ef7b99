"""Parts of a plane: its axes, its bands, and the page in inches."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from fitcore.figures import style
from fitcore.figures.outlines import contour_lines
from fitcore.figures.symbols import symbol_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "BOTTOM",
    "BOX_HEIGHT",
    "BOX_WIDTH",
    "HEIGHT",
    "LEFT",
    "OVERVIEW_BOTTOM",
    "WIDTH",
    "Band",
    "Box",
    "PlaneAxis",
    "Sheet",
]

WIDTH, HEIGHT = 9.6, 6.75
LEFT, BOTTOM, BOX_WIDTH, BOX_HEIGHT = 0.78, 1.08, 6.1, 4.42
OVERVIEW_BOTTOM = 0.78


@dataclass(frozen=True)
class PlaneAxis:
    """One of the two quantities.

    Attributes
    ----------
    name, latex, unit : str
    """

    name: str
    latex: str = ""
    unit: str = "1"

    @property
    def label(self) -> str:
        """Symbol with its unit."""
        unit = "" if self.unit == "1" else f"  [{self.unit}]"
        return symbol_text(self.latex, self.name) + unit


@dataclass(frozen=True)
class Band:
    """One constraint alone, or everything combined.

    Attributes
    ----------
    name : str
    latex : str
    family : Family
        Gives the colour; members of a family differ by line style.
    x, y : ndarray
    delta : ndarray, shape (x.size, y.size)
        Chi-square above its lowest value.
    share : float
        Contribution to chi-square at the best fit of everything.
    outlines : dict
        Level -> polished outlines; where absent they are interpolated on the grid.
    overview : tuple of (x, y, delta), or None
    """

    name: str
    latex: str
    family: style.Family
    x: np.ndarray
    y: np.ndarray
    delta: np.ndarray
    share: float = 0.0
    outlines: dict[float, list[np.ndarray]] = field(default_factory=dict)
    overview: tuple[np.ndarray, np.ndarray, np.ndarray] | None = None

    @property
    def grid(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """x, y and delta."""
        return self.x, self.y, self.delta

    def lines(self, level: float) -> list[np.ndarray]:
        """Outlines at a level."""
        return self.outlines[level] if level in self.outlines else contour_lines(*self.grid, level)


class Sheet:
    """The page in inches. Room that names need at the left or below is added outside: nothing else moves.

    Parameters
    ----------
    left, below : float
        Extra room.
    """

    def __init__(self, left: float, below: float) -> None:
        self.left, self.below = left, below
        self.figure: Figure = style.new_figure(WIDTH + left, HEIGHT + below)
        self.page = self.axes(-left, -below, WIDTH + left, HEIGHT + below, label="page", zorder=-1)
        self.page.set_axis_off()
        self.page.set_xlim(-left, WIDTH)
        self.page.set_ylim(-below, HEIGHT)

    def axes(self, x: float, y: float, width: float, height: float, **more: Any) -> Axes:
        """Axes at a place of the page."""
        wide, tall = WIDTH + self.left, HEIGHT + self.below
        return self.figure.add_axes(
            ((x + self.left) / wide, (y + self.below) / tall, width / wide, height / tall), **more
        )


@dataclass(frozen=True)
class Box:
    """Where the plane lies on the page, in inches."""

    left: float
    bottom: float
    width: float
    height: float
