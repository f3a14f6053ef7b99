"""Where in a TOML text each key and array element stands.

The standard library's parser keeps no line numbers. This scanner reads a text that it has already accepted,
follows only its structure (headers, keys, arrays, inline tables, strings, comments) and notes the line of
every path.
"""

from __future__ import annotations

import re
import tomllib
from typing import Any

KeyPath = tuple[str | int, ...]

_BARE = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR_END = re.compile(r"[,\]}#\n]")


def line_numbers(text: str) -> dict[KeyPath, int]:
    """Map every path of a valid TOML text to its line (counted from 1).

    Parameters
    ----------
    text : str
        A text that `tomllib.loads` accepts.

    Returns
    -------
    dict
        Paths are tuples of keys and of positions in arrays: ``("measurement", 6, "error", 0)``. A
        table stands at its header or, without one, where it is first mentioned; ``()`` is line 1.
    """
    return _Scanner(text.replace("\r\n", "\n")).scan()


class Locations:
    """Lines of the paths of one file; a path that is not written falls back to the nearest one above it."""

    def __init__(self, text: str) -> None:
        self._lines = line_numbers(text)

    def line(self, path: KeyPath) -> int:
        """Line of ``path``, or of the innermost table around it that is written."""
        while path not in self._lines:
            path = path[:-1]
        return self._lines[path]


class _Scanner:
    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.line = 1
        self.lines: dict[KeyPath, int] = {(): 1}
        self.array_lengths: dict[KeyPath, int] = {}

    def scan(self) -> dict[KeyPath, int]:
        table: KeyPath = ()
        while self._skip(newlines=True):
            if self.text[self.at] == "[":
                table = self._header()
            else:
                self._pair(table)
        return self.lines

    def _header(self) -> KeyPath:
        line = self.line
        is_array = self.text.startswith("[[", self.at)
        self.at += 2 if is_array else 1
        keys = self._dotted_key()
        self._skip(newlines=False)
        self.at += 2 if is_array else 1
        path: KeyPath = ()
        for key in keys[:-1]:
            path = self._note((*path, key), line)
            if path in self.array_lengths:  # a header below [[a]] means the last element of a
                path = (*path, self.array_lengths[path] - 1)
        path = (*path, keys[-1])
        if not is_array:
            # A table first mentioned by a header of a table inside it stands at its own header.
            self.lines[path] = line
            return path
        self._note(path, line)
        index = self.array_lengths.get(path, 0)
        self.array_lengths[path] = index + 1
        return self._note((*path, index), line)

    def _pair(self, table: KeyPath) -> None:
        line = self.line
        path = table
        for key in self._dotted_key():
            path = self._note((*path, key), line)
        self._skip(newlines=False)
        self.at += 1  # =
        self._skip(newlines=False)
        self._value(path)

    def _value(self, path: KeyPath) -> None:
        start = self.text[self.at]
        if start in "\"'":
            self._string()
        elif start == "[":
            self.at += 1
            index = 0
            while self._skip(newlines=True) and self.text[self.at] != "]":
                self._value(self._note((*path, index), self.line))
                index += 1
                self._comma()
            self.at += 1
        elif start == "{":
            self.at += 1
            while self._skip(newlines=True) and self.text[self.at] != "}":
                self._pair(path)
                self._comma()
            self.at += 1
        else:
            end = _SCALAR_END.search(self.text, self.at)
            self.at = end.start() if end else len(self.text)

    def _comma(self) -> None:
        self._skip(newlines=True)
        if self.text[self.at] == ",":
            self.at += 1

    def _dotted_key(self) -> list[str]:
        keys = []
        while True:
            self._skip(newlines=False)
            if self.text[self.at] in "\"'":
                keys.append(self._string())
            else:
                bare = _BARE.match(self.text, self.at)
                if bare is None:
                    raise ValueError(f"line {self.line}: not a TOML key")
                keys.append(bare.group())
                self.at = bare.end()
            self._skip(newlines=False)
            if self.text[self.at] != ".":
                return keys
            self.at += 1

    def _string(self) -> str:
        start, quote = self.at, self.text[self.at]
        mark = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        self.at += len(mark)
        while not self.text.startswith(mark, self.at):
            self.at += 2 if self.text[self.at] == "\\" and quote == '"' else 1
        self.at += len(mark)
        if len(mark) == 3:  # up to two quotes may stand right before the closing ones
            while self.text.startswith(quote, self.at):
                self.at += 1
        literal = self.text[start : self.at]
        self.line += literal.count("\n")
        if len(mark) == 3:
            return literal
        value: Any = tomllib.loads(f"key = {literal}")["key"] if quote == '"' else literal[1:-1]
        return str(value)

    def _skip(self, *, newlines: bool) -> bool:
        """Skip blanks and comments, and newlines where they mean nothing; False at the end of the text."""
        while self.at < len(self.text):
            character = self.text[self.at]
            if character == "\n" and newlines:
                self.line += 1
            elif character == "#":
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
                continue
            elif character not in " \t":
                return True
            self.at += 1
        return False

    def _note(self, path: KeyPath, line: int) -> KeyPath:
        self.lines.setdefault(path, line)
        return path
