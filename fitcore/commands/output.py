"""Where a command's output goes: tables for a person, JSON for a program."""

from __future__ import annotations

import json
import math
import os
import sys
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rich.console import Console, RenderableType

#: Columns written to a file or pipe.
PIPE_WIDTH = 140


def weakmix_version() -> str:
    """Return the version of the installed distribution, or `unknown` from a bare source tree."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("weakmix")
    except PackageNotFoundError:
        return "unknown"


def plain(value: Any) -> Any:
    """Turn a value into what JSON can hold: NumPy becomes Python, complex [re, im], nan and inf null."""
    if isinstance(value, dict):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if hasattr(value, "tolist"):  # NumPy arrays and scalars
        return plain(value.tolist())
    if isinstance(value, complex):
        return [plain(value.real), plain(value.imag)]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def json_text(content: Any) -> str:
    """Write content as JSON that every reader accepts (no nan, no inf), with a last newline."""
    return json.dumps(plain(content), indent=2, allow_nan=False) + "\n"


def write_text_whole(path: Path, text: str) -> None:
    """Write a file so that a reader sees the old content or the new, never a half of it.

    Raises
    ------
    StoreError
        If the file cannot be written.
    """
    partial = path.with_name(f".{path.name}.{os.getpid()}.partial")
    try:
        partial.write_text(text, encoding="utf-8")
        partial.replace(path)
    except OSError as error:
        from observables.errors import StoreError

        partial.unlink(missing_ok=True)
        message = f"{path}: cannot be written ({error.strerror}); give another place"
        raise StoreError(message) from error


@dataclass(frozen=True)
class Output:
    """The output options of one command, and the console that follows from them.

    With `--json -` stdout carries JSON alone and the tables go to stderr; with `--quiet` there are
    no tables (messages about failures still go to stderr).
    """

    json: str | None = None
    out: Path | None = None
    quiet: bool = False

    def __post_init__(self) -> None:
        """Refuse a place that cannot take the JSON, before anything is computed."""
        if self.json is None or self.json == "-":
            return
        path = Path(self.json)
        if path.is_dir() or not path.parent.is_dir():
            from observables.errors import InputError

            why = "is a folder" if path.is_dir() else f"the folder {path.parent} does not exist"
            message = f"--json {path}: {why}; give a file in an existing folder"
            raise InputError(message)

    @property
    def json_on_stdout(self) -> bool:
        """Whether stdout belongs to a program."""
        return self.json == "-"

    @cached_property
    def console(self) -> Console:
        """The rich console for people."""
        from rich.console import Console

        stream = sys.stderr if self.json_on_stdout else sys.stdout
        width = None if stream.isatty() or "COLUMNS" in os.environ else PIPE_WIDTH
        return Console(file=stream, quiet=self.quiet, highlight=False, width=width, soft_wrap=False)

    def show(self, *parts: RenderableType) -> None:
        """Print parts for a person."""
        for part in parts:
            fit_into = getattr(part, "fit_into", None)
            if fit_into is None:
                self.console.print(part)
            else:
                self.console.print(fit_into(self.console), "")

    def show_as_is(self, text: str) -> None:
        """Print text whose line breaks mean something, such as code: the terminal may wrap it, this does not."""
        from rich.text import Text

        self.console.print(Text(text), soft_wrap=True)

    def headline(self, what: str, *details: str) -> None:
        """Print the first line of a command: program, what it does to quark mixing, on what."""
        from rich.text import Text

        line = Text(f"weakmix {weakmix_version()} - quark mixing {what}", style="bold")
        length = len(line)
        for detail in filter(None, details):  # broken between details, not inside them
            if length + 3 + len(detail) > self.console.width:
                line.append("\n  ")
                length = 2 + len(detail)
            else:
                line.append(" - ", style="not bold")
                length += 3 + len(detail)
            line.append(detail, style="not bold")
        self.show(line)

    def write_json(self, content: Any) -> None:
        """Write the machine-readable result where `--json` says; do nothing without `--json`."""
        if self.json is None:
            return
        text = json_text(content)
        if self.json_on_stdout:
            sys.stdout.write(text)
            sys.stdout.flush()
        else:
            write_text_whole(Path(self.json), text)
