"""Derived quantities over a stored chain, added beside the samples without touching them."""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from fitcore.sampling.chain_file import ChainFile

__all__ = ["derive"]


def derive(
    path: str | os.PathLike[str],
    problem: Any,
    names: Sequence[str],
    *,
    progress: Callable[[int, int], None] | None = None,
) -> dict[str, int]:
    """Compute quantities at every committed step of a chain and store them as ``/derived/NAME``.

    Continues where an earlier call stopped, so a chain that has grown only costs its new steps.

    Parameters
    ----------
    path : path-like
    problem : problem-like
        The problem of the chain; offers ``values(theta, names)``.
    names : sequence of str
        Quantities of its catalogue.
    progress : callable, optional
        Called with (steps done, steps in all) after every block.

    Returns
    -------
    dict
        Number of steps computed per name.

    Raises
    ------
    StoreError
        When the file cannot be used or holds another problem.
    UnknownNameError
        When the catalogue does not know a name; nothing is written then.
    """
    computed = dict.fromkeys(names, 0)
    with ChainFile.resume(path, problem) as chain:
        known = {name: chain.derived_steps(name) for name in names}
        for number, block in enumerate(chain.blocks()):
            missing = [name for name in names if known[name] <= block.start]
            if missing:
                steps, walkers, n = block.chain.shape
                values = problem.values(block.chain.reshape(-1, n), missing)
                for name in missing:
                    grid = np.broadcast_to(values[name], steps * walkers).reshape(steps, walkers)
                    chain.write_derived(
                        name,
                        number,
                        grid,
                        unit=problem.unit_of(name),
                        title=problem.title_of(name),
                        latex=problem.latex_of(name),
                    )
                    computed[name] += steps
            if progress is not None:
                progress(block.start + len(block.chain), chain.committed_steps)
    return computed
