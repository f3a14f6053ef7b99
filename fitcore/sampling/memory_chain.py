"""A chain in memory with the reading interface of a chain file; its store is emcee's own backend."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

import numpy as np
from emcee.backends import Backend

from fitcore.sampling.chain_format import ChainHeader
from fitcore.sampling.chain_reading import Block
from observables.errors import UnknownNameError

__all__ = ["MemoryChain"]


class MemoryChain(Backend):  # type: ignore[misc]
    """Steps in memory.

    Parameters
    ----------
    header : ChainHeader
    block_steps : int
        Steps per block handed out by :meth:`blocks`.
    """

    path = None
    notices: tuple[str, ...] = ()

    def __init__(self, header: ChainHeader, *, block_steps: int = 128) -> None:
        super().__init__()
        self.header = header
        self.block_steps = block_steps
        self._accepted: list[np.ndarray] = []
        self._proposal: dict[str, np.ndarray] = {}
        self.reset(len(header.ensembles), len(header.parameter_names))

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names along the chain's last axis."""
        return self.header.parameter_names

    @property
    def ensembles(self) -> np.ndarray:
        """Ensemble number of every walker (walkers,)."""
        return np.array(self.header.ensembles, dtype=np.int64)

    @property
    def steps(self) -> int:
        """Number of steps."""
        return int(self.iteration)

    @property
    def derived_names(self) -> tuple[str, ...]:
        """Nothing: derived quantities are stored in chain files only."""
        return ()

    def derived_label(self, name: str) -> tuple[str, str]:
        """Unit and symbol (LaTeX) of a derived quantity."""
        raise UnknownNameError(name, "derived quantity of this chain", self.derived_names)

    def grow(self, steps: int, blobs: object) -> None:
        """Make room, doubling so that many small requests stay cheap."""
        if self.iteration + steps > len(self.chain):
            super().grow(max(steps, self.iteration), blobs)

    def save_step(self, state: object, accepted: np.ndarray) -> None:
        """Take one step."""
        super().save_step(state, accepted)
        self._accepted.append(np.array(accepted, dtype=bool))

    def commit(self) -> None:
        """Do nothing: memory needs no commit."""

    def close(self) -> None:
        """Do nothing: the chain stays usable."""

    def write_proposal(self, arrays: Mapping[str, np.ndarray]) -> None:
        """Keep the tuned proposal of the run."""
        self._proposal = dict(arrays)

    def read_proposal(self) -> dict[str, np.ndarray]:
        """The arrays of :meth:`write_proposal`."""
        return dict(self._proposal)

    def blocks(
        self, start: int = 0, *, derived: tuple[str, ...] = (), verify: bool = True
    ) -> Iterator[Block]:
        """The steps in blocks, as a chain file hands them out."""
        for name in derived:
            raise UnknownNameError(name, "derived quantity of this chain", self.derived_names)
        for begin in range(start, self.steps, self.block_steps):
            rows = slice(begin, min(begin + self.block_steps, self.steps))
            yield Block(
                begin,
                self.chain[rows],
                self.log_prob[rows],
                np.array(self._accepted[rows]),
                {},
            )
