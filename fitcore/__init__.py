"""What to do with inputs and theory: problems, fits, profiles, posteriors, studies, figures and commands."""

from __future__ import annotations

from typing import Any

__all__ = ["FitResult", "Problem", "__version__"]

__version__ = "0.1.0"


def __getattr__(name: str) -> Any:
    # Lazy, so that `weakmix --help` does not import NumPy.
    if name == "Problem":
        from fitcore.problem import Problem

        return Problem
    if name == "FitResult":
        from fitcore.result import FitResult

        return FitResult
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
