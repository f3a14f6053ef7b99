"""A bounded amount of samples from a chain of any length, read in one pass."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from observables.errors import StoreError

__all__ = ["ThinnedChain"]

# 128 MiB of float64: far more draws than any estimate here needs.
_DEFAULT_VALUES = 1 << 24


@dataclass(frozen=True)
class ThinnedChain:
    """Every ``stride``-th step of a chain, and its last steps without gaps.

    Attributes
    ----------
    samples : ndarray (steps / stride, walkers, parameters)
    log_posterior : ndarray (steps / stride, walkers)
    derived : dict of ndarray (steps / stride, walkers)
    stride : int
    start, steps : int
        First step used, and number of steps represented.
    ensembles : ndarray (walkers,)
    tail : ndarray (<= steps, walkers, parameters)
        The last steps; empty when nothing was thinned away.
    """

    samples: np.ndarray
    log_posterior: np.ndarray
    derived: dict[str, np.ndarray]
    stride: int
    start: int
    steps: int
    ensembles: np.ndarray
    tail: np.ndarray

    @classmethod
    def read(
        cls, chain: Any, *, start: int = 0, derived: tuple[str, ...] = (), max_values: int = _DEFAULT_VALUES
    ) -> ThinnedChain:
        """Read ``chain`` block by block, checking every block.

        Parameters
        ----------
        chain : ChainFile or MemoryChain
        start : int
            First step used.
        derived : tuple of str
            Derived quantities to read along.
        max_values : int
            Upper limit of the number of values kept (steps x walkers x parameters).

        Raises
        ------
        StoreError
            When the chain has no steps from ``start`` on, or a block is damaged.
        """
        chain.commit()
        steps = chain.steps - start
        if steps <= 0:
            where = chain.path or "the chain"
            raise StoreError(f"{where}: has {chain.steps} steps, none from step {start} on; sample first")
        walkers, n = chain.shape
        per_step = walkers * (n + len(derived))
        stride = max(1, -(-steps * per_step // max_values))
        tail_steps = min(steps, max_values // (4 * per_step)) if stride > 1 else 0
        samples, log_posterior, tail = [], [], []
        values: dict[str, list[np.ndarray]] = {name: [] for name in derived}
        for block in chain.blocks(start, derived=derived):
            rows = slice((start - block.start) % stride, None, stride)
            # Copies, so that the rest of the block can go.
            samples.append(block.chain[rows].copy())
            log_posterior.append(block.log_posterior[rows].copy())
            for name in derived:
                values[name].append(block.derived[name][rows].copy())
            missing = start + steps - tail_steps - block.start
            if missing < len(block.chain):
                tail.append(block.chain[max(missing, 0) :].copy())
        return cls(
            np.concatenate(samples),
            np.concatenate(log_posterior),
            {name: np.concatenate(parts) for name, parts in values.items()},
            stride,
            start,
            steps,
            np.asarray(chain.ensembles),
            np.concatenate(tail) if tail else np.empty((0, walkers, n)),
        )
