"""Inputs files that come with the installation, and how a name or path is looked up."""

from __future__ import annotations

import difflib
from functools import lru_cache
from pathlib import Path

from observables.errors import InputError

_HERE = Path(__file__).resolve().parent


def _folders() -> tuple[Path, ...]:
    # The wheel carries the demo inputs inside this package; in a source checkout they lie beside it.
    installed = _HERE / "demo_inputs"
    return _HERE / "published", installed if installed.is_dir() else _HERE.parent / "demo_inputs"


@lru_cache(maxsize=1)
def _bundled() -> dict[str, Path]:
    return {path.stem: path for folder in _folders() for path in sorted(folder.glob("*.toml"))}


def bundled_names() -> tuple[str, ...]:
    """Names of the bundled inputs files: the published sets and the invented demonstration."""
    return tuple(_bundled())


def bundled_path(name: str) -> Path:
    """Path of a bundled inputs file.

    Raises
    ------
    InputError
        When there is none of that name; the message names the three closest.
    """
    try:
        return _bundled()[name]
    except KeyError:
        raise InputError(f'no bundled inputs file "{name}"; {closest(name, bundled_names())}') from None


def find_inputs(name_or_path: str | Path, beside: Path | None = None) -> tuple[Path, str]:
    """Find an inputs file: an existing path first, else a bundled name.

    Parameters
    ----------
    name_or_path : str or Path
        What the user wrote.
    beside : Path, optional
        Folder that a relative path starts from; the working directory if not given.

    Returns
    -------
    path : Path
        Where the file is.
    name : str
        The bundled name, or the file name without its ending.

    Raises
    ------
    InputError
        When there is no such file, or it is a directory.
    """
    text = str(name_or_path)
    if not text.strip() or "\0" in text:
        raise InputError("the name of the inputs file is empty; give a bundled name or a path")
    path = Path(text) if beside is None else beside / text
    try:
        if path.is_file():
            return path, path.stem
        if text in _bundled():
            return _bundled()[text], text
        if path.is_dir():
            raise InputError(f"{path}: is a directory; give the inputs file inside it")
        if path.exists():
            raise InputError(f"{path}: is not a regular file; give an inputs file or a bundled name")
    except OSError as error:
        raise InputError(
            f"{path}: cannot be read ({error.strerror}); give a bundled name or a path"
        ) from error
    names = (*bundled_names(), *_neighbours(path))
    raise InputError(f"{path}: no such file and no bundled inputs of that name; {closest(text, names)}")


def closest(name: str, known: tuple[str, ...] | list[str]) -> str:
    """Say which known names are the three closest to ``name``."""
    close = difflib.get_close_matches(name, known, n=3, cutoff=0.0)
    return f"closest: {', '.join(close)}" if close else "none are known"


def _neighbours(path: Path) -> tuple[str, ...]:
    try:
        return tuple(sorted(str(other) for other in path.parent.glob("*.toml")))[:200]
    except OSError:
        return ()
