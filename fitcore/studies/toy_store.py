"""Finished blocks of pseudo-experiments in an append-only file, so that nothing is computed twice.

JSON lines: a header that says what is computed, then one line per finished block with its checksum. Only whole lines
count: a tail torn by a crash is ignored and overwritten. Numbers are written with all their digits.
"""

from __future__ import annotations

import difflib
import json
import math
import os
import zlib
from collections.abc import Mapping
from pathlib import Path
from typing import IO, Any

import numpy as np

from fitcore.sampling.lock import WriterLock
from observables.errors import StoreError

__all__ = ["FORMAT_NAME", "FORMAT_VERSION", "ToyStore"]

FORMAT_NAME = "weakmix-pseudo-experiments"
FORMAT_VERSION = 1
DIFFERENCES_SHOWN = 12
#: Truths recomputed elsewhere may differ in their last digits (in units of a parameter's scale); the stored ones count.
SAME_TRUTH = 1e-4

Columns = dict[str, np.ndarray]


class ToyStore:
    """The blocks of one calibration, in memory or in a file.

    Parameters
    ----------
    path : path-like or None
        None keeps blocks in memory only.
    header : mapping
        Plain data that says what is computed. A file with another header is refused; see `header`.

    Attributes
    ----------
    header : dict
        The header in force: that of the file where there is one (its ``truths`` may differ in the last digits from
        those asked for).
    blocks : dict of str to columns
        Finished blocks by key.

    Raises
    ------
    StoreError
        The file belongs to another calibration (with the difference), is damaged, cannot be written, or is being
        written by another process. It is left as it is.
    """

    def __init__(self, path: str | os.PathLike[str] | None, header: Mapping[str, Any]) -> None:
        self.header: dict[str, Any] = {
            "format_name": FORMAT_NAME,
            "format_version": FORMAT_VERSION,
            **json.loads(json.dumps(header, allow_nan=False)),
        }
        self.blocks: dict[str, Columns] = {}
        self.path = None if path is None else Path(path)
        self._stream: IO[bytes] | None = None
        self._lock: WriterLock | None = None
        if self.path is None:
            return
        try:
            self.path.parent.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise StoreError(
                f"{self.path.parent}: cannot be made ({error.strerror}); choose another folder"
            ) from error
        self._lock = WriterLock(self.path)
        try:
            self._open(self.path)
        except BaseException:
            self.close()
            raise

    def _open(self, path: Path) -> None:
        try:
            content = path.read_bytes() if path.exists() else b""
        except OSError as error:
            raise StoreError(f"{path}: cannot be read ({error.strerror})") from error
        whole = content[: content.rfind(b"\n") + 1]
        if whole:
            self._read(path, whole.splitlines())
        elif content and not _line(self.header).startswith(content[:40]):
            raise StoreError(
                f"{path}: is not a file of pseudo-experiments; nothing was touched; give another name"
            )
        try:
            self._stream = path.open("r+b" if path.exists() else "xb")
            self._stream.truncate(len(whole))
            self._stream.seek(len(whole))
        except OSError as error:
            raise StoreError(
                f"{path}: cannot be written ({error.strerror}); choose another folder"
            ) from error
        if not whole:
            self._append(self.header)

    def _read(self, path: Path, lines: list[bytes]) -> None:
        try:
            stored = json.loads(lines[0])
            if stored["format_name"] != FORMAT_NAME:
                raise ValueError(lines[0][:40])
        except (ValueError, KeyError, TypeError) as error:
            raise StoreError(
                f"{path}: is not a file of pseudo-experiments; nothing was touched; give another name"
            ) from error
        differences = _differences(stored, self.header)
        if differences:
            listed = "\n".join(f"  {line}" for line in differences)
            raise StoreError(
                f"{path}: holds pseudo-experiments of another calibration; nothing was touched.\n{listed}\n"
                "Repeat that command to go on with it, or give another name, or remove the file."
            )
        self.header = stored
        for number, line in enumerate(lines[1:], start=2):
            try:
                block = json.loads(line)
                if block["checksum"] != _checksum(block["columns"]):
                    raise ValueError("checksum")
                self.blocks[block["key"]] = {
                    name: _decode(column) for name, column in block["columns"].items()
                }
            except (ValueError, KeyError, TypeError) as error:
                raise StoreError(
                    f"{path}: line {number} is damaged; nothing was touched; remove the file"
                ) from error

    def add(self, key: str, columns: Columns) -> None:
        """Keep a finished block; a second one of the same key is ignored."""
        if key in self.blocks:
            return
        self.blocks[key] = columns
        if self._stream is not None:
            encoded = {name: _encode(column) for name, column in columns.items()}
            self._append({"key": key, "checksum": _checksum(encoded), "columns": encoded})

    def _append(self, line: Mapping[str, Any]) -> None:
        assert self._stream is not None
        try:
            self._stream.write(_line(line))
            self._stream.flush()
            os.fsync(self._stream.fileno())
        except OSError as error:
            raise StoreError(
                f"{self.path}: cannot be written ({error.strerror}); what is in it is kept"
            ) from error

    def close(self) -> None:
        """Close the file and give the right to write back."""
        if self._stream is not None:
            self._stream.close()
            self._stream = None
        if self._lock is not None:
            self._lock.release()
            self._lock = None

    def __enter__(self) -> ToyStore:
        return self

    def __exit__(self, *_exception: object) -> None:
        self.close()


def _line(content: Mapping[str, Any]) -> bytes:
    return json.dumps(content, allow_nan=False, separators=(",", ":")).encode() + b"\n"


def _encode(column: np.ndarray) -> list[Any]:
    # JSON has no infinity and no nan
    return [
        x if math.isfinite(x) else ("inf" if x > 0 else "nan")
        for x in np.asarray(column, dtype=float).tolist()
    ]


def _decode(column: list[Any]) -> np.ndarray:
    return np.array([float(x) for x in column])


def _checksum(encoded: Mapping[str, list[Any]]) -> int:
    return zlib.crc32(json.dumps(encoded, separators=(",", ":")).encode())


def _differences(stored: Mapping[str, Any], asked: Mapping[str, Any]) -> list[str]:
    """What tells two headers apart, for a person; empty when the file can be continued."""
    lines: list[str] = []
    for key in dict.fromkeys((*asked, *stored)):
        old, new = stored.get(key), asked.get(key)
        if key == "truths":
            lines += _truth_differences(old or [], new or [], np.array(asked.get("scales", 1.0)))
        elif old == new:
            continue
        elif isinstance(old, str) and isinstance(new, str) and ("\n" in old or "\n" in new):
            changed = [
                line
                for line in difflib.unified_diff(old.splitlines(), new.splitlines(), n=0, lineterm="")
                if not line.startswith(("---", "+++", "@@"))
            ]
            lines.append(f"{key} (- in the file, + asked for):")
            lines += [f"  {line}" for line in changed[:DIFFERENCES_SHOWN]]
            if len(changed) > DIFFERENCES_SHOWN:
                lines.append(f"  and {len(changed) - DIFFERENCES_SHOWN} more lines")
        else:
            lines.append(f"{key}: {old} in the file, {new} asked for")
    return lines


def _truth_differences(old: list[Any], new: list[Any], scales: np.ndarray) -> list[str]:
    labels = [", ".join(truth["label"] for truth in truths) for truths in (old, new)]
    if labels[0] != labels[1]:
        return [f"points: {labels[0]} in the file, {labels[1]} asked for"]
    moved = []
    for before, now in zip(old, new, strict=True):
        distance = np.abs(np.subtract(before["theta"], now["theta"])) / scales
        covered = [[name for name, _ in truth["covered"]] for truth in (before, now)]
        if covered[0] != covered[1]:
            moved.append(
                f"coverage of {', '.join(covered[0])} in the file, {', '.join(covered[1])} asked for"
            )
        elif before["held"] != now["held"] or (distance > SAME_TRUTH).any():
            moved.append(f"the point {now['label']!r} lies elsewhere")
    return moved
