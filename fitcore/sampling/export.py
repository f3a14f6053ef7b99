"""Chains for other programs: netCDF for ArviZ, CSV, and a NumPy archive; written block by block."""

from __future__ import annotations

import csv
import os
import zipfile
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Literal

import numpy as np

from observables.errors import InputError, StoreError

__all__ = ["export"]

Format = Literal["netcdf", "csv", "npz"]


def export(
    chain: Any,
    path: str | os.PathLike[str],
    *,
    format: Format,
    thin: int = 1,
    start: int = 0,
    overwrite: bool = False,
) -> Path:
    """Write a chain, with its derived quantities, for other programs.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    path : path-like
    format : {"netcdf", "csv", "npz"}
        netcdf: groups ``posterior`` and ``sample_stats`` with dimensions (chain, draw), one chain per
        independent ensemble, its walkers one after the other within each step; ``arviz.from_netcdf`` reads
        it. csv: one row per step and walker. Both hold a complex derived quantity as two real columns,
        ``NAME_re`` and ``NAME_im``. npz: arrays ``samples`` (steps, walkers, parameters),
        ``log_posterior``, ``accepted``, ``steps``, ``ensembles``, ``parameter_names``, and ``derived_NAME``,
        complex where the quantity is.
    thin : int
        Keep every ``thin``-th step; walkers become draws, so thin by the autocorrelation time when the
        reader takes them for independent.
    start : int
        First step used.
    overwrite : bool
        Replace an existing file.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        For an unknown format or thin < 1.
    StoreError
        When the file exists, cannot be written, or the chain is empty or damaged.
    """
    path = Path(path)
    writers = {"netcdf": _netcdf, "csv": _csv, "npz": _npz}
    if format not in writers:
        raise InputError(f"format: must be one of {', '.join(writers)}, got {format!r}")
    if thin < 1 or start < 0:
        raise InputError(f"thin must be at least 1 and start at least 0, got {thin} and {start}")
    if path.exists() and not overwrite:
        raise StoreError(f"{path}: exists already; choose another name, or allow overwriting")
    if chain.steps - start <= 0:
        raise StoreError(f"{chain.path or 'the chain'}: has no steps from {start} on to export")
    partial = path.with_name(f"{path.name}.{os.getpid()}.partial")
    try:
        writers[format](chain, partial, thin, start)
        partial.replace(path)
    except StoreError:
        partial.unlink(missing_ok=True)
        raise
    except OSError as error:
        partial.unlink(missing_ok=True)
        raise StoreError(f"{path}: cannot write ({error.strerror or error})") from error
    return path


def _parts(
    chain: Any, thin: int, start: int, derived: tuple[str, ...]
) -> Iterator[tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, dict[str, np.ndarray]]]:
    """Step numbers, samples, log posterior, acceptance and derived values of the kept steps."""
    for block in chain.blocks(start, derived=derived):
        rows = slice((start - block.start) % thin, None, thin)
        numbers = np.arange(block.start, block.start + len(block.chain))[rows]
        if len(numbers):
            yield (
                numbers, block.chain[rows], block.log_posterior[rows], block.accepted[rows],
                {name: value[rows] for name, value in block.derived.items()},
            )  # fmt: skip


def _derived(chain: Any) -> tuple[str, ...]:
    """Derived quantities stored for all steps."""
    steps = getattr(chain, "derived_steps", lambda name: chain.steps)
    return tuple(name for name in chain.derived_names if steps(name) >= chain.steps)


def _split(values: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Real columns only: a complex quantity becomes its real and imaginary parts."""
    columns: dict[str, np.ndarray] = {}
    for name, value in values.items():
        if np.iscomplexobj(value):
            columns |= {f"{name}_re": value.real, f"{name}_im": value.imag}
        else:
            columns[name] = value
    return columns


def _csv(chain: Any, path: Path, thin: int, start: int) -> None:
    derived = _derived(chain)
    ensembles = chain.ensembles
    walkers = np.arange(len(ensembles))
    with path.open("w", newline="") as stream:
        writer = csv.writer(stream)
        head = ["step", "walker", "ensemble", "log_posterior", *chain.parameter_names]
        for part, (numbers, samples, log_posterior, _, values) in enumerate(
            _parts(chain, thin, start, derived)
        ):
            extra = _split(values)
            if part == 0:
                writer.writerow([*head, *extra])
            for i, number in enumerate(numbers):
                columns = [samples[i], *(value[i][:, None] for value in extra.values())]
                body = np.concatenate(columns, axis=1).tolist()
                writer.writerows(
                    [int(number), int(w), int(e), p, *row]
                    for w, e, p, row in zip(walkers, ensembles, log_posterior[i].tolist(), body, strict=True)
                )


def _npz(chain: Any, path: Path, thin: int, start: int) -> None:
    derived = _derived(chain)
    kept = len(range(start, chain.steps, thin))
    walkers, n = chain.shape
    columns = {
        "steps": ((kept,), np.int64),
        "samples": ((kept, walkers, n), np.float64),
        "log_posterior": ((kept, walkers), np.float64),
        "accepted": ((kept, walkers), np.bool_),
    }
    index = {"steps": 0, "samples": 1, "log_posterior": 2, "accepted": 3}
    with zipfile.ZipFile(path, "w", zipfile.ZIP_STORED, allowZip64=True) as archive:
        # One pass per array keeps the memory at one block; the archive format takes one member at a time.
        for name, (shape, dtype) in columns.items():
            with archive.open(f"{name}.npy", "w", force_zip64=True) as member:
                _npy_header(member, shape, dtype)
                for part in _parts(chain, thin, start, ()):
                    member.write(np.ascontiguousarray(part[index[name]], dtype=dtype).tobytes())
        for name in derived:
            with archive.open(f"derived_{name}.npy", "w", force_zip64=True) as member:
                first = next(iter(_parts(chain, thin, start, (name,))))[4][name]
                _npy_header(member, (kept, walkers), first.dtype)
                for part in _parts(chain, thin, start, (name,)):
                    member.write(np.ascontiguousarray(part[4][name]).tobytes())
        for name, array in (
            ("ensembles", np.asarray(chain.ensembles)),
            ("parameter_names", np.array(chain.parameter_names)),
        ):
            with archive.open(f"{name}.npy", "w") as member:
                np.lib.format.write_array(member, array, allow_pickle=False)


def _npy_header(stream: Any, shape: tuple[int, ...], dtype: Any) -> None:
    np.lib.format.write_array_header_2_0(
        stream,
        {"descr": np.lib.format.dtype_to_descr(np.dtype(dtype)), "fortran_order": False, "shape": shape},
    )


def _netcdf(chain: Any, path: Path, thin: int, start: int) -> None:
    """NetCDF-4 is HDF5 with dimension scales."""
    import h5py

    derived = _derived(chain)
    ensembles = np.asarray(chain.ensembles)
    labels = np.unique(ensembles)
    members = [np.flatnonzero(ensembles == label) for label in labels]
    smallest = min(len(m) for m in members)
    members = [m[:smallest] for m in members]
    draws = len(range(start, chain.steps, thin)) * smallest
    units = dict(zip(chain.parameter_names, chain.header.parameter_units, strict=False))
    with h5py.File(path, "x", track_order=True) as file:
        posterior = _group(file, "posterior", chain, len(labels), draws)
        stats = _group(file, "sample_stats", chain, len(labels), draws)
        names = tuple(chain.parameter_names)
        variables = {name: _variable(posterior, name, np.float64, units.get(name, "")) for name in names}
        first = next(iter(_parts(chain, thin, start, derived)))[4]
        for name in derived:
            unit = chain.derived_label(name)[0]
            columns = _split({name: first[name]})
            variables |= {column: _variable(posterior, column, np.float64, unit) for column in columns}
        log_posterior = _variable(stats, "lp", np.float64, "1")
        step = _variable(stats, "step", np.int64, "1")
        done = 0
        for numbers, samples, values, _, extra in _parts(chain, thin, start, derived):
            end = done + len(numbers) * smallest
            for row, own in enumerate(members):
                for k, name in enumerate(names):
                    variables[name][row, done:end] = samples[:, own, k].reshape(-1)
                for name, value in _split(extra).items():
                    variables[name][row, done:end] = value[:, own].reshape(-1)
                log_posterior[row, done:end] = values[:, own].reshape(-1)
                step[row, done:end] = np.repeat(numbers, smallest)
            done = end


def _group(file: Any, name: str, chain: Any, n_chains: int, draws: int) -> Any:
    group = file.create_group(name, track_order=True)
    for dimension, size in (("chain", n_chains), ("draw", draws)):
        scale = group.create_dataset(dimension, data=np.arange(size, dtype=np.int64))
        scale.make_scale(dimension)
    group.attrs["created_at"] = chain.header.created
    group.attrs["inference_library"] = "weakmix"
    group.attrs["fingerprint"] = chain.header.fingerprint
    return group


def _variable(group: Any, name: str, dtype: Any, unit: str) -> Any:
    shape = (len(group["chain"]), len(group["draw"]))
    data = group.create_dataset(name, shape, dtype)
    data.dims[0].attach_scale(group["chain"])
    data.dims[1].attach_scale(group["draw"])
    if unit:
        data.attrs["units"] = unit
    return data
