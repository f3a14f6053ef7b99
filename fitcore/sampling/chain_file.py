"""Posterior chains in an HDF5 file that survives kills, full disks and second writers.

Blocks of steps are committed in two phases: the data, a flush, the number of committed steps, a flush and
fsync. Nothing beyond that number is ever trusted, so a writer may die at any moment. Space for a block is
reserved before the first byte of it is written; a full disk therefore stops a run without touching the
file. The layout is documented in :mod:`fitcore.sampling.chain_format`.
"""

from __future__ import annotations

import contextlib
import os
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.chain_format import (
    ChainHeader,
    block_checksum,
    differences,
    pack_state,
    store_errors,
    unpack_state,
)
from fitcore.sampling.chain_layout import dataset, describe, give_back, lay_out, open_checked, publish
from fitcore.sampling.lock import WriterLock
from observables.errors import StoreError, UnknownNameError

__all__ = ["Block", "ChainFile"]

_COMMIT_SECONDS = 30.0
_RESERVE_MARGIN = 1 << 20
_READ_ATTEMPTS = 4


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


class ChainFile:
    """One chain in one HDF5 file; implements the backend interface of emcee.

    Make it with :meth:`create`, :meth:`resume` or :meth:`open`, and use it as a context manager.
    """

    def __init__(
        self, path: Path, file: Any, header: ChainHeader, lock: WriterLock | None, notices: tuple[str, ...]
    ) -> None:
        self.path = path
        self.header = header
        self.notices = notices
        # A reader keeps no file open: it would hinder a writer in the same process.
        self._file: Any = None if lock is None else file
        self._lock = lock
        self._buffer: list[tuple[np.ndarray, np.ndarray, np.ndarray]] = []
        self._buffer_state: Any = None
        self._last_commit = time.monotonic()
        self._failed = False
        self.committed_steps = int(file["committed_steps"][()])
        ends = file["bookkeeping/block_end"][:]
        self._block_ends = ends[: int(np.searchsorted(ends, self.committed_steps, side="right"))]
        self.block_steps = int(file["chain"].attrs["block_steps"])
        self._accepted_total: np.ndarray | None = None

    # -- making and opening ----------------------------------------------------------------------------

    @classmethod
    def create(
        cls, path: str | os.PathLike[str], header: ChainHeader, *, block_steps: int = 128
    ) -> ChainFile:
        """Start a new file; never overwrites an existing one.

        Parameters
        ----------
        path : path-like
        header : ChainHeader
        block_steps : int
            Steps per committed block, 1 to 4096 (64 to 256 are sensible).

        Raises
        ------
        StoreError
            When the file exists, the folder cannot be written, or another writer is at work.
        """
        import h5py

        path = Path(path)
        if not 1 <= block_steps <= 4096:
            raise StoreError(f"{path}: block_steps must be from 1 to 4096, got {block_steps}")
        lock = WriterLock(path)
        partial = path.with_name(f"{path.name}.{os.getpid()}.partial")
        try:
            if path.exists():
                raise StoreError(f"{path}: exists already; resume it, or choose another name")
            with store_errors(path, "create the file"):
                partial.unlink(missing_ok=True)
                # The complete empty file appears under its name in one step: no reader meets half of it.
                with h5py.File(partial, "x", libver="earliest", locking=False) as file:
                    lay_out(file, header, block_steps)
                    file.flush()
                    os.fsync(file.id.get_vfd_handle())
                publish(partial, path)
            return cls._open_writer(path, lock)
        except BaseException:
            with contextlib.suppress(OSError):
                partial.unlink(missing_ok=True)
            lock.release()
            raise

    @classmethod
    def resume(cls, path: str | os.PathLike[str], problem: Any = None) -> ChainFile:
        """Open an existing file for more steps (or derived quantities).

        Parameters
        ----------
        path : path-like
        problem : problem-like, optional
            When given, its fingerprint must be the file's.

        Raises
        ------
        StoreError
            When the file is missing, damaged, of a newer format, locked, or of another problem.
        """
        path = Path(path)
        if not path.exists():
            raise StoreError(f"{path}: does not exist")
        lock = WriterLock(path)
        try:
            chain = cls._open_writer(path, lock)
            if problem is not None:
                try:
                    chain.check_problem(problem)
                except StoreError:
                    chain._file.close()
                    raise
            return chain
        except BaseException:
            lock.release()
            raise

    @classmethod
    def _open_writer(cls, path: Path, lock: WriterLock) -> ChainFile:
        file, header, notices = open_checked(path, "r+")
        with store_errors(path, "open the file for writing"):
            file["bookkeeping/closed_at"][()] = -1
            file.flush()
            return cls(path, file, header, lock, notices)

    @classmethod
    def open(cls, path: str | os.PathLike[str]) -> ChainFile:
        """Open a file for reading: what is committed at this moment.

        Takes no lock and writes nothing; may be used while a writer is at work.

        Raises
        ------
        StoreError
            When the file is missing, damaged or of a newer format.
        """
        path = Path(path)
        for attempt in range(_READ_ATTEMPTS):
            try:
                file, header, notices = open_checked(path, "r")
                with file, store_errors(path, "read the file"):
                    return cls(path, file, header, None, notices)
            except StoreError:
                # A writer may be in the middle of a flush; it takes milliseconds.
                if attempt == _READ_ATTEMPTS - 1 or not path.with_name(path.name + ".lock").exists():
                    raise
                time.sleep(0.05 * (attempt + 1))
        raise AssertionError("unreachable")

    def close(self) -> None:
        """Commit what is buffered, close the file and give the lock back; a reader has nothing to close."""
        if self._file is None or self._lock is None:
            return
        try:
            if not self._failed:
                self.commit()
                with store_errors(self.path, "close the file"):
                    self._file["bookkeeping/closed_at"][()] = self.committed_steps
                    self._file.flush()
                    descriptor = self._file.id.get_vfd_handle()
                    give_back(descriptor, self._file.id.get_filesize())
                    os.fsync(descriptor)
        finally:
            file, self._file = self._file, None
            try:
                with store_errors(self.path, "close the file"):
                    file.close()
            finally:
                self._lock.release()

    @contextlib.contextmanager
    def _opened(self, doing: str) -> Iterator[Any]:
        """The open file of a writer, or the file opened for this one use."""
        with store_errors(self.path, doing):
            if self._lock is not None:
                yield self._file
            else:
                import h5py

                with h5py.File(self.path, "r", locking=False) as file:
                    yield file

    def __enter__(self) -> ChainFile:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

    # -- what it holds -------------------------------------------------------------------------------

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
        """Number of steps, buffered ones included."""
        return self.committed_steps + len(self._buffer)

    @property
    def derived_names(self) -> tuple[str, ...]:
        """Names of the stored derived quantities."""
        with self._opened("read the derived quantities") as file:
            return tuple(sorted(file["derived"]))

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
        with self._opened(f"read steps {begin} to {end - 1}") as file:
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

    # -- small stores beside the chain -----------------------------------------------------------------

    def write_proposal(self, arrays: Mapping[str, np.ndarray]) -> None:
        """Store the tuned proposal of the run; only before the first committed step."""
        if self.committed_steps:
            raise StoreError(f"{self.path}: the proposal is fixed once steps are committed")
        with store_errors(self.path, "write the proposal"):
            self._reserve(sum(np.asarray(a).nbytes for a in arrays.values()))
            group = self._file["proposal"]
            for name in list(group):
                del group[name]
            for name, array in arrays.items():
                dataset(group, name, np.asarray(array, dtype=np.float64), "1", "tuned proposal: " + name)
            self._file.flush()

    def read_proposal(self) -> dict[str, np.ndarray]:
        """The arrays of :meth:`write_proposal`."""
        with self._opened("read the proposal") as file:
            return {name: data[()] for name, data in file["proposal"].items()}

    def derived_steps(self, name: str) -> int:
        """Number of leading steps for which a derived quantity is stored."""
        with self._opened("read the derived quantities") as file:
            if name not in file["derived"]:
                return 0
            return int(file[f"derived/{name}"].attrs["committed_steps"])

    def derived_label(self, name: str) -> tuple[str, str]:
        """Unit and symbol (LaTeX) of a stored derived quantity."""
        with self._opened("read the derived quantities") as file:
            if name not in file["derived"]:
                raise UnknownNameError(name, "derived quantity of this chain", tuple(file["derived"]))
            attributes = file[f"derived/{name}"].attrs
            return str(attributes["units"]), str(attributes["latex"])

    def write_derived(
        self, name: str, block: int, values: np.ndarray, *, unit: str = "1", title: str = "", latex: str = ""
    ) -> None:
        """Store a derived quantity for committed block number ``block`` (blocks in order)."""
        end = int(self._block_ends[block])
        begin = int(self._block_ends[block - 1]) if block else 0
        complex_values = np.iscomplexobj(values)
        with store_errors(self.path, f"write the derived quantity {name}"):
            self._reserve(values.nbytes)
            if name not in self._file["derived"]:
                walkers = self.shape[0]
                dtype = np.complex128 if complex_values else np.float64
                data = self._file["derived"].create_dataset(
                    name, (0, walkers), dtype, maxshape=(None, walkers), chunks=(self.block_steps, walkers)
                )
                describe(data, unit, title or name)
                data.attrs["latex"] = latex
                data.attrs["committed_steps"] = np.int64(0)
                sums = self._file["bookkeeping/derived"].create_dataset(
                    name, (0,), np.uint32, maxshape=(None,), chunks=(1024,)
                )
                describe(sums, "1", "CRC-32 per block")
            data = self._file[f"derived/{name}"]
            sums = self._file[f"bookkeeping/derived/{name}"]
            if int(data.attrs["committed_steps"]) != begin:
                raise StoreError(f"{self.path}: derived {name}: blocks must be written in order")
            values = np.asarray(values, dtype=data.dtype)
            data.resize(end, axis=0)
            data[begin:end] = values
            sums.resize(block + 1, axis=0)
            sums[block] = block_checksum(begin, values)
            self._file.flush()
            data.attrs.modify("committed_steps", np.int64(end))
            self._file.flush()

    # -- the backend interface of emcee ---------------------------------------------------------------

    initialized = True

    @property
    def shape(self) -> tuple[int, int]:
        """(walkers, parameters)."""
        return len(self.header.ensembles), len(self.header.parameter_names)

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
        with self._opened("read the generator state") as file:
            return unpack_state(file["random_state"][len(self._block_ends) - 1])

    def reset(self, walkers: int, parameters: int) -> None:
        """Refuse to wipe steps or change the shape; a no-op on an empty chain.

        Raises
        ------
        StoreError
            Always, unless the chain is empty and the shape the same.
        """
        if self.steps or (walkers, parameters) != self.shape:
            raise StoreError(
                f"{self.path}: holds {self.steps} steps of {self.shape[0]} walkers x {self.shape[1]} parameters "
                "and is never wiped; use another file name"
            )

    def has_blobs(self) -> bool:
        """Always False: derived quantities are computed afterwards."""
        return False

    def grow(self, steps: int, blobs: object) -> None:
        """Accept the announcement of more steps; blobs are refused."""
        if blobs is not None:
            raise ValueError("a chain file stores no blobs; derive quantities afterwards")

    def save_step(self, state: Any, accepted: np.ndarray) -> None:
        """Take one step; commits when a block is full or 30 s have passed."""
        walkers, _ = self.shape
        if self._lock is None:
            raise StoreError(f"{self.path}: opened for reading only")
        if state.blobs is not None:
            raise ValueError("a chain file stores no blobs; derive quantities afterwards")
        if state.coords.shape != self.shape:
            raise ValueError(f"invalid coordinate dimensions; expected {self.shape}")
        if state.log_prob.shape != (walkers,) or np.shape(accepted) != (walkers,):
            raise ValueError(f"invalid log probability or acceptance size; expected {walkers}")
        total = self.accepted
        self._buffer.append(
            (np.array(state.coords, dtype=np.float64), np.array(state.log_prob, dtype=np.float64),
             np.array(accepted, dtype=bool))
        )  # fmt: skip
        self._buffer_state = state.random_state
        self._accepted_total = total + accepted
        due = time.monotonic() - self._last_commit > _COMMIT_SECONDS
        if len(self._buffer) >= self.block_steps or due:
            self.commit()

    def commit(self) -> None:
        """Write the buffered steps as one block; afterwards they survive a kill.

        Raises
        ------
        StoreError
            When the disk is full or fails; what was committed before stays readable.
        """
        if not self._buffer:
            return
        begin, end = self.committed_steps, self.steps
        chain, log_posterior, accepted = (np.array(part) for part in zip(*self._buffer, strict=True))
        accepted = accepted.astype(np.uint8)
        words = pack_state(self._buffer_state)
        number, file = len(self._block_ends), self._file
        try:
            with store_errors(self.path, f"write steps {begin} to {end - 1}"):
                self._reserve(chain.nbytes + log_posterior.nbytes + accepted.nbytes + words.nbytes)
                rows = slice(begin, end)
                for name, value in (
                    ("chain", chain),
                    ("log_posterior", log_posterior),
                    ("accepted", accepted),
                ):
                    if len(file[name]) < end:
                        file[name].resize(end, axis=0)
                    file[name][rows] = value
                checksum = block_checksum(begin, chain, log_posterior, accepted, words)
                for name, entry in (
                    ("random_state", words),
                    ("bookkeeping/block_end", np.int64(end)),
                    ("bookkeeping/block_checksum", np.uint32(checksum)),
                ):
                    if len(file[name]) <= number:
                        file[name].resize(number + 1, axis=0)
                    file[name][number] = entry
                file.flush()
                file["committed_steps"][()] = end
                file.flush()
                os.fsync(file.id.get_vfd_handle())
        except StoreError:
            self._failed = True
            raise
        self._block_ends = np.append(self._block_ends, end)
        self.committed_steps = end
        self._buffer.clear()
        self._last_commit = time.monotonic()

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
        with self._opened(f"read {dataset}") as file:
            stored = file[dataset][first : self.committed_steps : thin]
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

    # -- inside ----------------------------------------------------------------------------------------

    def _count_accepted(self) -> np.ndarray:
        total = np.zeros(self.shape[0])
        with self._opened("read the acceptance") as file:
            for begin in range(0, self.committed_steps, 4096):
                total += file["accepted"][begin : min(begin + 4096, self.committed_steps)].sum(axis=0)
        return total

    def _reserve(self, size: int) -> None:
        """Make sure that ``size`` more bytes fit, before the HDF5 library writes any of them.

        A write that fails inside the library leaves its own tables half updated, and the file unreadable.
        """
        descriptor = self._file.id.get_vfd_handle()
        need = size + size // 8 + _RESERVE_MARGIN
        try:
            if hasattr(os, "posix_fallocate"):
                # The library does not see the room made behind its back: it goes on where it stopped.
                present = os.fstat(descriptor).st_size
                missing = self._file.id.get_filesize() + need - present
                if missing > 0:
                    os.posix_fallocate(descriptor, present, missing)
            else:
                import shutil

                if shutil.disk_usage(self.path.parent).free < need:
                    raise OSError("no space left on the device")
        except OSError as error:
            self._failed = True
            raise StoreError(
                f"{self.path}: no room for {need} more bytes ({error.strerror or error}); "
                f"{self.committed_steps} steps are safe in the file. Make room and resume"
            ) from error
