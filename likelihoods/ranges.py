"""Flat theory ranges: how ``--theory-errors`` turns entries into terms, nuisances and bounds."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from likelihoods.entries import Entry
from observables.errors import InputError

__all__ = ["SCHEMES", "Scheme", "apply_scheme"]

SCHEMES = ("as-given", "gaussian", "flat")


@dataclass(frozen=True)
class Scheme:
    """What a treatment of theory errors makes of the entries.

    Attributes
    ----------
    entries : tuple of Entry
        Those that stay terms of the likelihood.
    halfwidths : dict
        Entry id -> half-width of the bounded nuisance that is added to its prediction.
    bounds : dict
        Parameter -> (lower, upper) set by entries that are flat altogether.
    """

    entries: tuple[Entry, ...]
    halfwidths: dict[str, float]
    bounds: dict[str, tuple[float, float]]


def apply_scheme(entries: Sequence[Entry], scheme: str, is_leaf: Callable[[str], bool]) -> Scheme:
    """Treat theory errors as asked.

    Parameters
    ----------
    entries : sequence of Entry
    scheme : str
        ``"as-given"``: flat half-widths are ranges, everything else is left alone. ``"gaussian"``: a half-width
        becomes an independent Gaussian error of that size. ``"flat"``: the Gaussian error of a theory entry
        becomes a half-width.
    is_leaf : callable
        Whether a name is a parameter or constant; only there may an entry be flat altogether.

    Raises
    ------
    InputError
        An unknown scheme, a flat entry on a computed quantity, or ranges of one parameter that do not meet.
    """
    if scheme not in SCHEMES:
        raise InputError(f"theory errors {scheme!r}: choose one of {', '.join(SCHEMES)}")
    kept: list[Entry] = []
    halfwidths: dict[str, float] = {}
    bounds: dict[str, tuple[float, float]] = {}
    problems = []
    for entry in entries:
        half = entry.flat_halfwidth
        if scheme == "gaussian" and half > 0:
            kept.append(
                replace(entry, plus=math.hypot(entry.plus, half), minus=math.hypot(entry.minus, half))
            )
        elif scheme == "flat" and entry.kind == "theory":
            if not is_leaf(entry.quantity):
                problems.append(
                    f"{entry.where} is a theory entry on {entry.quantity!r}, which is computed; "
                    "flat theory errors need it on a parameter: leave it out with --without"
                )
                continue
            low, high = bounds.get(entry.quantity, (-math.inf, math.inf))
            low = max(low, entry.value - entry.minus - half)
            high = min(high, entry.value + entry.plus + half)
            if not low < high:
                problems.append(f"{entry.where} the flat ranges of {entry.quantity!r} do not meet")
            bounds[entry.quantity] = (low, high)
        else:
            kept.append(entry)
            if half > 0 and scheme != "gaussian":
                halfwidths[entry.id] = half
    if problems:
        raise InputError(problems)
    return Scheme(tuple(kept), halfwidths, bounds)
