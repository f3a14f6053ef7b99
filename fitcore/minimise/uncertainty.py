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
        2 H^-1 on the constrained directions, 0 on the others.
    rank : int
        Rank of the Jacobian over the counted parameters (flat ranges are not counted).
    unconstrained : ndarray of bool, shape (n,)
        Parameters with a share in a direction along which nothing changes.
    positive : bool
        Whether the Hessian is positive definite on the constrained directions.
    """

    hessian: np.ndarray
    covariance: np.ndarray
    rank: int
    unconstrained: np.ndarray
    positive: bool


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
    only to second order is not called unconstrained.
    """
    theta = np.asarray(theta, dtype=float)
    jacobian = problem.jacobian(theta)
    jacobian = np.where(np.isfinite(jacobian), jacobian, 0.0)
    norms = np.linalg.norm(jacobian, axis=0)
    scales = np.array([p.scale for p in problem.parameters])
    unit = np.where(norms > 0, 1.0 / np.where(norms > 0, norms, 1.0), scales)
    _, singular, right = np.linalg.svd(jacobian * unit, full_matrices=True)
    strong = np.zeros(len(theta), dtype=bool)
    strong[: len(singular)] = singular > RANK_TOLERANCE * max(singular[0], 1e-300)
    weak_directions = right[~strong]
    unconstrained = (np.abs(weak_directions) > 1e-3).any(axis=0) | (norms == 0)

    counted = np.array([not getattr(p, "is_range", False) for p in problem.parameters])
    rank = int(strong.sum())
    if not counted.all():
        part = np.linalg.svd(jacobian[:, counted] * unit[counted], compute_uv=False)
        rank = int((part > RANK_TOLERANCE * max(part[0], 1e-300)).sum()) if part.size else 0

    basis = right[strong]  # rows span what the data constrain, in normalised coordinates
    gauss_newton = basis @ ((jacobian * unit).T @ (jacobian * unit)) @ basis.T
    guess = np.sqrt(np.clip(np.diagonal(basis.T @ np.linalg.inv(gauss_newton) @ basis), 0.0, None)) * unit
    steps = np.where(guess > 0, 0.02 * guess, 0.01 * scales)
    full = hessian(problem, theta, steps)
    reduced = basis @ (full * np.outer(unit, unit)) @ basis.T
    eigenvalues = np.linalg.eigvalsh(reduced)
    positive = bool(eigenvalues.size == 0 or eigenvalues[0] > 0)
    core = reduced if positive else 2.0 * gauss_newton
    covariance = (basis.T @ (2.0 * np.linalg.inv(core)) @ basis) * np.outer(unit, unit)
    return Curvature(full, 0.5 * (covariance + covariance.T), rank, unconstrained, positive)
