"""What comes out of the batch solver."""

from __future__ import annotations

from dataclasses import dataclass, fields
from enum import IntEnum

import numpy as np


class Status(IntEnum):
    """How a row of `minimise_batch` ended; only ``CONVERGED`` is a minimum."""

    CONVERGED = 0
    TOO_MANY_ITERATIONS = 1
    STALLED = 2
    IMPOSSIBLE_START = 3
    OUT_OF_REACH = 4


@dataclass(frozen=True, eq=False)
class BatchResult:
    """Minima found by `minimise_batch`, one per row.

    Attributes
    ----------
    theta : ndarray, shape (B, n)
    chi2 : ndarray, shape (B,)
        Chi-square evaluated at `theta`; +inf where the row never had a possible point.
    converged : ndarray of bool, shape (B,)
        Expected distance below the tolerance and constraints met; everything else is not a minimum.
    distance : ndarray, shape (B,)
        Expected distance to the minimum in chi-square, at the last linearised point (one step before `theta`).
    status : ndarray of int8, shape (B,)
        `Status` of the row.
    gradient : ndarray, shape (B, n)
        d chi2 / d theta at `theta` by the last linear model: for a held parameter the slope of the profile.
    slopes : ndarray, shape (B, k)
        d (min chi2) / d target of the equality constraints.
    reach : ndarray, shape (B, k)
        Standard deviations of the constrained quantities in the last quadratic model.
    at_bound : ndarray of int8, shape (B, n)
        +1 (-1) where the upper (lower) bound is active.
    singular : ndarray of bool, shape (B,)
        The normal matrix lost rank on the way and got a ridge of 1e-6: some direction is not constrained.
    iterations, n_linearisations : ndarray of int, shape (B,)
        Accepted steps; linearisations used.
    """

    theta: np.ndarray
    chi2: np.ndarray
    converged: np.ndarray
    distance: np.ndarray
    status: np.ndarray
    gradient: np.ndarray
    slopes: np.ndarray
    reach: np.ndarray
    at_bound: np.ndarray
    singular: np.ndarray
    iterations: np.ndarray
    n_linearisations: np.ndarray

    def put(self, rows: np.ndarray, other: BatchResult) -> None:
        """Overwrite rows with those of `other` (effort is added up)."""
        for field in fields(self):
            mine, theirs = getattr(self, field.name), getattr(other, field.name)
            mine[rows] = mine[rows] + theirs if field.name in ("iterations", "n_linearisations") else theirs
