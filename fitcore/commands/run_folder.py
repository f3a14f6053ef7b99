"""The run folder: everything that a computation made, and what is needed to make it again.

    result.json      the result
    inputs.toml      the exact inputs, self-contained
    run.json         command, options, seed, versions, and the sha256 of every other file
    log.jsonl        what happened when, one JSON object per line
    NAME.py          the user's own modules, if any
    NAME.pdf .png .csv   each figure with its data

A folder appears whole or not at all: it is built beside its final place and renamed into it.
"""

from __future__ import annotations

import hashlib
import json
import logging
import os
import platform
import re
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

from fitcore.commands.errors import command_line
from fitcore.commands.output import json_text, weakmix_version

if TYPE_CHECKING:
    from fitcore.figures.style import Drawing

RECORD = "run.json"
FORMAT_NAME = "weakmix-run"
FORMAT_VERSION = 1
DEFAULT_PARENT = Path("weakmix-runs")


def library_versions() -> dict[str, str]:
    """Return the versions of everything that numbers depend on."""
    from importlib.metadata import PackageNotFoundError, version

    versions = {"weakmix": weakmix_version(), "python": platform.python_version()}
    for name in ("numpy", "scipy", "iminuit"):
        try:
            versions[name] = version(name)
        except PackageNotFoundError:
            versions[name] = "missing"
    return versions


def read_record(folder: Path) -> dict[str, Any] | None:
    """Return the record of a run folder, or None if the folder is not one."""
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    if not isinstance(record, dict) or record.get("format_name") != FORMAT_NAME:
        return None
    return record


def default_place(command: str, inputs_name: str, now: datetime | None = None) -> Path:
    """Return a fresh place for a run: `weakmix-runs/COMMAND-INPUTS-TIME`, numbered if taken."""
    now = now or datetime.now(UTC)
    stem = re.sub(r"[^A-Za-z0-9._+-]+", "-", f"{command}-{inputs_name}").strip("-")
    place = DEFAULT_PARENT / f"{stem}-{now:%Y%m%d-%H%M%S}"
    number = 2
    while place.exists():
        place = DEFAULT_PARENT / f"{stem}-{now:%Y%m%d-%H%M%S}-{number}"
        number += 1
    return place


def check_place(place: Path) -> None:
    """Refuse a place that holds anything but an earlier run.

    Raises
    ------
    StoreError
        If the place is a file, a folder of other things, or a run folder to which something was added.
    """
    from observables.errors import StoreError

    if not (place.exists() or place.is_symlink()):
        return
    if not place.is_dir():
        message = f"{place}: exists and is not a folder; give --out another name"
        raise StoreError(message)
    present = sorted(item.name for item in place.iterdir())
    if not present:
        return
    record = read_record(place)
    if record is None:
        message = (
            f"{place}: is not a weakmix run folder and not empty; nothing was touched; give another name"
        )
        raise StoreError(message)
    foreign = [name for name in present if name != RECORD and name not in record.get("files", {})]
    if foreign:
        message = (
            f"{place}: holds {foreign[0]!r}, which that run did not write; nothing was touched; "
            "move it away or give --out another name"
        )
        raise StoreError(message)


@dataclass
class RunFolder:
    """A run folder being built. Make one with `writing`; all paths are plain file names."""

    place: Path
    building: Path
    command: str
    options: Mapping[str, Any]
    seed: int | None
    created: datetime
    record: dict[str, Any] = field(default_factory=dict)

    def write_text(self, name: str, text: str) -> None:
        """Write a text file into the folder."""
        (self.building / name).write_text(text, encoding="utf-8")

    def write_json(self, name: str, content: Any) -> None:
        """Write a JSON file into the folder (nan and inf become null)."""
        self.write_text(name, json_text(content))

    def write_inputs(self, name: str, resolved_toml: str) -> None:
        """Write the exact inputs, and record their name and sha256."""
        self.write_text("inputs.toml", resolved_toml)
        digest = hashlib.sha256(resolved_toml.encode("utf-8")).hexdigest()
        self.record["inputs"] = {"name": name, "resolved_sha256": digest}

    def write_figure(self, name: str, drawing: Drawing) -> None:
        """Write a figure as PDF and PNG, and its data as CSV."""
        from fitcore.figures.style import save

        save(drawing, self.building, name)

    def log(self, event: str, **details: Any) -> None:
        """Add a line to the log."""
        line = {"time": _stamp(datetime.now(UTC)), "event": event, **details}
        with (self.building / "log.jsonl").open("a", encoding="utf-8") as stream:
            stream.write(json.dumps(json.loads(json_text(line))) + "\n")

    def finish(self) -> None:
        """Write the record and move the folder to its place."""
        files = {
            path.name: hashlib.sha256(path.read_bytes()).hexdigest()
            for path in sorted(self.building.iterdir())
            if path.name != RECORD
        }
        self.write_json(
            RECORD,
            {
                "format_name": FORMAT_NAME,
                "format_version": FORMAT_VERSION,
                "command": self.command,
                "command_line": list(command_line()),
                "options": dict(self.options),
                "seed": self.seed,
                "created": _stamp(self.created),
                "versions": library_versions(),
                **self.record,
                "files": files,
            },
        )
        check_place(self.place)  # again: it may have appeared since
        if self.place.exists():
            old = Path(tempfile.mkdtemp(prefix=f".{self.place.name}.", suffix=".old", dir=self.place.parent))
            self.place.rename(old / "run")
            self.building.rename(self.place)
            shutil.rmtree(old)
        else:
            self.building.rename(self.place)


def _stamp(moment: datetime) -> str:
    return moment.strftime("%Y-%m-%dT%H:%M:%SZ")


class _LogLines(logging.Handler):
    """Copy the libraries' log records into the log of a run."""

    def __init__(self, run: RunFolder) -> None:
        super().__init__(level=logging.INFO)
        self._run = run

    def emit(self, record: logging.LogRecord) -> None:
        self._run.log(record.getMessage(), level=record.levelname, logger=record.name)


@contextmanager
def writing(
    command: str,
    inputs_name: str,
    *,
    out: Path | None,
    options: Mapping[str, Any],
    seed: int | None = None,
) -> Iterator[RunFolder]:
    """Build a run folder; it appears at its place only if the block ends without an exception.

    Parameters
    ----------
    command, inputs_name : str
        Name the default place, `weakmix-runs/COMMAND-INPUTS-TIME`.
    out : Path or None
        The place, if the user named it.
    options : mapping
        The command's options, as plain data; files listed under ``"modules"`` are copied into the folder.
    seed : int or None
        The seed of the run.

    Yields
    ------
    RunFolder
        `run.place` is where it will be.

    Raises
    ------
    StoreError
        If the place is taken by something else or cannot be written. Raised before the block runs,
        so that no computation is lost to a full disk's or a wrong folder's late discovery where it
        could be known early.
    """
    from observables.errors import StoreError

    created = datetime.now(UTC)
    place = Path(out) if out is not None else default_place(command, inputs_name, created)
    check_place(place)
    new_parent = not place.parent.exists()
    try:
        place.parent.mkdir(parents=True, exist_ok=True)
        building = Path(tempfile.mkdtemp(prefix=f".{place.name}.", suffix=".partial", dir=place.parent))
    except OSError as error:
        message = f"{place}: cannot be made ({error.strerror}); give --out a folder that you may write to"
        raise StoreError(message) from error
    run = RunFolder(place, building, command, options, seed, created)
    handler = _LogLines(run)
    logger = logging.getLogger("fitcore")
    logger.addHandler(handler)
    try:
        building.chmod(0o777 & ~_umask())
        run.log("started", command=command)
        for module in options.get("modules", ()):
            shutil.copyfile(module, building / Path(module).name)
        yield run
        run.log("finished")
        run.finish()
    except OSError as error:
        if isinstance(error, StoreError):
            raise
        message = f"{error.filename or place}: cannot be written ({error.strerror}); nothing was left behind"
        raise StoreError(message) from error
    finally:
        logger.removeHandler(handler)
        shutil.rmtree(building, ignore_errors=True)  # gone already if all went well
        if new_parent and not any(place.parent.iterdir()):
            place.parent.rmdir()


def _umask() -> int:
    current = os.umask(0)
    os.umask(current)
    return current
