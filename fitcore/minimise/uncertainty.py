"""Curvature at a minimum: Hessian, unconstrained directions, covariance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Curvature", "curvature_at", "hessian"]

#: Singular values below this fraction of the largest one (columns normalised) count as zero.
RANK_TOLERANCE = 1e-7


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
    """

    hessian: np.ndarray
    covariance: np.ndarray
    rank: int
    unconstrained: np.ndarray
    positive: bool
    loose: np.ndarray

    def leaves_loose(self, slope: np.ndarray) -> bool:
        """Whether a quantity with this gradient, shape (n,), changes along an unconstrained direction."""
        # The directions are known to about the tolerance of the rank.
        return bool(np.any(np.abs(self.loose @ slope) > 1e-5 * (np.abs(self.loose) @ np.abs(slope))))


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
    counted = np.array([not getattr(p, "is_range", False) for p in problem.parameters], dtype=bool)
    scales = np.array([p.scale for p in problem.parameters])[counted]
    jacobian = problem.jacobian(theta)[:, counted]
    jacobian = np.where(np.isfinite(jacobian), jacobian, 0.0)
    norms = np.linalg.norm(jacobian, axis=0)
    unit = np.where(norms > 0, 1.0 / np.where(norms > 0, norms, 1.0), scales)
    _, singular, right = np.linalg.svd(jacobian * unit, full_matrices=True)
    strong = np.zeros(len(norms), dtype=bool)
    strong[: len(singular)] = singular > RANK_TOLERANCE * singular.max(initial=1e-300)
    weak = right[~strong]
    loose = (np.abs(weak) > 1e-3).any(axis=0) | (norms == 0)

    basis = right[strong]  # rows span what the data constrain, in normalised coordinates
    gauss_newton = basis @ ((jacobian * unit).T @ (jacobian * unit)) @ basis.T
    guess = np.sqrt(np.clip(np.diagonal(basis.T @ np.linalg.inv(gauss_newton) @ basis), 0.0, None)) * unit
    steps = np.array([0.01 * p.scale for p in problem.parameters])
    steps[counted] = np.where(guess > 0, 0.02 * guess, 0.01 * scales)
    full = hessian(problem, theta, steps)
    reduced = basis @ (full[np.ix_(counted, counted)] * np.outer(unit, unit)) @ basis.T
    eigenvalues = np.linalg.eigvalsh(reduced)
    positive = bool(eigenvalues.size == 0 or eigenvalues[0] > 0)
    core = reduced if positive else 2.0 * gauss_newton
    part = (basis.T @ (2.0 * np.linalg.inv(core)) @ basis) * np.outer(unit, unit)
    covariance = np.zeros((n, n))
    covariance[np.ix_(counted, counted)] = 0.5 * (part + part.T)
    unconstrained = np.zeros(n, dtype=bool)
    unconstrained[counted] = loose
    directions = np.zeros((len(weak), n))
    directions[:, counted] = weak * unit
    return Curvature(full, covariance, int(strong.sum()), unconstrained, positive, directions)
