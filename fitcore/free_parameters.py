"""The free parameters of a problem: which leaves vary, where they start, what the others are held at."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from observables.errors import InputError

__all__ = ["FreeParameter", "range_name", "sort_leaves"]


@dataclass(frozen=True)
class FreeParameter:
    """One axis of theta.

    Attributes
    ----------
    name, unit, title, latex : str
    start, lower, upper, scale : float
        In ``unit``; ``scale`` is about the size of the uncertainty.
    period : float or None
    prior : object or None
        As the inputs file states it (posteriors only).
    is_range : bool
        A flat theory range: bounded, without a term of its own, not counted in degrees of freedom.
    """

    name: str
    unit: str
    start: float
    lower: float
    upper: float
    scale: float
    title: str = ""
    latex: str = ""
    period: float | None = None
    prior: Any = None
    is_range: bool = False

    @property
    def is_shift(self) -> bool:
        """Whether it is added to one entry's prediction, and so is no leaf of the catalogue."""
        return self.name.startswith("range:")


def range_name(entry_id: str) -> str:
    """Name of the parameter that is the flat theory range of an entry."""
    return f"range:{entry_id}"


def sort_leaves(
    leaves: Mapping[str, Any],
    entries: Sequence[Any],
    measured: set[str],
    settings: Mapping[str, Any],
    bounds: Mapping[str, tuple[float, float]],
    ranges: Mapping[str, float],
) -> tuple[tuple[FreeParameter, ...], dict[str, float]]:
    """Decide what varies.

    Parameters
    ----------
    leaves : mapping
        Name -> parameter or constant of the catalogue, in order.
    entries : sequence of Entry
        The terms of the likelihood.
    measured : set of str
        Quantities with an entry of any kind: a constant among them becomes a parameter.
    settings : mapping
        Name -> what ``[parameters.NAME]`` says.
    bounds : mapping
        Name -> bounds set by entries that are flat altogether.
    ranges : mapping
        Entry id -> half-width of its flat range.

    Returns
    -------
    tuple of FreeParameter
        Leaves first, then the flat ranges.
    dict
        Name -> value of the parameters that are held.

    Raises
    ------
    InputError
        Bounds that leave no room.
    """
    free: list[FreeParameter] = []
    fixed: dict[str, float] = {}
    for name, leaf in leaves.items():
        setting = settings.get(name)
        hold = getattr(leaf, "fixed", leaf.kind == "constant") and name not in measured
        if setting is not None and setting.fixed is not None:
            hold = setting.fixed
        own = [e for e in entries if e.quantity == name]
        value = getattr(leaf, "start", getattr(leaf, "value", 0.0))
        # An own measurement starts the parameter; range and bound settings of the file come before it.
        if own and not hold:
            weights = [1.0 / (e.plus * e.minus) for e in own]
            value = sum(w * e.value for w, e in zip(weights, own, strict=True)) / sum(weights)
        if setting is not None and setting.start is not None:
            value = setting.start
        if hold:
            # Constants at their catalogue value are no news; anything else is reported.
            if leaf.kind == "parameter" or setting is not None:
                fixed[name] = float(value)
            continue
        lower, upper = getattr(leaf, "lower", -math.inf), getattr(leaf, "upper", math.inf)
        if setting is not None:
            lower = lower if setting.lower is None else setting.lower
            upper = upper if setting.upper is None else setting.upper
        is_range = name in bounds
        if is_range:
            lower, upper = max(lower, bounds[name][0]), min(upper, bounds[name][1])
        if not lower < upper:
            raise InputError(f"parameter {name!r}: the bounds {lower} and {upper} leave no room")
        # A start on a bound has no room on one side: keep a thousandth of the range away.
        if math.isfinite(lower) and math.isfinite(upper):
            margin = 1e-3 * (upper - lower)
            value = min(max(value, lower + margin), upper - margin)
        value = min(max(value, lower), upper)
        scale = min(
            (min(e.plus, e.minus) for e in own),
            default=getattr(leaf, "scale", 0.0) or leaf.__dict__.get("error", 0.0),
        )
        if is_range:
            scale = 0.25 * (upper - lower)
        free.append(
            FreeParameter(
                name=name,
                unit=leaf.unit,
                start=float(value),
                lower=float(lower),
                upper=float(upper),
                scale=float(scale) or 1.0,
                title=leaf.title,
                latex=leaf.latex,
                period=leaf.period,
                prior=None if setting is None else setting.prior,
                is_range=is_range,
            )
        )
    for entry in entries:
        if entry.id in ranges:
            half = ranges[entry.id]
            free.append(
                FreeParameter(
                    name=range_name(entry.id),
                    unit=entry.unit,
                    start=0.0,
                    lower=-half,
                    upper=half,
                    scale=0.5 * half,
                    title=f"flat theory range of {entry.id}",
                    is_range=True,
                )
            )
    return tuple(free), fixed
