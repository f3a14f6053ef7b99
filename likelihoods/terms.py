"""The statistical model of all entries at once: standardised residuals, whitening, pseudo-data.

Arrays carry the entries on their first axis; every further axis is a batch. With u the standardised residuals
and R the correlation matrix, ``-2 ln L = u^T R^-1 u + const`` = sum of squares of the whitened residuals.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from likelihoods.covariance import LOWEST_EIGENVALUE, connected_components, lowest_eigenvalue
from likelihoods.entries import Entry
from observables.errors import InputError

#: Beyond this many standard deviations on its singular side an asymmetric term continues with its tangent.
TANGENT_FROM = 8.0

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CorrelationBlock:
    """One group of correlated entries.

    Attributes
    ----------
    indices : ndarray of int, shape (k,)
        Positions of the entries.
    correlation, cholesky, inverse : ndarray, shape (k, k)
        R, its lower Cholesky factor L (R = L L^T), and R^-1.
    """

    indices: NDArray[np.intp]
    correlation: Array
    cholesky: Array
    inverse: Array


class Terms:
    """Likelihood terms of m entries, compiled for batches.

    Parameters
    ----------
    values, plus, minus : array_like, shape (m,)
        Measured values and total errors (> 0).
    correlation : array_like, shape (m, m), optional
        Correlation matrix; the unit matrix if not given.
    periods : sequence of float or None, optional
        Period of each quantity; None where it has none.

    Notes
    -----
    A Gaussian entry has ``u = (predicted - measured) / sigma``. An asymmetric one has, with
    d = predicted - measured, V = plus * minus and V' = plus - minus, ``u = d / sqrt(V + V' d)`` (variance
    linear in the prediction; R. Barlow, arXiv:physics/0406120, quoted from memory): u = 1 at d = plus and
    u = -1 at d = -minus. Where the root runs towards its singularity, u continues with its tangent from
    |u| = 8, so that it is smooth and finite everywhere.

    Differences of periodic quantities are wrapped to (-period/2, period/2].

    Raises
    ------
    InputError
        When errors are not positive and finite or the matrix is not positive definite.
    """

    def __init__(
        self,
        values: ArrayLike,
        plus: ArrayLike,
        minus: ArrayLike,
        correlation: ArrayLike | None = None,
        periods: Sequence[float | None] | None = None,
    ) -> None:
        self.values: Array = np.array(values, dtype=np.float64)
        self.plus: Array = np.array(plus, dtype=np.float64)
        self.minus: Array = np.array(minus, dtype=np.float64)
        m = self.values.size
        if self.values.shape != (m,) or self.plus.shape != (m,) or self.minus.shape != (m,):
            raise InputError("values, plus and minus must be one-dimensional and of one length")
        for name, numbers in (("plus", self.plus), ("minus", self.minus)):
            if not (np.isfinite(numbers) & (numbers > 0.0)).all():
                raise InputError(f"every {name} error must be positive and finite")
        self.correlation: Array = (
            np.eye(m) if correlation is None else np.array(correlation, dtype=np.float64)
        )
        if self.correlation.shape != (m, m):
            raise InputError(f"the correlation matrix must be {m} x {m}, not {self.correlation.shape}")
        self.correlation_blocks: tuple[CorrelationBlock, ...] = tuple(
            _factorise(self.correlation, indices) for indices in connected_components(self.correlation)
        )

        self._inverse_sigma = 1.0 / self.plus
        self._asymmetric = np.flatnonzero(self.plus != self.minus)
        p, q = self.plus[self._asymmetric], self.minus[self._asymmetric]
        self._variance = p * q
        self._slope = p - q
        # u at the start of the tangent; there the difference, the variance and the tangent's slope.
        self._edge_u = -TANGENT_FROM * np.sign(self._slope)
        self._edge_d = _difference_at(self._edge_u, self._variance, self._slope)
        self._edge_total = (self._edge_d / self._edge_u) ** 2
        self._edge_du = _derivative(self._edge_total, self._variance)

        self.periods: tuple[float | None, ...] = (None,) * m if periods is None else tuple(periods)
        self._periodic = np.array([i for i, period in enumerate(self.periods) if period], dtype=np.intp)
        self._period = np.array([self.periods[i] for i in self._periodic], dtype=np.float64)

    @classmethod
    def from_entries(cls, entries: Sequence[Entry], correlation: ArrayLike | None = None) -> Terms:
        """Compile entries and the correlation matrix between them."""
        return cls(
            [entry.value for entry in entries],
            [entry.plus for entry in entries],
            [entry.minus for entry in entries],
            correlation,
            [entry.period for entry in entries],
        )

    @property
    def degrees_of_freedom(self) -> int:
        """Number of terms that count (one per entry); the rank of the Jacobian is for the fit to subtract."""
        return self.values.size

    def standardised(self, predictions: ArrayLike, measured: ArrayLike | None = None) -> Array:
        """Elementwise standardised residuals u.

        Parameters
        ----------
        predictions : array_like, shape (m, ...)
            Predicted values.
        measured : array_like, shape (m, ...), optional
            Measured values that replace the entries' own (pseudo-data); broadcast against the predictions.

        Returns
        -------
        ndarray, shape (m, ...)
        """
        d = self._difference(predictions, measured)
        u = d * _rows(self._inverse_sigma, d.ndim)
        if self._asymmetric.size:
            v, slope, edge_u, edge_d, edge_total, edge_du = self._asymmetric_columns(d.ndim)
            d = d[self._asymmetric]
            beyond = (d - edge_d) * np.sign(edge_u) > 0.0
            # On this side of the edge the variance is at least the edge's; the maximum only mends rounding.
            total = np.maximum(v + slope * d, edge_total)
            u[self._asymmetric] = np.where(beyond, edge_u + edge_du * (d - edge_d), d / np.sqrt(total))
        return u

    def standardised_derivative(self, predictions: ArrayLike, measured: ArrayLike | None = None) -> Array:
        """Derivative du/dprediction of `standardised`, elementwise, shape (m, ...)."""
        d = self._difference(predictions, measured)
        derivative = np.where(np.isnan(d), np.nan, _rows(self._inverse_sigma, d.ndim))
        if self._asymmetric.size:
            v, slope, _, _, edge_total, _ = self._asymmetric_columns(d.ndim)
            # Beyond the edge the variance would be smaller: the maximum gives the slope of the tangent there.
            total = np.maximum(v + slope * d[self._asymmetric], edge_total)
            derivative[self._asymmetric] = _derivative(total, v)
        return derivative

    def standardised_row(self, row: int, prediction: Any, measured: Any = None) -> Any:
        """Standardised residual of one entry, for any array-like that numpy ufuncs and ``where`` work on.

        Parameters
        ----------
        row : int
            Position of the entry.
        prediction : array_like
            Predicted values, any shape; arrays that carry derivatives pass through.
        measured : array_like, optional
            Measured values that replace the entry's own.
        """
        d = prediction - (self.values[row] if measured is None else measured)
        period = self.periods[row]
        if period:
            d = d - period * np.ceil(d / period - 0.5)
        position = int(np.searchsorted(self._asymmetric, row))
        if position == self._asymmetric.size or self._asymmetric[position] != row:
            return d * self._inverse_sigma[row]
        v, slope = self._variance[position], self._slope[position]
        edge_u, edge_d, edge_du = self._edge_u[position], self._edge_d[position], self._edge_du[position]
        beyond = (d - edge_d) * np.sign(edge_u) > 0.0
        total = np.maximum(v + slope * d, self._edge_total[position])
        return np.where(beyond, edge_u + edge_du * (d - edge_d), d / np.sqrt(total))

    def derivative_row(self, row: int, prediction: Any, measured: Any = None) -> Any:
        """Derivative du/dprediction of one entry, in the shape of the prediction."""
        one = Terms(
            self.values[row : row + 1],
            self.plus[row : row + 1],
            self.minus[row : row + 1],
            None,
            self.periods[row : row + 1],
        )
        prediction = np.asarray(prediction, dtype=np.float64)
        given = None if measured is None else np.asarray(measured, dtype=np.float64)[None]
        return one.standardised_derivative(prediction[None], given)[0]

    def whiten(self, u: ArrayLike) -> Array:
        """Whitened residuals L^-1 u, shape (m, ...); the sum of their squares is u^T R^-1 u.

        Elementwise operations only (no matrix library): one point, a batch and its parts agree to the bit.
        """
        r = np.array(u, dtype=np.float64)
        for block in self.correlation_blocks:
            rest = r[block.indices]
            for j, pivot in enumerate(np.diagonal(block.cholesky)):
                rest[j] /= pivot
                if j + 1 < len(rest):
                    rest[j + 1 :] -= _rows(block.cholesky[j + 1 :, j], rest.ndim) * rest[j]
            r[block.indices] = rest
        return r

    def pseudo_data(
        self, predictions: ArrayLike, size: int, rng: np.random.Generator | int | None = None
    ) -> Array:
        """Measured values thrown from each term's own distribution around the predictions.

        Parameters
        ----------
        predictions : array_like, shape (m,)
            True values.
        size : int
            Number of pseudo-experiments.
        rng : Generator, int or None
            Source of randomness, as `numpy.random.default_rng` takes it.

        Returns
        -------
        ndarray, shape (size, m)
            Their standardised residuals are exactly the normal deviates thrown (correlated as R says).
        """
        truth = np.asarray(predictions, dtype=np.float64)
        if truth.shape != self.values.shape:
            raise InputError(f"predictions must have the shape ({self.values.size},), not {truth.shape}")
        z = np.random.default_rng(rng).standard_normal((size, truth.size))
        for block in self.correlation_blocks:
            z[:, block.indices] = z[:, block.indices] @ block.cholesky.T
        return self.measured_at(truth, z)

    def measured_at(self, predictions: ArrayLike, u: ArrayLike) -> Array:
        """Measured values at which the standardised residuals are u: the inverse of `standardised`.

        Parameters
        ----------
        predictions : array_like, shape (m,)
        u : array_like, shape (..., m)

        Returns
        -------
        ndarray, shape (..., m)
        """
        u = np.asarray(u, dtype=np.float64)
        d = u * self.plus
        if self._asymmetric.size:
            z = u[..., self._asymmetric]
            beyond = (z - self._edge_u) * np.sign(self._edge_u) > 0.0
            inside = np.where(beyond, self._edge_u, z)
            d[..., self._asymmetric] = np.where(
                beyond,
                self._edge_d + (z - self._edge_u) / self._edge_du,
                _difference_at(inside, self._variance, self._slope),
            )
        result: Array = np.asarray(predictions, dtype=np.float64) - d
        return result

    def _difference(self, predictions: ArrayLike, measured: ArrayLike | None) -> Array:
        predicted = np.asarray(predictions, dtype=np.float64)
        if measured is None:
            given = _rows(self.values, predicted.ndim)
        else:
            given = np.asarray(measured, dtype=np.float64)
            if given.ndim < predicted.ndim:
                given = given.reshape(given.shape + (1,) * (predicted.ndim - given.ndim))
        d: Array = predicted - given
        if self._periodic.size:
            period = _rows(self._period, d.ndim)
            part = d[self._periodic]
            d[self._periodic] = part - period * np.ceil(part / period - 0.5)
        return d

    def _asymmetric_columns(self, ndim: int) -> tuple[Array, Array, Array, Array, Array, Array]:
        return (
            _rows(self._variance, ndim),
            _rows(self._slope, ndim),
            _rows(self._edge_u, ndim),
            _rows(self._edge_d, ndim),
            _rows(self._edge_total, ndim),
            _rows(self._edge_du, ndim),
        )


def _rows(numbers: Array, ndim: int) -> Array:
    """Reshape one number per row so that it broadcasts over the batch axes."""
    return numbers.reshape(numbers.shape + (1,) * (ndim - 1))


def _difference_at(u: Array, variance: Array, slope: Array) -> Array:
    """Solve u = d / sqrt(variance + slope d) for d, without cancellation."""
    a = slope * u
    root = np.sqrt(a * a + 4.0 * variance)
    half = np.where(a > 0.0, 0.5 * (a + root), 2.0 * variance / np.where(a > 0.0, 1.0, root - a))
    return u * half


def _derivative(total: Array, variance: Array) -> Array:
    """Derivative of u = d / sqrt(total) with total = variance + slope d."""
    result: Array = 0.5 * (variance + total) / (total * np.sqrt(total))
    return result


def _factorise(correlation: Array, indices: NDArray[np.intp]) -> CorrelationBlock:
    matrix = correlation[np.ix_(indices, indices)]
    lowest = lowest_eigenvalue(matrix)
    if not (math.isfinite(lowest) and lowest > LOWEST_EIGENVALUE and (matrix == matrix.T).all()):
        raise InputError(
            f"the correlation matrix of the terms {indices.tolist()} is not symmetric and positive definite "
            f"(lowest eigenvalue {lowest:.3g})"
        )
    cholesky: Array = np.linalg.cholesky(matrix).astype(np.float64)
    half: Array = np.linalg.solve(cholesky, np.eye(len(indices))).astype(np.float64)
    inverse: Array = half.T @ half
    return CorrelationBlock(indices, matrix, cholesky, inverse)
