"""What to do with inputs and theory: problems, fits, profiles, posteriors, studies, figures and commands."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from typing import Any

__all__ = ["FitResult", "Problem", "__version__"]

__version__ = "0.1.0"


def _check_observables() -> None:
    """Refuse another package of that name, whose tracebacks would explain nothing; looks, but imports nothing."""
    own = Path(__file__).resolve().parent.parent / "observables" / "__init__.py"
    spec = importlib.util.find_spec("observables")
    found = spec.origin if spec is not None else None
    if found is None:
        raise ImportError("the package 'observables' of weakmix is missing: install weakmix again")
    text = Path(found).read_text(encoding="utf-8", errors="replace")
    is_ours = Path(found).resolve() == own and "observables.catalogue import" in text
    if not is_ours:
        raise ImportError(
            f"another package called 'observables' ({found}) stands in the way of weakmix's own ({own}): "
            "leave that folder, or `pip uninstall observables` and install weakmix again"
        )


_check_observables()


def __getattr__(name: str) -> Any:
    # Lazy, so that `weakmix --help` does not import NumPy.
    if name == "Problem":
        from fitcore.problem import Problem

        return Problem
    if name == "FitResult":
        from fitcore.result import FitResult

        return FitResult
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    # What is imported on demand is there all the same.
    return sorted({*globals(), *__all__})
