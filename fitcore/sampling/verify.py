"""Check a chain file completely: header, tables, and every block against its checksum."""

from __future__ import annotations

import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from fitcore.sampling.chain_file import ChainFile
from observables.errors import StoreError

__all__ = ["Verification", "verify"]


@dataclass(frozen=True)
class Verification:
    """What a check found in a sound file.

    Attributes
    ----------
    path : Path
    steps, walkers, parameters, blocks : int
    derived : dict of name -> steps
    notices : tuple of str
        Ignored tails and the like: nothing is wrong with them.
    fingerprint, hypothesis, created : str
    """

    path: Path
    steps: int
    walkers: int
    parameters: int
    blocks: int
    derived: dict[str, int]
    notices: tuple[str, ...]
    fingerprint: str
    hypothesis: str
    created: str


def verify(path: str | os.PathLike[str]) -> Verification:
    """Read a whole chain file and compare everything with its checksums.

    Parameters
    ----------
    path : path-like

    Returns
    -------
    Verification

    Raises
    ------
    StoreError
        At the first damage, naming the steps concerned.
    """
    with ChainFile.open(path) as chain:
        stored = {name: chain.derived_steps(name) for name in chain.derived_names}
        complete = tuple(name for name, steps in stored.items() if steps >= chain.committed_steps)
        blocks = 0
        for block in chain.blocks(derived=complete):
            blocks += 1
            if not np.isfinite(block.chain).all() or np.isnan(block.log_posterior).any():
                raise StoreError(f"{chain.path}: steps from {block.start} on hold values that are not finite")
        if chain.committed_steps:
            chain.read_proposal()
        partial = tuple(
            f"{name} is derived for {steps} of {chain.committed_steps} steps"
            for name, steps in stored.items()
            if name not in complete
        )
        walkers, n = chain.shape
        return Verification(
            chain.path, chain.committed_steps, walkers, n, blocks, stored, chain.notices + partial,
            chain.header.fingerprint, chain.header.hypothesis, chain.header.created,
        )  # fmt: skip
