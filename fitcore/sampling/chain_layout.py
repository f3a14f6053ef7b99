"""Making, opening and checking the HDF5 file of a chain."""

from __future__ import annotations

import contextlib
import os
from pathlib import Path
from typing import Any, Literal

import numpy as np

from fitcore.sampling.chain_format import (
    FORMAT_NAME,
    FORMAT_VERSION,
    MAIN_DATASETS,
    STATE_WORDS,
    ChainHeader,
    committed_blocks,
    store_errors,
)
from observables.errors import StoreError

__all__ = ["dataset", "describe", "give_back", "lay_out", "open_checked", "publish"]

_SIGNATURE = b"\x89HDF\r\n\x1a\n"


def give_back(descriptor: int, size: int) -> None:
    """Cut reserved room that was not needed, never below what the HDF5 superblock calls the end of file."""
    # Superblock of the earliest format: the end-of-file address is the 8 bytes at offset 40.
    end = int.from_bytes(os.pread(descriptor, 8, 40), "little")
    if size >= end and os.fstat(descriptor).st_size > size:
        os.ftruncate(descriptor, size)


def describe(data: Any, unit: str, long_name: str) -> None:
    data.attrs["units"] = unit
    data.attrs["long_name"] = long_name


def dataset(group: Any, name: str, value: Any, unit: str, long_name: str) -> None:
    describe(group.create_dataset(name, data=value), unit, long_name)


def lay_out(file: Any, header: ChainHeader, block_steps: int) -> None:
    walkers, n = len(header.ensembles), len(header.parameter_names)
    file.attrs["format_name"] = FORMAT_NAME
    file.attrs["format_version"] = np.int64(FORMAT_VERSION)
    file.attrs["header_checksum"] = np.int64(header.checksum())
    for name, text in header.as_attributes().items():
        file.attrs[name] = text
    chain = file.create_dataset(
        "chain", (0, walkers, n), np.float64, maxshape=(None, walkers, n), chunks=(block_steps, walkers, n)
    )
    describe(chain, "as listed in parameter_units", "free parameters")
    chain.attrs["ensembles"] = np.array(header.ensembles, dtype=np.int64)
    chain.attrs["block_steps"] = np.int64(block_steps)
    columns: tuple[tuple[str, Any, str], ...] = (
        ("log_posterior", np.float64, "log posterior density, normalisation of the likelihood omitted"),
        ("accepted", np.uint8, "1 where the proposal was accepted"),
    )
    for name, dtype, long_name in columns:
        data = file.create_dataset(
            name, (0, walkers), dtype, maxshape=(None, walkers), chunks=(block_steps, walkers)
        )
        describe(data, "1", long_name)
    states = file.create_dataset(
        "random_state", (0, STATE_WORDS), np.uint32, maxshape=(None, STATE_WORDS), chunks=(8, STATE_WORDS)
    )
    describe(states, "1", "generator state after each block")
    dataset(file, "committed_steps", np.int64(0), "1", "rows beyond this number do not exist")
    file.create_group("derived")
    file.create_group("proposal")
    book = file.create_group("bookkeeping")
    book.create_group("derived")
    tables: tuple[tuple[str, Any, str], ...] = (
        ("block_end", np.int64, "number of steps after each block"),
        ("block_checksum", np.uint32, "CRC-32 of each block"),
    )
    for name, dtype, long_name in tables:
        describe(book.create_dataset(name, (0,), dtype, maxshape=(None,), chunks=(1024,)), "1", long_name)
    dataset(book, "closed_at", np.int64(0), "1", "committed_steps at the last orderly close, -1 while open")


def publish(partial: Path, path: Path) -> None:
    """Give the finished file its name, failing when that name is taken."""
    try:
        os.link(partial, path)
    except FileExistsError as error:
        raise StoreError(f"{path}: exists already; resume it, or choose another name") from error
    except OSError:  # a file system without hard links; the lock keeps other writers of ours away
        partial.rename(path)
    else:
        partial.unlink()


def open_checked(path: Path, mode: Literal["r", "r+"]) -> tuple[Any, ChainHeader, tuple[str, ...]]:
    """Open and check everything but the blocks' checksums."""
    import h5py

    if not path.exists():
        raise StoreError(f"{path}: does not exist")
    with store_errors(path, "open the file (damaged, truncated, or not HDF5)"):
        # The library itself takes an empty file for an HDF5 file without content.
        with path.open("rb") as stream:
            if stream.read(len(_SIGNATURE)) != _SIGNATURE:
                raise OSError("the HDF5 signature is missing")
        file = h5py.File(path, mode, locking=False)
    try:
        with store_errors(path, "read the header (the file is damaged)"):
            return file, *_check(path, file)
    except BaseException:
        with contextlib.suppress(Exception):
            file.close()
        raise


def _check(path: Path, file: Any) -> tuple[ChainHeader, tuple[str, ...]]:
    if file.attrs.get("format_name") != FORMAT_NAME:
        groups = ", ".join(f"{k} {getattr(v, 'shape', '')}".strip() for k, v in file.items()) or "nothing"
        raise StoreError(f"{path}: is an HDF5 file but not a chain file; it holds {groups}")
    version = int(file.attrs["format_version"])
    if version > FORMAT_VERSION:
        raise StoreError(
            f"{path}: format version {version} is newer than {FORMAT_VERSION}, the newest this program reads; "
            "update weakmix"
        )
    missing = [name for name in MAIN_DATASETS if name not in file]
    if version < 1 or missing:
        raise StoreError(
            f"{path}: damaged: format version {version}, missing: {', '.join(missing) or 'none'}"
        )
    chain = file["chain"]
    header = ChainHeader.from_attributes(
        {k: v for k, v in file.attrs.items() if k in ChainHeader.__dataclass_fields__},
        tuple(int(e) for e in chain.attrs["ensembles"]),
    )
    if header.checksum() != int(file.attrs["header_checksum"]):
        raise StoreError(f"{path}: damaged: the header does not match its checksum")
    walkers, n = len(header.ensembles), len(header.parameter_names)
    committed = int(file["committed_steps"][()])
    ends = file["bookkeeping/block_end"][:]
    blocks = committed_blocks(ends, committed)
    closed_at = int(file["bookkeeping/closed_at"][()])
    consistent = (
        chain.shape[1:] == (walkers, n)
        and chain.dtype == np.float64
        and file["log_posterior"].shape[1:] == (walkers,)
        and file["accepted"].shape[1:] == (walkers,)
        and committed >= 0
        and all(len(file[name]) >= committed for name in ("chain", "log_posterior", "accepted"))
        and blocks >= 0
        and np.all(np.diff(ends[:blocks], prepend=0) > 0)
        and min(len(file["random_state"]), len(file["bookkeeping/block_checksum"])) >= blocks
        and closed_at in (-1, committed)
    )
    if not consistent:
        raise StoreError(
            f"{path}: damaged: {committed} committed steps ({closed_at} at the last close) do not fit its tables "
            f"({len(ends)} blocks, {len(chain)} rows of {chain.shape[1:]}, expected {(walkers, n)})"
        )
    notices: tuple[str, ...] = ()
    if len(chain) > committed:
        notices = (
            f"{len(chain) - committed} steps after step {committed} were being written when the run stopped; "
            "they are ignored",
        )
    return header, notices
