"""Curvature at a minimum: Hessian, unconstrained directions, covariance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Curvature", "curvature_at", "hessian"]

#: Singular values below this fraction of the largest one (columns normalised) count as zero.
RANK_TOLERANCE = 1e-7
#: A parameter closer to its bound than this many of its steps sits on it.
AT_BOUND = 1e-3
#: Step of the differences of gradients, in standard deviations: the gradients are exact, so it can be short.
STEP = 1e-3


@dataclass(frozen=True)
class Curvature:
    """What the neighbourhood of a minimum says.

    Attributes
    ----------
    hessian : ndarray, shape (n, n)
        Second derivatives of chi-square.
    covariance : ndarray, shape (n, n)
        2 H^-1 on the constrained directions, 0 on the others and for flat ranges.
    rank : int
        Rank of the Jacobian over the counted parameters (flat ranges are not counted).
    unconstrained : ndarray of bool, shape (n,)
        Parameters with a share in a direction along which nothing changes.
    positive : bool
        Whether the Hessian is positive definite on the constrained directions.
    loose : ndarray, shape (k, n)
        The directions along which nothing changes, in the parameters' units.
    unit : ndarray, shape (n,)
        Change of each parameter that moves the residuals by one; 0 for flat ranges.
    """

    hessian: np.ndarray
    covariance: np.ndarray
    rank: int
    unconstrained: np.ndarray
    positive: bool
    loose: np.ndarray
    unit: np.ndarray

    def leaves_loose(self, slope: np.ndarray) -> bool:
        """Whether a quantity with this gradient, shape (n,), changes along an unconstrained direction."""
        # The directions are known to about the tolerance of the rank.
        return bool(np.any(np.abs(self.loose @ slope) > 1e-5 * np.linalg.norm(self.unit * slope)))


def hessian(problem: Any, theta: np.ndarray, steps: np.ndarray) -> np.ndarray:
    """Second derivatives of chi-square by central differences of its exact gradient, all points in one batch.

    Parameters
    ----------
    problem : Problem
    theta : ndarray, shape (n,)
    steps : ndarray, shape (n,)
        One per parameter, about a hundredth of its uncertainty.

    Returns
    -------
    ndarray, shape (n, n)
        Symmetric.
    """
    shifts = np.diag(steps)
    lower = np.array([p.lower for p in problem.parameters])
    upper = np.array([p.upper for p in problem.parameters])
    points = np.concatenate([np.minimum(theta + shifts, upper), np.maximum(theta - shifts, lower)])
    gradient = problem.linearise(points).gradient
    n = len(theta)
    widths = np.diagonal(points[:n] - points[n:])
    rows = (gradient[:n] - gradient[n:]) / widths[:, None]
    return np.asarray(0.5 * (rows + rows.T))


def curvature_at(problem: Any, theta: np.ndarray) -> Curvature:
    """Hessian, covariance, rank and unconstrained directions at a minimum.

    Notes
    -----
    Directions are unconstrained when the Jacobian of the residuals does not see them; a chi-square that is flat
    only to second order is not called unconstrained. Flat ranges are held where they are: they bound what they touch,
    and have no curvature of their own.
    """
    theta = np.asarray(theta, dtype=float)
    n = len(theta)
    parameters = problem.parameters
    scales = np.array([p.scale for p in parameters])
    lower, upper = np.array([p.lower for p in parameters]), np.array([p.upper for p in parameters])
    counted = np.array([not getattr(p, "is_range", False) for p in parameters], dtype=bool)
    jacobian = problem.jacobian(theta)
    jacobian = np.where(np.isfinite(jacobian), jacobian, 0.0)

    unit, strong, right = _directions(jacobian[:, counted], scales[counted])
    weak = right[~strong]
    unconstrained = np.zeros(n, dtype=bool)
    unconstrained[counted] = (np.abs(weak) > 1e-3).any(axis=0) | ~jacobian[:, counted].any(axis=0)
    loose = np.zeros((len(weak), n))
    loose[:, counted] = weak * unit
    units = np.zeros(n)
    units[counted] = unit
    rank = int(strong.sum())

    # At a bound chi-square need not be at rest: a parameter that sits there is held.
    held = np.minimum(theta - lower, upper - theta) <= AT_BOUND * scales
    moving = counted & ~held
    if held.any():
        unit, strong, right = _directions(jacobian[:, moving], scales[moving])
    basis = right[strong]  # rows span what the data constrain, in normalised coordinates
    columns = jacobian[:, moving] * unit
    gauss_newton = basis @ (columns.T @ columns) @ basis.T
    guess = np.sqrt(np.clip(np.diagonal(basis.T @ np.linalg.inv(gauss_newton) @ basis), 0.0, None)) * unit
    steps = STEP * scales
    steps[moving] = np.where(guess > 0, STEP * guess, steps[moving])
    full = hessian(problem, theta, steps)
    reduced = basis @ (full[np.ix_(moving, moving)] * np.outer(unit, unit)) @ basis.T
    eigenvalues = np.linalg.eigvalsh(reduced)
    positive = bool(eigenvalues.size == 0 or eigenvalues[0] > 0)
    core = reduced if positive else 2.0 * gauss_newton
    part = (basis.T @ (2.0 * np.linalg.inv(core)) @ basis) * np.outer(unit, unit)
    covariance = np.zeros((n, n))
    covariance[np.ix_(moving, moving)] = 0.5 * (part + part.T)
    return Curvature(full, covariance, rank, unconstrained, positive, loose, units)


def _directions(jacobian: np.ndarray, scales: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Unit of each column, which right singular vectors count, and all of them as rows."""
    norms = np.linalg.norm(jacobian, axis=0)
    unit = np.where(norms > 0, 1.0 / np.where(norms > 0, norms, 1.0), scales)
    _, singular, right = np.linalg.svd(jacobian * unit, full_matrices=True)
    strong = np.zeros(len(norms), dtype=bool)
    strong[: len(singular)] = singular > RANK_TOLERANCE * singular.max(initial=1e-300)
    return unit, strong, right
