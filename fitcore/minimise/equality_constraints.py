"""Equality constraints on derived quantities for the batch solver."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np


@dataclass(frozen=True, eq=False)
class EqualityConstraints:
    """Values that real quantities must take, row by row.

    Attributes
    ----------
    names : tuple of str
        Quantities (or parameters) known to ``problem.linearise_quantities``.
    targets : ndarray, shape (B, k)
        Wanted values in the units of the quantities; those with a period compare modulo it.
    which : ndarray of int, shape (B, k), optional
        Index into `names` of each target; by default target k belongs to name k in every row.
    tolerance : ndarray, shape (B, k), optional
        Largest accepted distance, in the quantities' units; by default 1e-6 of the quantity's standard deviation in
        the quadratic model.
    """

    names: tuple[str, ...]
    targets: np.ndarray
    which: np.ndarray | None = None
    tolerance: np.ndarray | None = None

    def rows(self, pick: np.ndarray) -> EqualityConstraints:
        """The constraints of some rows."""
        return EqualityConstraints(
            self.names,
            self.targets[pick],
            None if self.which is None else self.which[pick],
            None if self.tolerance is None else self.tolerance[pick],
        )


def constraint_rows(
    constraints: EqualityConstraints | Mapping[str, Any] | None, count: int
) -> EqualityConstraints | None:
    """Any accepted form of the constraints with full (count, k) arrays.

    Raises
    ------
    ValueError
        If the targets do not have one row per start.
    """
    if not constraints:
        return None
    if isinstance(constraints, Mapping):
        columns = [
            np.broadcast_to(np.asarray(value, dtype=float), (count,)) for value in constraints.values()
        ]
        constraints = EqualityConstraints(tuple(constraints), np.stack(columns, axis=1))
    targets = np.asarray(constraints.targets, dtype=float)
    if targets.ndim != 2 or len(targets) != count:
        raise ValueError(f"constraint targets have shape {targets.shape}, expected ({count}, k)")
    which = np.arange(targets.shape[1]) if constraints.which is None else constraints.which
    return EqualityConstraints(
        tuple(constraints.names),
        targets,
        np.broadcast_to(which, targets.shape),
        None if constraints.tolerance is None else np.broadcast_to(constraints.tolerance, targets.shape),
    )


class ConstraintEvaluator:
    """Values and gradients of the constrained quantities at the points of the solver.

    Parameters
    ----------
    problem : Problem
    constraints : EqualityConstraints or None
        In the form of `constraint_rows`.
    """

    def __init__(self, problem: Any, constraints: EqualityConstraints | None) -> None:
        self.problem, self.n = problem, len(problem.parameters)
        self.count = 0
        if constraints is None or constraints.which is None:
            return
        self.targets, self.which, self.tolerance = (
            constraints.targets,
            constraints.which,
            constraints.tolerance,
        )
        self.count = self.targets.shape[1]
        periods = np.array([float(problem.period_of(name) or np.inf) for name in constraints.names])
        self.period = periods[self.which].T
        place = {p.name: i for i, p in enumerate(problem.parameters)}
        self.places = [place.get(name) for name in constraints.names]
        self.derived = tuple(name for name in constraints.names if name not in place)

    def violation(self, points: np.ndarray, index: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Value minus target (k, A), modulo the period, and its gradient (k, n, A); nan where impossible."""
        if not self.count:
            return np.zeros((0, index.size)), np.zeros((0, self.n, index.size))
        values, gradient = self._quantities(points)
        which, row = self.which[index], np.arange(index.size)[:, None]
        missing = (values[row, which] - self.targets[index]).T
        period = self.period[:, index]
        wraps = np.isfinite(period)
        with np.errstate(invalid="ignore"):
            missing = np.where(
                wraps, missing - np.round(missing / period) * np.where(wraps, period, 0.0), missing
            )
        slope = np.moveaxis(gradient[row, which], 0, -1)
        missing[~np.isfinite(slope).all(axis=1)] = np.nan
        return missing, np.where(np.isfinite(slope), slope, 0.0)

    def met(self, violation: np.ndarray, reach: np.ndarray, index: np.ndarray) -> np.ndarray:
        """Rows (A,) whose violations (k, A) are small enough: by the tolerance, or by 1e-6 of the reach (k, A)."""
        if not self.count:
            return np.ones(index.size, dtype=bool)
        wanted = 1e-6 * reach if self.tolerance is None else self.tolerance[index].T
        return np.asarray((np.abs(violation) <= wanted).all(axis=0))

    def _quantities(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values (A, q) and gradients (A, q, n) of everything constrained; parameters are their own values."""
        values = np.empty((len(points), len(self.places)))
        gradient = np.zeros((len(points), len(self.places), self.n))
        columns = [k for k, place in enumerate(self.places) if place is None]
        if columns:
            values[:, columns], gradient[:, columns] = self.problem.linearise_quantities(points, self.derived)
        for k, place in enumerate(self.places):
            if place is not None:
                values[:, k], gradient[:, k, place] = points[:, place], 1.0
        return values, gradient
