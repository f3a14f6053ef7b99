"""The exceptions of weakmix: one tree, used by all three packages.

::

    WeakmixError
    +-- InputError (ValueError)          an inputs file, option or argument is unusable
    +-- UnknownNameError (LookupError)   no quantity, parameter, entry ... of that name
    +-- CatalogueError (ValueError)      the catalogue of quantities contradicts itself
    +-- ConvergenceError (RuntimeError)  a computation ended without a trustworthy answer
    +-- StoreError (OSError)             a run folder or chain file cannot be read or written
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

__all__ = [
    "CatalogueError",
    "ConvergenceError",
    "InputError",
    "StoreError",
    "UnknownNameError",
    "WeakmixError",
]


class WeakmixError(Exception):
    """Root of all exceptions that weakmix raises on purpose."""


class InputError(WeakmixError, ValueError):
    """Something the user supplied cannot be used.

    Parameters
    ----------
    problems : str or sequence of str
        One message per problem; each says what, where, the value, and what to do.

    Attributes
    ----------
    problems : tuple of str
        The single messages.
    """

    def __init__(self, problems: str | Sequence[str]) -> None:
        self.problems: tuple[str, ...] = (problems,) if isinstance(problems, str) else tuple(problems)
        super().__init__("\n".join(self.problems))

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.problems,)


class UnknownNameError(WeakmixError, LookupError):
    """A name that nothing answers to.

    Parameters
    ----------
    name : str
        The name asked for.
    what : str
        What was looked for, e.g. ``"quantity"``.
    close : sequence of str
        Names that look like it, best first.
    """

    def __init__(self, name: str, what: str = "name", close: Sequence[str] = ()) -> None:
        self.name = name
        self.what = what
        self.close: tuple[str, ...] = tuple(close)
        hint = f"; did you mean {', '.join(self.close)}?" if self.close else ""
        super().__init__(f"unknown {what} {name!r}{hint}")

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.name, self.what, self.close)


class CatalogueError(WeakmixError, ValueError):
    """The catalogue contradicts itself: a missing ingredient, a cycle, two owners of one name."""


class ConvergenceError(WeakmixError, RuntimeError):
    """A computation ended without a trustworthy answer.

    Parameters
    ----------
    message : str
        Why, and what to try.
    partial : object, optional
        The partial result, for a caller that wants to look at it.
    """

    def __init__(self, message: str, partial: object = None) -> None:
        self.partial = partial
        super().__init__(message)


class StoreError(WeakmixError, OSError):
    """A file of results cannot be read or written; nothing in it was changed."""
