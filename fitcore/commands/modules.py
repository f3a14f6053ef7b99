"""A user's own Python files, which declare quantities, parameters or hypotheses for one command."""

from __future__ import annotations

import hashlib
import importlib.util
import sys
import traceback
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from fitcore.commands.errors import input_error

#: Names under which the files are imported begin so, and cannot hide a module of that name.
PREFIX = "weakmix_module_"


def load_modules(paths: Iterable[str]) -> None:
    """Import files that declare quantities with the decorators of `observables`.

    Parameters
    ----------
    paths : iterable of str
        Python files. A file that is imported already, from there or from a copy, is not imported again.

    Raises
    ------
    InputError
        No such file, two files of one name, an error inside the file (with its line), or a declaration
        that clashes with the catalogue.
    """
    files = tuple(dict.fromkeys(Path(path).resolve() for path in paths))
    by_name: dict[str, Path] = {}
    for file in files:
        other = by_name.setdefault(file.stem, file)
        if other != file:
            message = f"--module {file}: has the name of {other}; rename one of the two"
            raise input_error(message)
    for file in files:
        _load(file)
    if files:
        _check_catalogue()


def modules_of_run(folder: Path, given: Iterable[str] = ()) -> tuple[str, ...]:
    """Return the copies of a run's modules in its folder, without those that were given anew.

    Parameters
    ----------
    folder : Path
        A run folder, or anything else (which has none).
    given : iterable of str
        Modules named on the command line; they stand in for copies of the same name.
    """
    from fitcore.commands.run_folder import read_record

    record = read_record(folder) or {}
    names = [Path(path).name for path in record.get("options", {}).get("modules", ())]
    taken = {Path(path).name for path in given}
    return tuple(str(folder / name) for name in names if name not in taken)


def check_hypotheses(names: Iterable[str]) -> None:
    """Refuse hypotheses that nobody declared, and say which there are and how to add one.

    Raises
    ------
    InputError
    """
    from observables import catalogue

    known = catalogue.hypothesis_names()
    own = [name for name in known if name != "standard"]
    there = f"the registered ones are {', '.join(own)}" if own else "none is registered besides 'standard'"
    unknown = [name for name in names if name not in known]
    if unknown:
        raise input_error(
            f"unknown hypothesis {', '.join(map(repr, unknown))}: {there}; declare one in a Python file "
            "(DEVELOPERS.md shows how) and give that file with --module FILE.py"
        )


def _load(file: Path) -> None:
    try:
        source = file.read_bytes()
    except OSError as error:
        message = f"--module {file}: cannot be read ({error.strerror}); give the path of a Python file"
        raise input_error(message) from error
    name, digest = PREFIX + file.stem, hashlib.sha256(source).hexdigest()
    if getattr(sys.modules.get(name), "__weakmix_sha256__", None) == digest:
        return
    if file.suffix != ".py":
        message = f"--module {file}: is not a Python file; its name must end in .py"
        raise input_error(message)
    spec = importlib.util.spec_from_file_location(name, file)
    if spec is None:
        message = f"--module {file}: cannot be imported as a Python module"
        raise input_error(message)
    module: Any = importlib.util.module_from_spec(spec)
    module.__weakmix_sha256__ = digest
    before = sys.modules.get(name)
    sys.modules[name] = module
    try:
        exec(compile(source, str(file), "exec"), module.__dict__)
    except (KeyboardInterrupt, MemoryError):
        raise
    except (
        BaseException
    ) as error:  # whatever a user's file raises, SystemExit included, is the user's to mend
        sys.modules.pop(name, None)
        if before is not None:
            sys.modules[name] = before
        raise input_error(_fault(file, error)) from error


def _fault(file: Path, error: BaseException) -> str:
    """Say where in the file an import failed, and why."""
    from observables.errors import CatalogueError

    line: int | None = None
    if isinstance(error, SyntaxError) and error.filename == str(file):
        line = error.lineno
        what = f"SyntaxError: {error.msg}"
    else:
        frames = [one for one in traceback.extract_tb(error.__traceback__) if one.filename == str(file)]
        line = frames[-1].lineno if frames else None
        # the catalogue names both places of a clash itself
        what = str(error) if isinstance(error, CatalogueError) else f"{type(error).__name__}: {error}"
    mend = "; rename yours" if what.startswith("two owners") else ""
    return f"{file}{'' if line is None else f':{line}'}: the module cannot be imported: {what}{mend}"


def _check_catalogue() -> None:
    """Find ingredients that nobody declares, and cycles, before anything is computed."""
    from observables import catalogue
    from observables.errors import CatalogueError

    try:
        catalogue.check()
    except CatalogueError as error:
        message = f"the modules do not fit the catalogue:\n{error}"
        raise input_error(message) from error
