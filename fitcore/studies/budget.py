"""Error budget: which input's uncertainty makes which part of a result's uncertainty."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fitcore.minimise.minima import find_minima
from fitcore.minimise.uncertainty import curvature_at
from fitcore.studies.determined import is_determined
from observables.errors import ConvergenceError, InputError

__all__ = ["BudgetResult", "BudgetRow", "budget"]


@dataclass(frozen=True)
class BudgetRow:
    """The share of one entry or group in the uncertainty of one quantity.

    Attributes
    ----------
    name : str
        Id of the entry, or name of the group.
    shift : float
        Change of the quantity when the measured value moves up by one standard deviation and everything is
        refitted (half the difference between up and down). For a group, the root of the quadratic sum, with
        correlations.
    removal : float
        sqrt(sigma^2 - sigma'^2), with sigma' the uncertainty of the quantity if what the entry measures were known
        exactly (linear propagation).
    """

    name: str
    shift: float
    removal: float


@dataclass(frozen=True)
class BudgetResult:
    """Budgets of some quantities.

    Attributes
    ----------
    quantities : tuple of str
    values, errors : dict
        Best-fit value and linear uncertainty of each.
    entries, groups : dict
        Quantity -> rows, largest shift first. Groups may share entries; entries add up in quadrature to the whole
        uncertainty, groups do so only where they are disjoint.
    units : dict
    families : dict
        Entry id -> (groups, kind), for figures and tables.
    """

    quantities: tuple[str, ...]
    values: dict[str, float]
    errors: dict[str, float]
    entries: dict[str, tuple[BudgetRow, ...]]
    groups: dict[str, tuple[BudgetRow, ...]]
    units: dict[str, str]
    families: dict[str, tuple[tuple[str, ...], str]] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""

        def rows(items: tuple[BudgetRow, ...]) -> list[dict[str, Any]]:
            return [{"name": r.name, "shift": r.shift, "removal": r.removal} for r in items]

        return {
            "quantities": {
                name: {
                    "value": self.values[name],
                    "error": self.errors[name],
                    "unit": self.units[name],
                    "entries": rows(self.entries[name]),
                    "groups": rows(self.groups[name]),
                }
                for name in self.quantities
            },
        }


def budget(
    problem: Any, names: Iterable[str], *, starts: int = 64, rng: np.random.Generator | int | None = 0
) -> BudgetResult:
    """Error budgets of parameters or derived quantities.

    Parameters
    ----------
    problem : Problem
    names : iterable of str
        Real quantities or parameters.
    starts : int
    rng : Generator or seed

    Returns
    -------
    BudgetResult

    Raises
    ------
    ConvergenceError
        The fit, or the refit of a shifted entry, did not converge.
    InputError
        A quantity that the inputs do not determine, or flat theory ranges in the problem.

    Notes
    -----
    Unit shifts are real refits, two per entry, all in one batch; removals are linear. In a linear Gaussian problem
    the squares of the shifts (with correlations) add up to the square of the uncertainty.
    """
    from fitcore.minimise.batch_solver import minimise_batch

    wanted = tuple(names)
    if any(getattr(p, "is_range", False) for p in problem.parameters):
        raise InputError(
            "an error budget divides Gaussian errors, and flat ranges are none: take theory errors gaussian "
            "(--theory-errors gaussian)"
        )
    problem.linearise_quantities(problem.start, wanted)  # unknown names fail before any work
    minima = find_minima(problem, size=starts, rng=rng)
    if not minima or not minima[0].converged:
        raise ConvergenceError("the fit has no converged minimum; see weakmix fit", minima)
    theta = minima[0].theta
    measured = np.array([e.value for e in problem.entries])
    m = len(measured)
    up = np.diag([e.plus for e in problem.entries])
    down = np.diag([e.minus for e in problem.entries])
    data = np.concatenate([measured + up, measured - down])
    refits = minimise_batch(problem, np.tile(theta, (2 * m, 1)), data=data)
    if not refits.converged.all():
        lost = [problem.entries[i % m].id for i in np.flatnonzero(~refits.converged)]
        raise ConvergenceError(
            f"refits with shifted {', '.join(dict.fromkeys(lost))} did not converge", refits
        )

    covariance = curvature_at(problem, theta).covariance
    values, gradient = problem.linearise_quantities(theta, wanted)
    for name in wanted:
        if not is_determined(problem, theta, name):
            raise InputError(f"{name}: the inputs do not determine it, so that its uncertainty has no parts")
    moved, _ = problem.linearise_quantities(refits.theta, wanted)
    measured_names = tuple(e.quantity for e in problem.entries)
    _, directions = problem.linearise_quantities(theta, measured_names)
    correlation = np.asarray(problem.terms.correlation)
    groups = _groups(problem)

    entries: dict[str, tuple[BudgetRow, ...]] = {}
    grouped: dict[str, tuple[BudgetRow, ...]] = {}
    errors: dict[str, float] = {}
    for q, name in enumerate(wanted):
        difference = moved[:m, q] - moved[m:, q]
        if (period := problem.period_of(name)) is not None:
            difference = difference - period * np.rint(difference / period)
        shifts = 0.5 * difference
        errors[name] = math.sqrt(max(float(gradient[q] @ covariance @ gradient[q]), 0.0))
        rows = [
            BudgetRow(e.id, float(shift), _removal(gradient[q], covariance, directions[[i]]))
            for i, (e, shift) in enumerate(zip(problem.entries, shifts, strict=True))
        ]
        entries[name] = _sorted(rows)
        rows = []
        for group, members in groups.items():
            part = shifts[members]
            total = float(part @ correlation[np.ix_(members, members)] @ part)
            rows.append(
                BudgetRow(
                    group, math.sqrt(max(total, 0.0)), _removal(gradient[q], covariance, directions[members])
                )
            )
        grouped[name] = _sorted(rows)
    return BudgetResult(
        wanted,
        {n: float(v) for n, v in zip(wanted, values, strict=True)},
        errors,
        entries,
        grouped,
        {n: problem.unit_of(n) for n in wanted},
        {e.id: (tuple(e.groups), e.kind) for e in problem.entries},
    )


def _groups(problem: Any) -> dict[str, list[int]]:
    """Kinds ("experiment", "theory") and groups -> positions of their entries."""
    groups: dict[str, list[int]] = {}
    for i, entry in enumerate(problem.entries):
        for group in dict.fromkeys((entry.kind, *entry.groups)):
            groups.setdefault(group, []).append(i)
    return groups


def _removal(gradient: np.ndarray, covariance: np.ndarray, directions: np.ndarray) -> float:
    """Part of the uncertainty that vanishes when the given directions are known exactly."""
    projected = directions @ covariance @ gradient
    inner = directions @ covariance @ directions.T
    return math.sqrt(max(float(projected @ np.linalg.pinv(inner, hermitian=True) @ projected), 0.0))


def _sorted(rows: list[BudgetRow]) -> tuple[BudgetRow, ...]:
    return tuple(sorted(rows, key=lambda row: -abs(row.shift)))
