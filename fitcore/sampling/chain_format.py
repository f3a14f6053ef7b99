"""The chain file's format: names, header, checksums, and errors that say what is wrong.

Layout (HDF5, earliest library version, every dataset with an explicit type and ``units``)::

    /chain             float64 (steps, walkers, parameters)
    /log_posterior     float64 (steps, walkers)
    /accepted          uint8   (steps, walkers)     1 where the proposal of that step was accepted
    /random_state      uint32  (blocks, 628)        generator state after each block
    /committed_steps   int64   ()                   rows beyond this number do not exist
    /derived/NAME      float64 or complex128 (steps, walkers), added later
    /proposal/...      float64                      the tuned independence proposal of the run
    /bookkeeping/block_end        int64 (blocks,)   number of steps after each block
    /bookkeeping/block_checksum   uint32 (blocks,)  CRC-32 of the block's rows in the first four datasets
    /bookkeeping/derived/NAME     uint32 (blocks,)  CRC-32 of the block's rows in /derived/NAME
    /bookkeeping/closed_at        int64 ()          committed_steps at the last orderly close, -1 while open

The attribute ``ensembles`` of ``/chain`` holds one number per walker: walkers of equal number form one
ensemble, and ensembles are independent of each other. The 628 words of a generator state are the 624
words of the Mersenne Twister key, its position, the flag and the two halves of the stored normal deviate.
"""

from __future__ import annotations

import contextlib
import difflib
import json
import sys
import zlib
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from observables.errors import StoreError

__all__ = ["FORMAT_NAME", "FORMAT_VERSION", "ChainHeader", "describe_problem", "differences"]

FORMAT_NAME = "weakmix-chain"
FORMAT_VERSION = 1
STATE_WORDS = 628

MAIN_DATASETS = ("chain", "log_posterior", "accepted", "random_state", "committed_steps")


@dataclass(frozen=True)
class ChainHeader:
    """What a chain file says about itself; fixed when the file is made.

    Attributes
    ----------
    parameter_names, parameter_units, parameter_latex : tuple of str
        In the order of the chain's last axis.
    ensembles : tuple of int
        Ensemble number of every walker.
    fingerprint : str
        Fingerprint of the problem sampled.
    description : dict
        The settings of that problem by name, to explain a refusal.
    inputs_toml, inputs_sha256, hypothesis, theory_errors : str
        The resolved inputs and how they were used.
    sampler : dict
        Settings of the sampler that a resumed run must repeat.
    seed : str
        Entropy of the run's seed sequence, as JSON.
    versions : dict
        Versions of the software that made the file.
    created : str
        UTC time, ISO 8601.
    """

    parameter_names: tuple[str, ...]
    ensembles: tuple[int, ...]
    fingerprint: str
    parameter_units: tuple[str, ...] = ()
    parameter_latex: tuple[str, ...] = ()
    description: Mapping[str, Any] = field(default_factory=dict)
    inputs_toml: str = ""
    inputs_sha256: str = ""
    hypothesis: str = "standard"
    theory_errors: str = "as-given"
    sampler: Mapping[str, Any] = field(default_factory=dict)
    seed: str = ""
    versions: Mapping[str, str] = field(default_factory=dict)
    created: str = ""

    @classmethod
    def for_problem(
        cls,
        problem: Any,
        ensembles: tuple[int, ...],
        *,
        sampler: Mapping[str, Any] | None = None,
        seed: str = "",
    ) -> ChainHeader:
        """Header of a new chain of ``problem``."""
        description = describe_problem(problem)
        names = tuple(problem.parameter_names)
        parameters = tuple(problem.parameters)
        return cls(
            parameter_names=names,
            ensembles=ensembles,
            fingerprint=str(problem.fingerprint),
            parameter_units=tuple(str(getattr(p, "unit", "1")) for p in parameters),
            parameter_latex=tuple(str(getattr(p, "latex", "") or p.name) for p in parameters),
            description={k: v for k, v in description.items() if k != "inputs"},
            inputs_toml=description.get("inputs", ""),
            inputs_sha256=str(getattr(getattr(problem, "inputs", None), "sha256", "")),
            hypothesis=str(description["hypothesis"]),
            theory_errors=str(description["theory errors"]),
            sampler=dict(sampler or {}),
            seed=seed,
            versions=software_versions(),
            created=datetime.now(UTC).isoformat(timespec="seconds"),
        )

    def as_attributes(self) -> dict[str, str]:
        """The header as text attributes of the file's root."""
        values = asdict(self)
        return {
            key: value if isinstance(value, str) else json.dumps(value, sort_keys=True)
            for key, value in values.items()
            if key != "ensembles"
        }

    @classmethod
    def from_attributes(cls, attributes: Mapping[str, str], ensembles: tuple[int, ...]) -> ChainHeader:
        """The header back from the text attributes."""
        decoded: dict[str, Any] = {}
        for name in cls.__dataclass_fields__:
            if name == "ensembles":
                decoded[name] = ensembles
            elif name in ("parameter_names", "parameter_units", "parameter_latex"):
                decoded[name] = tuple(json.loads(attributes[name]))
            elif name in ("description", "sampler", "versions"):
                decoded[name] = json.loads(attributes[name])
            else:
                decoded[name] = str(attributes[name])
        return cls(**decoded)

    def checksum(self) -> int:
        """CRC-32 of the header's content."""
        text = json.dumps([self.as_attributes(), [int(e) for e in self.ensembles]], sort_keys=True)
        return zlib.crc32(text.encode())


def describe_problem(problem: Any) -> dict[str, Any]:
    """Everything that makes two problems different, by name, as plain values."""
    inputs = getattr(problem, "inputs", None)
    resolve = getattr(inputs, "resolved_toml", None)
    parameters: dict[str, Any] = {}
    for p in problem.parameters:
        prior = getattr(p, "prior", None)
        parameters[p.name] = {
            "lower": _plain(p.lower),
            "upper": _plain(p.upper),
            "unit": str(getattr(p, "unit", "1")),
            "prior": None if prior is None else str(prior),
        }
    return {
        "inputs": resolve() if callable(resolve) else "",
        "hypothesis": str(getattr(problem, "hypothesis", "standard")),
        "theory errors": str(getattr(problem, "theory_errors", "as-given")),
        "parameters": parameters,
        "fixed": {k: _plain(v) for k, v in dict(getattr(problem, "fixed", None) or {}).items()},
    }


def _plain(value: Any) -> float | str | None:
    if value is None:
        return None
    number = float(value)
    return number if np.isfinite(number) else str(number)


def differences(header: ChainHeader, problem: Any) -> list[str]:
    """What differs between the problem of a chain and ``problem``; empty when nothing does."""
    if header.fingerprint == str(problem.fingerprint):
        return []
    now = describe_problem(problem)
    found: list[str] = []
    then_names, now_names = list(header.parameter_names), list(problem.parameter_names)
    gone = [n for n in then_names if n not in now_names]
    new = [n for n in now_names if n not in then_names]
    if gone:
        found.append("parameters only in the file: " + ", ".join(gone))
    if new:
        found.append("parameters only in the present problem: " + ", ".join(new))
    found.extend(
        f"{key}: {header.description.get(key)} in the file, {now[key]} now"
        for key in ("hypothesis", "theory errors")
        if header.description.get(key) != now[key]
    )
    for key in ("parameters", "fixed"):
        then_values = header.description.get(key, {})
        found.extend(
            f"{key} {name}: {then_values[name]} in the file, {now[key][name]} now"
            for name in sorted(set(then_values) & set(now[key]))
            if then_values[name] != now[key][name]
        )
    if header.inputs_toml != now["inputs"]:
        lines = difflib.unified_diff(
            header.inputs_toml.splitlines(), now["inputs"].splitlines(), "file", "now", n=0, lineterm=""
        )
        changed = [line for line in lines if not line.startswith(("---", "+++", "@@"))]
        found.append("inputs: (- in the file, + now)")
        found += ["    " + line for line in changed[:20]]
        if len(changed) > 20:
            found.append(f"    and {len(changed) - 20} more lines")
    if not found:
        found.append(f"fingerprint: {header.fingerprint} in the file, {problem.fingerprint} now")
    return found


def block_checksum(start: int, *arrays: np.ndarray) -> int:
    """CRC-32 of a block: its first step's number, then the arrays' bytes."""
    checksum = zlib.crc32(int(start).to_bytes(8, "little"))
    for array in arrays:
        checksum = zlib.crc32(np.ascontiguousarray(array).data, checksum)
    return checksum


def committed_blocks(ends: np.ndarray, committed: int) -> int:
    """Number of blocks that make up ``committed`` steps; -1 when no block ends there.

    Entries after the last committed block may hold anything: a writer may have died while it wrote them.
    """
    if committed == 0:
        return 0
    found = np.flatnonzero(ends == committed)
    return int(found[0]) + 1 if len(found) else -1


def pack_state(state: Any) -> np.ndarray:
    """A legacy generator state as 628 words."""
    name, key, position, has_normal, normal = state
    if name != "MT19937":
        raise StoreError(f"cannot store the state of a {name} generator; only MT19937")
    words = np.empty(STATE_WORDS, dtype=np.uint32)
    words[:624] = key
    words[624:626] = position, has_normal
    words[626:] = np.array([normal], dtype="<f8").view("<u4")
    return words


def unpack_state(words: np.ndarray) -> tuple[str, np.ndarray, int, int, float]:
    """The legacy generator state of 628 words."""
    normal = float(np.asarray(words[626:], dtype="<u4").view("<f8")[0])
    return "MT19937", np.array(words[:624], dtype=np.uint32), int(words[624]), int(words[625]), normal


def software_versions() -> dict[str, str]:
    """Versions of what a chain depends on."""
    from importlib import metadata

    versions = {"python": ".".join(str(v) for v in sys.version_info[:3])}
    for package in ("weakmix", "numpy", "scipy", "emcee", "h5py"):
        with contextlib.suppress(metadata.PackageNotFoundError):
            versions[package] = metadata.version(package)
    return versions


@contextlib.contextmanager
def store_errors(path: Path, doing: str) -> Iterator[None]:
    """Turn whatever the HDF5 library raises into a StoreError that names the file."""
    try:
        yield
    except StoreError:
        raise
    except (OSError, RuntimeError, KeyError, ValueError, TypeError, AttributeError) as error:
        reason = str(error).strip().strip("'\"") or type(error).__name__
        raise StoreError(f"{path}: cannot {doing}: {reason}") from error
