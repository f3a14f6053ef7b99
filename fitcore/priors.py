"""Prior densities of parameters, for posteriors only: never part of a chi-square fit."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

__all__ = ["log_prior", "proper"]


def log_prior(parameters: Sequence[Any], theta: np.ndarray) -> np.ndarray:
    """Log prior density.

    Parameters
    ----------
    parameters : sequence of FreeParameter
        ``prior`` is None (flat inside the bounds) or has ``kind`` and its numbers.
    theta : ndarray, shape (n, B)

    Returns
    -------
    ndarray, shape (B,)
        -inf outside. Flat priors with two finite bounds and all others are normalised inside the bounds; improper
        ones contribute 0 inside.
    """
    total = np.zeros(theta.shape[1])
    for parameter, values in zip(parameters, theta, strict=True):
        lower, upper = parameter.lower, parameter.upper
        prior = parameter.prior
        kind = "uniform" if prior is None else prior.kind
        with np.errstate(all="ignore"):
            if kind == "normal":
                z = (values - prior.mean) / prior.error
                total += (
                    -0.5 * z * z - np.log(prior.error * np.sqrt(2.0 * np.pi)) - _log_mass(prior, lower, upper)
                )
            elif kind == "log-uniform":
                lower, upper = max(lower, prior.lower), min(upper, prior.upper)
                total += -np.log(values) - np.log(np.log(upper / lower))
            else:  # uniform, or an isotropic angle, which is uniform over its period
                if kind == "isotropic-angle" and not (np.isfinite(lower) and np.isfinite(upper)):
                    period = parameter.period or 360.0
                    lower, upper = -0.5 * period, 0.5 * period
                elif prior is not None and kind == "uniform":
                    lower, upper = max(lower, prior.lower), min(upper, prior.upper)
                if np.isfinite(upper - lower):
                    total -= np.log(upper - lower)
        total[~((values >= lower) & (values <= upper))] = -np.inf
    return total


def _log_mass(prior: Any, lower: float, upper: float) -> float:
    """Log of the part of a normal prior that lies inside the bounds."""
    if np.isinf(lower) and np.isinf(upper):
        return 0.0
    from scipy.special import log_ndtr

    low, high = (lower - prior.mean) / prior.error, (upper - prior.mean) / prior.error
    if low > 0.0:  # the lower tail is where the difference of two logarithms is exact
        low, high = -high, -low
    return float(log_ndtr(high) + np.log1p(-np.exp(log_ndtr(low) - log_ndtr(high))))


def proper(parameter: Any) -> bool:
    """Whether the prior of a parameter can be normalised."""
    if parameter.prior is not None:
        return True
    return bool(np.isfinite(parameter.lower) and np.isfinite(parameter.upper))
