"""A mixture of multivariate Student-t densities: proposals and importance sampling draw from it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from observables.errors import InputError

__all__ = ["StudentMixture", "boxed_parameters", "regularised"]

# A parameter whose width is more than this share of its range is drawn on the probit scale.
_BOXED_SHARE = 0.1
_EDGE = 1e-15


class StudentMixture:
    """Mixture of Student-t densities, on the probit scale for parameters that fill their range.

    For a *boxed* parameter with range [lower, upper] the mixture lives in y = Phi^-1((x - lower)/(upper -
    lower)): a uniform parameter becomes a unit Gaussian, and no draw falls outside the range.

    Parameters
    ----------
    weights : array_like (K,)
        Non-negative, normalised here.
    means : array_like (K, n)
        Centres, on the probit scale for boxed parameters.
    scales : array_like (K, n, n)
        Scale matrices (the covariance is degrees/(degrees - 2) times as large).
    degrees : float
        Degrees of freedom, > 0.
    lower, upper : array_like (n,)
        Bounds, may be infinite.
    boxed : array_like of bool (n,)
        Which parameters use the probit scale; they need finite bounds.

    Raises
    ------
    InputError
        When a scale matrix is not positive definite or shapes disagree.
    """

    def __init__(
        self, weights: Any, means: Any, scales: Any, degrees: float, lower: Any, upper: Any, boxed: Any
    ) -> None:
        self.weights = np.atleast_1d(np.asarray(weights, dtype=np.float64))
        self.means = np.atleast_2d(np.asarray(means, dtype=np.float64))
        self.scales = np.asarray(scales, dtype=np.float64).reshape(*self.means.shape, -1)
        self.degrees = float(degrees)
        self.lower = np.asarray(lower, dtype=np.float64)
        self.upper = np.asarray(upper, dtype=np.float64)
        self.boxed = np.asarray(boxed, dtype=bool)
        if np.any(self.weights < 0) or not self.weights.sum() > 0 or self.degrees <= 0:
            raise InputError("mixture: weights must be non-negative with a positive sum, degrees positive")
        self.weights = self.weights / self.weights.sum()
        try:
            self._roots = np.linalg.cholesky(self.scales)
        except np.linalg.LinAlgError as error:
            raise InputError("mixture: a scale matrix is not positive definite") from error
        self._inverse_roots = np.linalg.inv(self._roots)
        self._log_norms = self._normalisations()

    def _normalisations(self) -> np.ndarray:
        from scipy.special import gammaln

        nu, n = self.degrees, self.means.shape[1]
        log_determinants = 2.0 * np.log(np.diagonal(self._roots, axis1=1, axis2=2)).sum(axis=1)
        constant = gammaln(0.5 * (nu + n)) - gammaln(0.5 * nu) - 0.5 * n * np.log(nu * np.pi)
        return np.asarray(constant - 0.5 * log_determinants)

    def with_degrees(self, degrees: float) -> StudentMixture:
        """The same mixture with other degrees of freedom."""
        return StudentMixture(
            self.weights, self.means, self.scales, degrees, self.lower, self.upper, self.boxed
        )

    def draw(self, size: int, random: Any) -> np.ndarray:
        """Draw points (size, n); ``random`` is a Generator or a legacy RandomState."""
        n = self.means.shape[1]
        component = np.searchsorted(np.cumsum(self.weights), random.random(size))
        component = np.minimum(component, len(self.weights) - 1)
        normal = random.standard_normal((size, n))
        stretch = np.sqrt(self.degrees / random.chisquare(self.degrees, size))[:, None]
        y = np.empty((size, n))
        for k in range(len(self.weights)):
            rows = component == k
            y[rows] = self.means[k] + stretch[rows] * (normal[rows] @ self._roots[k].T)
        return from_probit(y, self.lower, self.upper, self.boxed)

    def log_density(self, theta: np.ndarray) -> np.ndarray:
        """Logarithm of the normalised density at ``theta`` (B, n), shape (B,)."""
        y, log_jacobian = to_probit(theta, self.lower, self.upper, self.boxed)
        nu, n = self.degrees, y.shape[1]
        terms = np.empty((len(self.weights), len(y)))
        with np.errstate(divide="ignore"):
            log_weights = np.log(self.weights)
        for k in range(len(self.weights)):
            whitened = (y - self.means[k]) @ self._inverse_roots[k].T
            distance = np.einsum("ij,ij->i", whitened, whitened)
            terms[k] = log_weights[k] + self._log_norms[k] - 0.5 * (nu + n) * np.log1p(distance / nu)
        if len(terms) == 1:
            return np.asarray(terms[0] + log_jacobian)
        top = terms.max(axis=0)
        return np.asarray(top + np.log(np.exp(terms - top).sum(axis=0)) + log_jacobian)

    def nearest(self, theta: np.ndarray) -> np.ndarray:
        """Component whose centre is nearest in its own metric, (B,) of int."""
        y, _ = to_probit(theta, self.lower, self.upper, self.boxed)
        distances = np.empty((len(self.weights), len(y)))
        for k in range(len(self.weights)):
            whitened = (y - self.means[k]) @ self._inverse_roots[k].T
            distances[k] = np.einsum("ij,ij->i", whitened, whitened)
        return np.asarray(distances.argmin(axis=0))

    def arrays(self) -> dict[str, np.ndarray]:
        """Everything that defines the mixture, for storage."""
        return {
            "weights": self.weights,
            "means": self.means,
            "scales": self.scales,
            "degrees": np.array(self.degrees),
            "lower": self.lower,
            "upper": self.upper,
            "boxed": self.boxed.astype(np.float64),
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> StudentMixture:
        """The mixture back from :meth:`arrays`."""
        a = arrays
        return cls(
            a["weights"], a["means"], a["scales"], float(a["degrees"]), a["lower"], a["upper"], a["boxed"] > 0.5
        )

    @classmethod
    def from_modes(
        cls,
        modes: Sequence[tuple[np.ndarray, np.ndarray, float]],
        lower: np.ndarray,
        upper: np.ndarray,
        spread: np.ndarray,
        *,
        degrees: float = 5.0,
    ) -> StudentMixture:
        """Mixture from (point, covariance, weight) of each mode.

        Boxed parameters of a fit's covariance get a uniform marginal instead: near a bound the covariance
        says nothing about them.
        """
        covariances = [regularised(np.asarray(c, dtype=np.float64), spread) for _, c, _ in modes]
        widths = np.sqrt(np.max([np.diagonal(c) for c in covariances], axis=0))
        boxed = boxed_parameters(widths, lower, upper)
        means, scales = [], []
        for (point, _, _), covariance in zip(modes, covariances, strict=True):
            mean, scale = np.array(point, dtype=np.float64), covariance.copy()
            mean[boxed] = 0.0
            scale[boxed, :] = 0.0
            scale[:, boxed] = 0.0
            scale[boxed, boxed] = 1.0
            means.append(mean)
            scales.append(scale)
        weights = [w for _, _, w in modes]
        return cls(weights, means, scales, degrees, lower, upper, boxed)

    @classmethod
    def from_draws(
        cls,
        draws: np.ndarray,
        labels: np.ndarray,
        lower: np.ndarray,
        upper: np.ndarray,
        spread: np.ndarray,
        *,
        degrees: float = 5.0,
    ) -> StudentMixture:
        """Mixture with one component per label, from draws (B, n) of the density to be imitated."""
        boxed = boxed_parameters(draws.std(axis=0), lower, upper)
        y, _ = to_probit(draws, lower, upper, boxed)
        spread = np.where(boxed, 1.0, spread)
        weights, means, scales = [], [], []
        for label in np.unique(labels):
            members = y[labels == label]
            # Fewer draws than this give a covariance matrix that is mostly noise.
            if len(members) < 5 * y.shape[1]:
                continue
            weights.append(len(members))
            means.append(members.mean(axis=0))
            scales.append(regularised(np.atleast_2d(np.cov(members, rowvar=False)), spread))
        if not weights:
            weights, means = [1], [y.mean(axis=0)]
            scales = [regularised(np.atleast_2d(np.cov(y, rowvar=False)), spread)]
        return cls(weights, means, scales, degrees, lower, upper, boxed)


def boxed_parameters(widths: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> np.ndarray:
    """Parameters whose width is a sizeable share of a finite range, (n,) of bool."""
    size = np.asarray(upper, dtype=np.float64) - np.asarray(lower, dtype=np.float64)
    return np.asarray(np.isfinite(size) & ~(np.asarray(widths) <= _BOXED_SHARE * size))


def to_probit(
    theta: np.ndarray, lower: np.ndarray, upper: np.ndarray, boxed: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Boxed columns on the probit scale, and log |dy/dx| summed over them."""
    y = np.array(theta, dtype=np.float64)
    log_jacobian = np.zeros(len(y))
    if not boxed.any():
        return y, log_jacobian
    from scipy.special import ndtri

    size = (upper - lower)[boxed]
    share = np.clip((y[:, boxed] - lower[boxed]) / size, _EDGE, 1.0 - _EDGE)
    z = ndtri(share)
    y[:, boxed] = z
    log_jacobian += (0.5 * z**2 + 0.5 * np.log(2.0 * np.pi) - np.log(size)).sum(axis=1)
    return y, log_jacobian


def from_probit(y: np.ndarray, lower: np.ndarray, upper: np.ndarray, boxed: np.ndarray) -> np.ndarray:
    """Inverse of :func:`to_probit`."""
    theta = np.array(y, dtype=np.float64)
    if boxed.any():
        from scipy.special import ndtr

        share = np.clip(ndtr(theta[:, boxed]), _EDGE, 1.0 - _EDGE)
        theta[:, boxed] = lower[boxed] + (upper - lower)[boxed] * share
    return theta


def regularised(covariance: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """A positive definite covariance matrix near ``covariance``.

    Rows without a finite positive variance (unconstrained or blanked parameters) get the variance
    ``spread``\\ :sup:`2` and no correlation; eigenvalues of the correlation matrix are kept above 1e-9.
    """
    covariance = np.array(covariance, dtype=np.float64)
    variance = np.diagonal(covariance)
    bad = ~(np.isfinite(covariance).all(axis=1) & (variance > 0))
    if bad.all() or not np.isfinite(covariance[~bad][:, ~bad]).all():
        bad = ~(np.isfinite(variance) & (variance > 0))
        covariance = np.where(np.isfinite(covariance), covariance, 0.0)
    covariance[bad, :] = 0.0
    covariance[:, bad] = 0.0
    covariance[bad, bad] = np.asarray(spread, dtype=np.float64)[bad] ** 2
    width = np.sqrt(np.diagonal(covariance))
    values, vectors = np.linalg.eigh(covariance / np.outer(width, width))
    correlation = (vectors * np.maximum(values, 1e-9)) @ vectors.T
    return np.asarray(0.5 * (correlation + correlation.T) * np.outer(width, width))
