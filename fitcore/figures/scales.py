"""Rows with a scale each: where values lie on the page, and the small ticks beneath."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from fitcore.figures import style
from fitcore.figures.dumbbell import scale_unit, tick_texts, ticks

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["Scale", "bar", "draw_scale", "scale_for"]


@dataclass(frozen=True)
class Scale:
    """A stretch of the page, in inches, and the values at its ends."""

    left: float
    right: float
    low: float
    high: float

    def at(self, value: float) -> float:
        """Where a value lies; what is outside is put on the end."""
        share = (value - self.low) / (self.high - self.low)
        return self.left + min(max(share, 0.0), 1.0) * (self.right - self.left)

    def holds(self, value: float) -> bool:
        """Whether a value lies inside."""
        return self.low <= value <= self.high


def scale_for(values: Sequence[float], left: float, right: float, margin: float = 0.12) -> Scale:
    """A scale that shows all finite values with some margin."""
    finite = [value for value in values if abs(value) < 1e300]
    low, high = min(finite), max(finite)
    room = margin * (high - low) or 0.1 * abs(high) or 1.0
    return Scale(left, right, low - room, high + room)


def draw_scale(axes: Axes, scale: Scale, y: float, *, below: float, unit: str = "1") -> None:
    """A thin line with two or three round values and a unit beneath, on axes in inches that point downwards."""
    axes.plot([scale.left, scale.right], [y, y], color=style.RULE, lw=0.7, zorder=1)
    marks = ticks(scale.low, scale.high)
    words, power = tick_texts(marks)
    small: dict[str, Any] = {"fontsize": 4.8, "color": style.FAINT_INK, "va": "top", "zorder": 1}
    for tick, word in zip(marks, words, strict=True):
        x = scale.at(tick)
        axes.plot([x, x], [y + below, y + below + 0.03], color=style.FAINT_INK, lw=0.6, zorder=1)
        axes.text(x, y + below + 0.04, word, ha="center", **small)
    axes.text(scale.right + 0.06, y + below + 0.04, scale_unit(unit, power), ha="left", **small)


def bar(
    axes: Axes,
    scale: Scale,
    y: float,
    ends_68: tuple[float, float],
    ends_95: tuple[float, float] | None,
    value: float,
    colour: object,
    label: str = "",
) -> None:
    """An interval: thick for 68.27 %, thin for 95.0 %, a white dot at the value; cut ends get an arrow head."""
    for ends, width, strength, depth in ((ends_95, 2.4, 0.5, 2.0), (ends_68, 6.2, 1.0, 3.0)):
        if ends is None:
            continue
        places = [scale.at(end) for end in ends]
        shade = style.tint(str(colour), strength)
        axes.plot(
            places, [y, y], color=shade, lw=width, solid_capstyle="butt", zorder=depth, gid=label or None
        )
        for end, place, marker in zip(ends, places, "<>", strict=True):
            if not scale.holds(end):
                axes.plot([place], [y], marker=marker, ms=4, color=shade, zorder=depth)
    axes.plot([scale.at(value)], [y], "o", ms=3.4, mfc="white", mec=str(colour), mew=0.8, zorder=4)
