"""Strict reading of the keys of one TOML table: a wrong value becomes a problem, and reading goes on."""

from __future__ import annotations

import difflib
import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import Any

from likelihoods.locations import KeyPath

Report = Callable[[KeyPath, str, str], None]

_TOML_NAMES = {
    bool: "true or false",
    int: "a number",
    float: "a number",
    str: "a text",
    list: "a list",
    dict: "a table",
}


def describe(value: Any) -> str:
    """Say what a TOML value is, shortly, for a message."""
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return f'the text "{value[:40]}"'
    if isinstance(value, int | float):
        return f"{value:g}" if isinstance(value, float) else str(value)[:40]
    return _TOML_NAMES.get(type(value), f"a {type(value).__name__}")


def nearest(name: str, known: Iterable[str]) -> str:
    """Say which known name is nearest to a mistyped one."""
    known = list(known)
    close = difflib.get_close_matches(name, known, n=1, cutoff=0.5)
    return f'did you mean "{close[0]}"?' if close else f"known keys: {', '.join(known)}"


def real(value: Any) -> float | str:
    """Give a TOML value as a finite float, or say what is wrong with it."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return f"must be a number, not {describe(value)}"
    try:
        number = float(value)
    except OverflowError:
        return "is too large for a number"
    return number if math.isfinite(number) else f"must be finite, not {value}"


class Fields:
    """The keys of one table.

    Parameters
    ----------
    table : mapping
        The decoded table.
    path : tuple
        Where it stands in the file.
    label : str
        How messages call it, e.g. ``[measurement 7 "id"] ``.
    known : sequence of str
        Allowed keys; any other is reported.
    report : callable
        Takes a path, the label and a message.
    """

    def __init__(
        self, table: Mapping[str, Any], path: KeyPath, label: str, known: Sequence[str], report: Report
    ) -> None:
        self.table = table
        self.path = path
        self.label = label
        self.failed = False
        self._report = report
        for key in table:
            if key not in known:
                self.problem(key, f'unknown key "{key}"; {nearest(key, known)}')

    def __contains__(self, key: str) -> bool:
        return key in self.table

    def problem(self, key: str | tuple[str | int, ...] | None, text: str) -> None:
        """Report a problem at a key (or at the table)."""
        self.failed = True
        tail: KeyPath = () if key is None else (key,) if isinstance(key, str) else key
        self._report((*self.path, *tail), self.label, text)

    def text(self, key: str, *, required: str = "") -> str | None:
        """A non-empty text; ``required`` says how to mend its absence."""
        if key not in self.table:
            if required:
                self.problem(None, required)
            return None
        value = self.table[key]
        if not isinstance(value, str):
            self.problem(key, f"{key} must be a text, not {describe(value)}; put it in quotes")
            return None
        if not value.strip():
            self.problem(key, f"{key} is empty; {required.split('; ')[-1] or 'fill it in or remove the key'}")
            return None
        return value

    def texts(self, key: str) -> tuple[str, ...]:
        """A list of non-empty, distinct texts; empty where the key is absent."""
        value = self.table.get(key, [])
        if not isinstance(value, list) or not all(isinstance(item, str) and item.strip() for item in value):
            self.problem(key, f'{key} must be a list of texts, such as {key} = ["one", "two"]')
            return ()
        return tuple(dict.fromkeys(value))

    def flag(self, key: str) -> bool | None:
        """True or false; None where the key is absent."""
        value = self.table.get(key)
        if value is None or isinstance(value, bool):
            return value
        self.problem(key, f"{key} must be true or false, not {describe(value)}")
        return None

    def choice(self, key: str, options: Sequence[str], default: str | None = None) -> str | None:
        """One of some words."""
        value = self.table.get(key, default)
        if value is None or (isinstance(value, str) and value in options):
            return value
        self.problem(key, f"{key} must be one of {', '.join(options)}, not {describe(value)}")
        return None

    def number(self, key: str, *, required: str = "") -> float | None:
        """A finite number."""
        if key not in self.table:
            if required:
                self.problem(None, required)
            return None
        return self._number((key,), key, self.table[key])

    def positive(self, key: str, *, or_zero: bool = False) -> float | None:
        """A positive (or non-negative) finite number."""
        value = self.number(key)
        if value is None or value > 0.0 or (or_zero and value == 0.0):
            return value
        self.problem(key, f"{key} must be {'zero or ' if or_zero else ''}positive, not {value:g}")
        return None

    def error(self, where: tuple[str | int, ...], name: str, value: Any) -> tuple[float, float] | None:
        """One error, or [plus, minus]; both positive."""
        if isinstance(value, list):
            if len(value) != 2:
                self.problem(where, f"{name} must be a number or [plus, minus], not a list of {len(value)}")
                return None
            pair = [self._positive_error((*where, i), name, item) for i, item in enumerate(value)]
            return None if pair[0] is None or pair[1] is None else (pair[0], pair[1])
        single = self._positive_error(where, name, value)
        return None if single is None else (single, single)

    def items(self, key: str, *, required: str = "") -> list[Any] | None:
        """A non-empty list."""
        if key not in self.table:
            if required:
                self.problem(None, required)
            return None
        value = self.table[key]
        if not isinstance(value, list) or not value:
            self.problem(key, f"{key} must be a list with one element per quantity, not {describe(value)}")
            return None
        return value

    def _number(self, where: tuple[str | int, ...], name: str, value: Any) -> float | None:
        number = real(value)
        if isinstance(number, str):
            self.problem(where, f"{name} {number}")
            return None
        return number

    def numbers(self, key: str, values: Iterable[Any]) -> list[float | None]:
        """Finite numbers of a list that is already known to be one."""
        return [self._number((key, i), f"{key}[{i}]", value) for i, value in enumerate(values)]

    def _positive_error(self, where: tuple[str | int, ...], name: str, value: Any) -> float | None:
        number = self._number(where, name, value)
        if number is None or number > 0.0:
            return number
        mend = (
            "write an error that is not zero, or leave the entry out"
            if number == 0.0
            else "write errors without sign, [plus, minus] where they differ"
        )
        self.problem(where, f"{name} must be positive, not {number:g}; {mend}")
        return None
