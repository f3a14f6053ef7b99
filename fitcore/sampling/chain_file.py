"""Posterior chains in an HDF5 file that survives kills, full disks and second writers.

Blocks of steps are committed in two phases: the data, a flush, the number of committed steps, a flush and
fsync (which runs while sampling goes on, and is waited for before the next block). Nothing beyond that number
is ever trusted, so a writer may die at any moment. Space for a block is reserved before the first byte of it
is written; a full disk therefore stops a run without touching the file. The layout is documented in
:mod:`fitcore.sampling.chain_format`.
"""

from __future__ import annotations

import contextlib
import os
import threading
import time
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.chain_format import ChainHeader, block_checksum, pack_state, store_errors
from fitcore.sampling.chain_layout import dataset, describe, give_back, lay_out, open_checked, publish
from fitcore.sampling.chain_reading import READ_ATTEMPTS, ChainReader, writer_at_work
from fitcore.sampling.lock import WriterLock
from observables.errors import StoreError

__all__ = ["ChainFile"]

_COMMIT_SECONDS = 30.0
_RESERVE_MARGIN = 1 << 20


class ChainFile(ChainReader):
    """One chain in one HDF5 file; implements the backend interface of emcee.

    Make it with :meth:`create`, :meth:`resume` or :meth:`open`, and use it as a context manager.
    """

    def __init__(
        self, path: Path, file: Any, header: ChainHeader, lock: WriterLock | None, notices: tuple[str, ...]
    ) -> None:
        super().__init__(path, file, header, notices, writing=lock is not None)
        self._lock = lock
        self._last_commit = time.monotonic()
        self._failed = False
        self._storage: tuple[np.ndarray, ...] = ()
        self._sync: threading.Thread | None = None
        self._sync_error: OSError | None = None

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
        for attempt in range(READ_ATTEMPTS):
            try:
                file, header, notices = open_checked(path, "r")
                with file, store_errors(path, "read the file"):
                    return cls(path, file, header, None, notices)
            except StoreError:
                # A writer may be in the middle of a flush; it takes milliseconds.
                if attempt == READ_ATTEMPTS - 1 or not writer_at_work(path):
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
                self._finish_sync()
                with store_errors(self.path, "close the file"):
                    self._file["bookkeeping/closed_at"][()] = self.committed_steps
                    self._file.flush()
                    descriptor = self._file.id.get_vfd_handle()
                    give_back(descriptor, self._file.id.get_filesize())
                    os.fsync(descriptor)
        finally:
            if self._sync is not None:
                self._sync.join()
            file, self._file = self._file, None
            try:
                with store_errors(self.path, "close the file"):
                    file.close()
            finally:
                self._lock.release()

    def __enter__(self) -> ChainFile:
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

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
        if not self._storage:
            rows = self.block_steps
            self._storage = (
                np.empty((rows, *self.shape)),
                np.empty((rows, walkers)),
                np.empty((rows, walkers), bool),
            )
        step = len(self._buffer)
        chain, log_posterior, taken = (part[step] for part in self._storage)
        chain[...], log_posterior[...], taken[...] = state.coords, state.log_prob, accepted
        self._buffer.append((chain, log_posterior, taken))
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
        chain, log_posterior, accepted = (part[: end - begin] for part in self._storage)
        accepted = accepted.view(np.uint8)
        words = pack_state(self._buffer_state)
        number, file = len(self._block_ends), self._file
        try:
            with store_errors(self.path, f"write steps {begin} to {end - 1}"):
                self._finish_sync()
                self._reserve(chain.nbytes + log_posterior.nbytes + accepted.nbytes + words.nbytes)
                rows = slice(begin, end)
                for name, value in (
                    ("chain", chain),
                    ("log_posterior", log_posterior),
                    ("accepted", accepted),
                ):
                    data = file[name]
                    if len(data) < end:
                        data.resize(end, axis=0)
                    if name == "chain" and begin % self.block_steps == 0 and len(value) == self.block_steps:
                        # Exactly one chunk, unfiltered: its bytes go to the disk without another copy.
                        data.id.write_direct_chunk((begin, 0, 0), value)
                    else:
                        data[rows] = value
                checksum = block_checksum(begin, chain, log_posterior, accepted, words)
                for name, entry in (
                    ("random_state", words),
                    ("bookkeeping/block_end", np.int64(end)),
                    ("bookkeeping/block_checksum", np.uint32(checksum)),
                ):
                    data = file[name]
                    if len(data) <= number:
                        data.resize(number + 1, axis=0)
                    data[number] = entry
                file.flush()
                file["committed_steps"][()] = end
                file.flush()
                self._start_sync(file.id.get_vfd_handle())
        except StoreError:
            self._failed = True
            raise
        self._block_ends = np.append(self._block_ends, end)
        self.committed_steps = end
        self._buffer.clear()
        self._last_commit = time.monotonic()

    def _start_sync(self, descriptor: int) -> None:
        """Have the disk catch up while sampling goes on; a kill needs no disk, a power failure does."""

        def sync() -> None:
            try:
                os.fsync(descriptor)
            except OSError as error:
                self._sync_error = error

        self._sync = threading.Thread(target=sync, name="chain-sync", daemon=True)
        self._sync.start()

    def _finish_sync(self) -> None:
        """Wait for the disk; raises StoreError when it failed."""
        if self._sync is not None:
            self._sync.join()
            self._sync = None
        if self._sync_error is not None:
            error, self._sync_error = self._sync_error, None
            raise StoreError(
                f"{self.path}: the disk did not take the last block ({error.strerror}); check it, then verify the file"
            ) from error

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
