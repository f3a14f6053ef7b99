"""The same inputs with theory errors treated in different ways."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile_intervals
from observables.errors import ConvergenceError

__all__ = ["Treatment", "TreatmentRow", "compare_treatments"]

#: Chi-square may differ by so much on a plateau; a parabola is within it over a tenth of its 68.27 % interval.
PLATEAU = 0.01
#: Share of the 68.27 % interval from which a stretch within `PLATEAU` is called one.
WIDE = 0.25
LEVELS = (PLATEAU, 1.0, 3.841458820694124)


@dataclass(frozen=True)
class TreatmentRow:
    """One quantity under one treatment.

    Attributes
    ----------
    value : float
        At the best fit; on a plateau one point of many.
    interval_68, interval_95 : (float, float)
        Profile intervals, Delta chi2 1.000 and 3.841.
    plateau : (float, float) or None
        Where chi-square stays within 0.01 of its minimum, if that is a good part of the 68.27 % interval.
    """

    value: float
    interval_68: tuple[float, float]
    interval_95: tuple[float, float]
    plateau: tuple[float, float] | None


@dataclass(frozen=True)
class Treatment:
    """One treatment: its smallest chi-square, and a row per quantity."""

    name: str
    chi2: float
    rows: dict[str, TreatmentRow]
    flags: tuple[str, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "chi2": self.chi2,
            "flags": list(self.flags),
            "quantities": {
                name: {
                    "value": row.value,
                    "interval_68": list(row.interval_68),
                    "interval_95": list(row.interval_95),
                    "plateau": None if row.plateau is None else list(row.plateau),
                }
                for name, row in self.rows.items()
            },
        }


def compare_treatments(
    problems: Mapping[str, Any], names: Iterable[str], *, rng: np.random.Generator | int | None = 0
) -> tuple[Treatment, ...]:
    """Best fit and profile intervals of some quantities under each treatment.

    Parameters
    ----------
    problems : mapping
        Name of the treatment -> Problem.
    names : iterable of str
        Parameters or real quantities.
    rng : Generator or seed
        Of the searches for minima.

    Raises
    ------
    ConvergenceError
        A treatment has no converged minimum.
    """
    wanted = tuple(names)
    made = []
    for treatment, problem in problems.items():
        minima = find_minima(problem, rng=rng)
        if not minima or not minima[0].converged:
            raise ConvergenceError(f"theory errors {treatment}: no converged minimum", minima)
        theta = minima[0].theta
        table = profile_intervals(problem, theta, wanted, delta_chi2=LEVELS)
        for _ in range(3):
            if table.better_minimum is None:
                break
            theta = table.better_minimum
            table = profile_intervals(problem, theta, wanted, delta_chi2=LEVELS)
        values, _ = problem.linearise_quantities(theta, wanted)
        rows = {}
        for name, value in zip(wanted, values, strict=True):
            flat, inner, outer = ((end[0], end[1]) for end in table[name])
            wide = flat[1] - flat[0] > WIDE * (inner[1] - inner[0])
            rows[name] = TreatmentRow(float(value), inner, outer, flat if wide else None)
        flags = tuple(
            f"interval-not-found: {name}" for name in wanted if name in {lost[0] for lost in table.flagged}
        )
        made.append(Treatment(treatment, float(table.minimum), rows, flags))
    return tuple(made)
