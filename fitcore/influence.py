"""Which parameters a computation really feels.

A formula may name a parameter that cancels in it: the phase of a mixing amplitude does not depend on its size. Such a
parameter is no unknown of a fit to the phase alone.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from fitcore.minimise.derivatives import call_with_derivatives, seed, tangents_of

__all__ = ["influential"]

#: Points looked at: a derivative that vanishes by accident does so at one of them, not at all.
POINTS = 5


def influential(graph: Any, leaves: Sequence[Any]) -> set[int]:
    """Positions of the inputs that move at least one target.

    Parameters
    ----------
    graph : observables.graph.Graph
    leaves : sequence
        One per input of the graph, with ``start``, ``scale``, ``lower`` and ``upper``.

    Returns
    -------
    set of int
        Positions in ``graph.inputs``. A target without value at a point counts as moved by all it rests on.
    """
    start = np.array([leaf.start for leaf in leaves])[:, None]
    scale = np.array([leaf.scale for leaf in leaves])[:, None]
    lower = np.array([leaf.lower for leaf in leaves])[:, None]
    upper = np.array([leaf.upper for leaf in leaves])[:, None]
    noise = np.random.default_rng(1).standard_normal((len(leaves), POINTS))
    points = np.clip(start + scale * noise, lower, upper)
    results = graph.evaluate(seed(points), call_with_derivatives)
    moved: set[int] = set()
    for target, result in zip(graph.targets, results, strict=True):
        support = graph.supports[target]
        tangents = tangents_of(result, support, POINTS)
        felt = ((tangents != 0.0) | np.isnan(tangents)).any(axis=1)
        moved |= {position for position, is_felt in zip(support, felt, strict=True) if is_felt}
    return moved
