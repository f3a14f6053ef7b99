"""Reading the chain of a file: blocks, single values, derived quantities, state of the generator."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.chain_format import (
    ChainHeader,
    block_checksum,
    committed_blocks,
    differences,
    store_errors,
    unpack_state,
)
from observables.errors import StoreError, UnknownNameError

__all__ = ["Block", "ChainReader", "writer_at_work"]

READ_ATTEMPTS = 6


@dataclass(frozen=True)
class Block:
    """Consecutive steps of a chain.

    Attributes
    ----------
    start : int
        Number of the first step.
    chain : ndarray (steps, walkers, parameters)
    log_posterior : ndarray (steps, walkers)
    accepted : ndarray (steps, walkers), bool
    derived : dict of ndarray (steps, walkers)
        Derived quantities asked for.
    """

    start: int
    chain: np.ndarray
    log_posterior: np.ndarray
    accepted: np.ndarray
    derived: Mapping[str, np.ndarray]


class ChainReader:
    """The stored steps of a chain, and the reading half of emcee's backend interface.

    Parameters
    ----------
    path : Path
    file : h5py.File
        Open now; kept only by a writer. A reader that kept it open would hinder a writer in its process.
    header : ChainHeader
    notices : tuple of str
        What was noticed on opening.
    writing : bool
    """

    initialized = True

    def __init__(
        self, path: Path, file: Any, header: ChainHeader, notices: tuple[str, ...], *, writing: bool
    ) -> None:
        self.path = path
        self.header = header
        self.notices = notices
        self._file: Any = file if writing else None
        self._buffer: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
        self._buffer_state: Any = None
        self.committed_steps = int(file["committed_steps"][()])
        ends = file["bookkeeping/block_end"][:]
        self._block_ends = ends[: committed_blocks(ends, self.committed_steps)]
        self.block_steps = int(file["chain"].attrs["block_steps"])
        self._accepted_total: np.ndarray | None = None

    def _read(self, doing: str, use: Callable[[Any], Any]) -> Any:
        """What ``use`` makes of the open file.

        A reader opens the file for this one use, and tries again while a writer is at work: its flush takes
        milliseconds, during which the tables of the file point to places not yet written.
        """
        if self._file is not None:
            with store_errors(self.path, doing):
                return use(self._file)
        import h5py

        for attempt in range(READ_ATTEMPTS):
            try:
                with store_errors(self.path, doing), h5py.File(self.path, "r", locking=False) as file:
                    return use(file)
            except StoreError:
                if attempt == READ_ATTEMPTS - 1 or not writer_at_work(self.path):
                    raise
                time.sleep(0.05 * (attempt + 1))
        raise AssertionError("unreachable")

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names along the chain's last axis."""
        return self.header.parameter_names

    @property
    def ensembles(self) -> np.ndarray:
        """Ensemble number of every walker (walkers,)."""
        return np.array(self.header.ensembles, dtype=np.int64)

    @property
    def shape(self) -> tuple[int, int]:
        """(walkers, parameters)."""
        return len(self.header.ensembles), len(self.header.parameter_names)

    @property
    def steps(self) -> int:
        """Number of steps, buffered ones included."""
        return self.committed_steps + len(self._buffer)

    @property
    def derived_names(self) -> tuple[str, ...]:
        """Names of the stored derived quantities."""
        names: tuple[str, ...] = self._read(
            "read the derived names", lambda file: tuple(sorted(file["derived"]))
        )
        return names

    def check_problem(self, problem: Any) -> None:
        """Refuse a problem that is not the one sampled.

        Raises
        ------
        StoreError
            With the differences, one per line.
        """
        found = differences(self.header, problem)
        if found:
            raise StoreError(
                f"{self.path}: holds the chain of a different problem; nothing was changed. Differences:\n"
                + "\n".join("  " + line for line in found)
                + "\nUse another file name for this problem"
            )

    def blocks(
        self, start: int = 0, *, derived: tuple[str, ...] = (), verify: bool = True
    ) -> Iterator[Block]:
        """Committed blocks in order, each checked against its checksum.

        Parameters
        ----------
        start : int
            First step wanted; the first block is cut accordingly.
        derived : tuple of str
            Derived quantities to read along.
        verify : bool
            Compare checksums (costs about as much as reading from memory).

        Yields
        ------
        Block

        Raises
        ------
        StoreError
            When a block does not match its checksum.
        UnknownNameError
            When a derived quantity is not stored for all steps.
        """
        for name in derived:
            if self.derived_steps(name) < self.committed_steps or not self.committed_steps:
                raise UnknownNameError(name, "derived quantity of this chain", self.derived_names)
        begin = 0
        ends = [int(end) for end in self._block_ends]
        for number, end in enumerate(ends):
            if end > start:
                yield self._read_block(number, begin, end, max(start, begin), derived, verify)
            begin = end

    def _read_block(
        self, number: int, begin: int, end: int, cut: int, derived: tuple[str, ...], verify: bool
    ) -> Block:
        rows = slice(begin, end)

        def use(file: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray, dict[str, np.ndarray]]:
            chain = file["chain"][rows]
            log_posterior = file["log_posterior"][rows]
            accepted = file["accepted"][rows]
            values = {name: file[f"derived/{name}"][rows] for name in derived}
            if verify:
                state = file["random_state"][number]
                found = block_checksum(begin, chain, log_posterior, accepted, state)
                self._compare(file, number, begin, end, found, "bookkeeping/block_checksum")
                for name, value in values.items():
                    found = block_checksum(begin, value)
                    self._compare(file, number, begin, end, found, f"bookkeeping/derived/{name}")
            return chain, log_posterior, accepted, values

        chain, log_posterior, accepted, values = self._read(f"read steps {begin} to {end - 1}", use)
        keep = slice(cut - begin, None)
        return Block(
            cut,
            chain[keep],
            log_posterior[keep],
            accepted[keep].astype(bool),
            {name: value[keep] for name, value in values.items()},
        )

    def _compare(self, file: Any, number: int, begin: int, end: int, found: int, dataset: str) -> None:
        if found != int(file[dataset][number]):
            raise StoreError(
                f"{self.path}: steps {begin} to {end - 1} do not match their checksum ({dataset}); the file "
                "is damaged. Restore it from a copy; nothing was changed"
            )

    def read_all(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Chain, log posterior and acceptance of all steps (small chains and tests)."""
        parts = [(b.chain, b.log_posterior, b.accepted) for b in self.blocks()]
        parts += [(c[None], p[None], a[None]) for c, p, a in self._buffer]
        walkers, n = self.shape
        if not parts:
            return np.empty((0, walkers, n)), np.empty((0, walkers)), np.empty((0, walkers), dtype=bool)
        chain, log_posterior, accepted = zip(*parts, strict=True)
        return np.concatenate(chain), np.concatenate(log_posterior), np.concatenate(accepted)

    def read_proposal(self) -> dict[str, np.ndarray]:
        """The arrays of :meth:`write_proposal`."""
        arrays: dict[str, np.ndarray] = self._read(
            "read the proposal", lambda file: {name: data[()] for name, data in file["proposal"].items()}
        )
        return arrays

    def derived_steps(self, name: str) -> int:
        """Number of leading steps for which a derived quantity is stored."""

        def steps(file: Any) -> int:
            stored = file["derived"]
            return int(stored[name].attrs["committed_steps"]) if name in stored else 0

        return int(self._read("read the derived quantities", steps))

    def derived_label(self, name: str) -> tuple[str, str]:
        """Unit and symbol (LaTeX) of a stored derived quantity."""

        def label(file: Any) -> tuple[str, str]:
            attributes = file[f"derived/{name}"].attrs
            return str(attributes["units"]), str(attributes["latex"])

        if name not in self.derived_names:
            raise UnknownNameError(name, "derived quantity of this chain", self.derived_names)
        found: tuple[str, str] = self._read("read the derived quantities", label)
        return found

    @property
    def iteration(self) -> int:
        """Number of steps, buffered ones included."""
        return self.steps

    @property
    def accepted(self) -> np.ndarray:
        """Accepted proposals per walker so far (walkers,)."""
        if self._accepted_total is None:
            self._accepted_total = self._count_accepted()
        return self._accepted_total

    @property
    def random_state(self) -> Any:
        """Generator state after the last step; None before the first."""
        if self._buffer:
            return self._buffer_state
        if not self.committed_steps:
            return None
        last = len(self._block_ends) - 1
        return unpack_state(self._read("read the generator state", lambda file: file["random_state"][last]))

    def has_blobs(self) -> bool:
        """Always False: derived quantities are computed afterwards."""
        return False

    def get_value(self, name: str, flat: bool = False, thin: int = 1, discard: int = 0) -> np.ndarray | None:
        """Stored values as emcee hands them out; ``name`` is chain, log_prob or blobs."""
        if self.steps <= 0:
            raise AttributeError("the chain has no steps yet: run the sampler first")
        if name == "blobs":
            return None
        if name not in ("chain", "log_prob"):
            raise UnknownNameError(name, "chain content", ("chain", "log_prob"))
        dataset = {"chain": "chain", "log_prob": "log_posterior"}[name]
        first = discard + thin - 1
        rows = slice(first, self.committed_steps, thin)
        stored = self._read(f"read {dataset}", lambda file: file[dataset][rows])
        parts = [stored] if first < self.committed_steps else []
        column = 0 if name == "chain" else 1
        parts += [
            self._buffer[i - self.committed_steps][column][None]
            for i in range(first, self.steps, thin)
            if i >= self.committed_steps
        ]
        value = np.concatenate(parts) if parts else stored[:0]
        return value.reshape(-1, *value.shape[2:]) if flat else value

    def get_chain(self, **options: Any) -> np.ndarray | None:
        """Samples (steps, walkers, parameters); options ``flat``, ``thin``, ``discard``."""
        return self.get_value("chain", **options)

    def get_log_prob(self, **options: Any) -> np.ndarray | None:
        """Log posterior (steps, walkers); options ``flat``, ``thin``, ``discard``."""
        return self.get_value("log_prob", **options)

    def get_blobs(self, **options: Any) -> np.ndarray | None:
        """Always None."""
        return self.get_value("blobs", **options)

    def get_last_sample(self) -> Any:
        """The last step as an emcee State, generator state included."""
        from emcee.state import State

        if self.steps <= 0:
            raise AttributeError("the chain has no steps yet: run the sampler first")
        last = self.steps - 1
        coords, log_prob = self.get_chain(discard=last), self.get_log_prob(discard=last)
        assert coords is not None
        assert log_prob is not None
        return State(coords[0], log_prob=log_prob[0], random_state=self.random_state)

    def _count_accepted(self) -> np.ndarray:
        def accepted_from(begin: int) -> Callable[[Any], np.ndarray]:
            return lambda file: np.asarray(file["accepted"][begin : min(begin + 4096, self.committed_steps)])

        total = np.zeros(self.shape[0])
        for begin in range(0, self.committed_steps, 4096):
            total += self._read("read the acceptance", accepted_from(begin)).sum(axis=0)
        return total


def writer_at_work(path: Path) -> bool:
    """Whether the lock file of a writer lies beside ``path``."""
    return path.with_name(path.name + ".lock").exists()
