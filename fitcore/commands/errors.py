"""What a user sees when something goes wrong: a message and an exit code, no traceback.

Exit codes: 0 done; 1 the computation did not converge or a check fell short; 2 unusable input;
130 interrupted. A fault of the program itself is not hidden: it keeps its traceback.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import NoReturn

import click

EXIT_FELL_SHORT = 1
EXIT_UNUSABLE_INPUT = 2
EXIT_INTERRUPTED = 130

#: Where the command line keeps its arguments while a command runs.
ARGUMENTS = "weakmix.arguments"


def fail(message: str, code: int) -> NoReturn:
    """Print a message for a person on stderr and leave with the exit code."""
    click.echo(message, err=True)
    raise SystemExit(code)


@contextmanager
def report_errors() -> Iterator[None]:
    """Turn the project's exceptions and an interrupt into messages and exit codes."""
    try:
        yield
    except (click.ClickException, click.exceptions.Exit, click.Abort):
        raise  # click's own ways to end: help, wrong use, an exit code
    except KeyboardInterrupt:
        fail("\nweakmix: interrupted; nothing half-written was left behind.", EXIT_INTERRUPTED)
    except Exception as error:
        # imported here because most runs of `weakmix` raise nothing and need not pay for it
        from observables.errors import ConvergenceError, WeakmixError

        if not isinstance(error, WeakmixError):
            raise
        if isinstance(error, ConvergenceError):
            fail(f"weakmix: did not converge: {error}", EXIT_FELL_SHORT)
        message = str(error)
        separator = "\n" if "\n" in message else " "
        fail(f"weakmix: {_kind(error)}:{separator}{message}", EXIT_UNUSABLE_INPUT)


def _kind(error: Exception) -> str:
    from observables.errors import StoreError, UnknownNameError

    if isinstance(error, StoreError):
        return "cannot read or write"
    if isinstance(error, UnknownNameError):
        return "unknown name"
    return "unusable input"


def input_error(message: str) -> Exception:
    """Make the exception that stands for a user's mistake (exit code 2)."""
    from observables.errors import InputError

    return InputError(message)


def command_line() -> tuple[str, ...]:
    """Return the arguments as typed, without the program's own path."""
    context = click.get_current_context(silent=True)
    arguments = None if context is None else context.meta.get(ARGUMENTS)
    return ("weakmix", *(sys.argv[1:] if arguments is None else arguments))
