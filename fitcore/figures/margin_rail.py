"""The margin rail: names in the margin of a plane, each tied to where its band leaves the frame."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

__all__ = ["Exit", "find_exit", "spread"]

#: Sides in order of preference: the right and the upper margin have no axis labels.
SIDES = ("right", "top", "left", "bottom")


@dataclass(frozen=True)
class Exit:
    """Where a band leaves the frame.

    Attributes
    ----------
    side : str
        One of `SIDES`.
    at : float
        Position along that side, in data coordinates.
    """

    side: str
    at: float


def find_exit(
    x: np.ndarray, y: np.ndarray, delta: np.ndarray, level: float, taken: Sequence[Exit] = (), room: int = 5
) -> Exit | None:
    """Middle of the stretch of the frame that a band crosses.

    Parameters
    ----------
    x, y : array
        Grid, whose outer lines are the frame.
    delta : array, shape (x.size, y.size)
    level : float
        Delta chi-square that bounds the band.
    taken : sequence of Exit
        Names already placed.
    room : int
        Names that fit beside one side; a full side is passed over where there is a choice.

    Returns
    -------
    Exit or None
        None when the band does not reach the frame.
    """
    sides = {
        "right": (y, delta[-1]),
        "top": (x, delta[:, -1]),
        "left": (y, delta[0]),
        "bottom": (x, delta[:, 0]),
    }
    found = []
    for side in SIDES:
        positions, values = sides[side]
        inside = np.concatenate([[False], values < level, [False]])
        starts = np.flatnonzero(inside[1:] & ~inside[:-1])
        ends = np.flatnonzero(inside[:-1] & ~inside[1:]) - 1
        if not starts.size:
            continue
        # the longest stretch; a band that runs along a whole side has no place of its own there
        longest = int(np.argmax(ends - starts))
        low, high = starts[longest], ends[longest]
        full = high - low >= positions.size - 2
        crowded = sum(other.side == side for other in taken) >= room
        found.append(
            (full or crowded, SIDES.index(side), Exit(side, float(0.5 * (positions[low] + positions[high]))))
        )
    return min(found, key=lambda item: item[:2])[2] if found else None


def spread(wanted: Sequence[float], sizes: Sequence[float], low: float, high: float) -> list[float]:
    """Places as near as possible to those wanted, without overlap and inside a range.

    Parameters
    ----------
    wanted : sequence of float
        Centres asked for.
    sizes : sequence of float
        Room that each needs.
    low, high : float

    Returns
    -------
    list of float
        Centres, in the order given; if there is too little room they are packed evenly.
    """
    count = len(wanted)
    if not count:
        return []
    order = np.argsort(wanted, kind="stable")
    size = np.asarray(sizes, dtype=float)[order]
    if size.sum() > high - low:
        size = size * (high - low) / size.sum()
    offsets = np.concatenate([[0.0], np.cumsum(0.5 * (size[1:] + size[:-1]))])
    # without overlap means: position minus offset does not decrease; the nearest such sequence is found by pooling
    target = np.asarray(wanted, dtype=float)[order] - offsets
    blocks: list[list[float]] = []
    for value in target:
        blocks.append([value, 1.0])
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            last = blocks.pop()
            total = blocks[-1][1] + last[1]
            blocks[-1] = [(blocks[-1][0] * blocks[-1][1] + last[0] * last[1]) / total, total]
    level = np.concatenate([[value] * int(times) for value, times in blocks])
    level = np.clip(level, low + 0.5 * size[0], high - 0.5 * size[-1] - offsets[-1])
    places = np.empty(count)
    places[order] = level + offsets
    return [float(place) for place in places]
