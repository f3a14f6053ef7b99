"""Combining measurements of one quantity: weighted average and scale factor."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from observables.errors import InputError


@dataclass(frozen=True)
class Average:
    """Weighted average of N values.

    Attributes
    ----------
    value, error : float
        Average and its error before scaling.
    scale : float
        Scale factor S >= 1.
    chi2 : float
        Chi-square of the values kept for S.
    kept : int
        Number of values kept for S.
    """

    value: float
    error: float
    scale: float
    chi2: float
    kept: int


def average(values: ArrayLike, plus: ArrayLike, minus: ArrayLike) -> Average:
    """Average uncorrelated measurements and find the scale factor of their errors.

    Weights are 1/s_i(x)^2 with s_i interpolated linearly between ``minus`` at x_i - minus and ``plus`` at
    x_i + plus, iterated. The scale factor is ``S = sqrt(chi2 / (N - 1))`` over the values with
    s_i <= 3 sqrt(N) dx, and at least 1.

    Parameters
    ----------
    values, plus, minus : array_like, shape (N,)

    References
    ----------
    The procedure of the introduction to the Review of Particle Physics, section "Unconstrained averaging".
    """
    x_i = np.asarray(values, dtype=np.float64)
    up, down = np.asarray(plus, dtype=np.float64), np.asarray(minus, dtype=np.float64)
    if x_i.ndim != 1 or x_i.size == 0 or up.shape != x_i.shape or down.shape != x_i.shape:
        raise InputError("an average needs at least one value, each with its two errors")
    x = float(np.mean(x_i))
    for _ in range(200):
        # Between the two ends the error is linear in x; outside it stays at the nearer end's.
        s = down + (up - down) * np.clip((x - x_i + down) / (up + down), 0.0, 1.0)
        weights = s**-2
        previous, x = x, float(np.sum(weights * x_i) / np.sum(weights))
        if abs(x - previous) <= 1e-13 * (abs(x) + float(np.min(s))):
            break
    error = float(np.sum(weights)) ** -0.5
    keep = s <= 3.0 * math.sqrt(x_i.size) * error
    kept = int(keep.sum())
    chi2 = float(np.sum(((x_i - x) / s)[keep] ** 2))
    scale = math.sqrt(chi2 / (kept - 1)) if kept > 1 else 1.0
    return Average(x, error, max(1.0, scale), chi2, kept)
