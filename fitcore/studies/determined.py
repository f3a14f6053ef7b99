"""Whether the entries of a problem determine a quantity at all."""

from __future__ import annotations

from typing import Any

import numpy as np

__all__ = ["is_determined"]

TOLERANCE = 1e-6


def is_determined(problem: Any, theta: np.ndarray, name: str) -> bool:
    """Whether the residuals see every direction in which a quantity changes (to first order).

    Parameters
    ----------
    problem : Problem
    theta : array, shape (n,)
        Where to look: near the minimum.
    name : str
        Real quantity or parameter.
    """
    scales = np.array([p.scale for p in problem.parameters])
    jacobian = np.nan_to_num(problem.jacobian(theta)) * scales
    _, gradient = problem.linearise_quantities(theta, [name])
    slope = np.nan_to_num(gradient[0]) * scales
    norms = np.linalg.norm(jacobian, axis=0)
    if np.any((norms == 0) & (slope != 0)):
        return False
    unit = 1.0 / np.where(norms > 0, norms, 1.0)
    scaled = slope * unit
    solution, *_ = np.linalg.lstsq((jacobian * unit).T, scaled, rcond=1e-9)
    miss = np.linalg.norm((jacobian * unit).T @ solution - scaled)
    return bool(miss <= TOLERANCE * max(float(np.linalg.norm(scaled)), 1e-300))
