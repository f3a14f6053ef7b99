"""Modes of a posterior from the minima that a fit found."""

from __future__ import annotations

from typing import Any

import numpy as np

from fitcore.sampling.mixture import regularised
from fitcore.sampling.preparation import Mode

__all__ = ["modes_of_fit"]


def modes_of_fit(problem: Any, fit: Any, *, delta_chi2: float = 25.0) -> list[Mode]:
    """Modes (point, covariance, weight) at the minima of a fit.

    Parameters
    ----------
    problem : Problem
        Offers ``parameters`` and ``linearise(theta)``.
    fit : FitResult
        Its parameters and other minima are the modes.
    delta_chi2 : float
        Minima higher than this above the best are left out.

    Returns
    -------
    list of (ndarray (n,), ndarray (n, n), float)
        Covariances from the Jacobian at each minimum; weights by Laplace's approximation,
        exp(-chi2/2) sqrt(det covariance). They need not be right: the chain finds the weights itself.
    """
    names = list(problem.parameter_names)
    start = np.array([p.start for p in problem.parameters], dtype=np.float64)
    lower = np.array([p.lower for p in problem.parameters], dtype=np.float64)
    upper = np.array([p.upper for p in problem.parameters], dtype=np.float64)
    spread = np.array([abs(getattr(p, "scale", 0.0) or 1.0) for p in problem.parameters])
    points = [[fit.parameters[n].value if n in fit.parameters else start[i] for i, n in enumerate(names)]]
    points += [
        [minimum.parameters.get(n, points[0][i]) for i, n in enumerate(names)]
        for minimum in fit.other_minima
        if minimum.chi2 - fit.chi2 < delta_chi2
    ]
    theta = np.clip(np.array(points, dtype=np.float64), lower, upper)
    linear = problem.linearise(theta)
    chi2 = np.asarray(linear.chi2, dtype=np.float64)
    modes: list[Mode] = []
    log_weights = []
    for k, normal in enumerate(np.asarray(linear.normal.dense(), dtype=np.float64)):
        covariance = _inverse(normal, spread)
        modes.append((theta[k], covariance, 1.0))
        log_weights.append(-0.5 * chi2[k] + 0.5 * np.linalg.slogdet(covariance)[1])
    top = max(w for w in log_weights if np.isfinite(w)) if np.isfinite(log_weights).any() else 0.0
    return [
        (point, covariance, float(np.exp(w - top)) if np.isfinite(w) else 0.0)
        for (point, covariance, _), w in zip(modes, log_weights, strict=True)
    ]


def _inverse(normal: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Inverse of a normal matrix; directions that nothing constrains get the parameters' own scale."""
    width = np.sqrt(np.diagonal(normal))
    free = ~(width > 0)
    # Anything wider than 1e6 scales is unconstrained as far as sampling is concerned.
    scaled = normal * np.outer(spread, spread)
    values, vectors = np.linalg.eigh(0.5 * (scaled + scaled.T))
    covariance = (vectors / np.maximum(values, 1e-12 * max(values.max(), 1e-12))) @ vectors.T
    covariance = covariance * np.outer(spread, spread)
    covariance[free, :] = np.nan
    covariance[:, free] = np.nan
    covariance[free, free] = np.nan
    return regularised(covariance, spread)
