"""A mixture of multivariate Student-t densities: proposals and importance sampling draw from it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from fitcore.sampling.scales import Scales, chosen_scales
from observables.errors import InputError

__all__ = ["StudentMixture", "regularised"]


class StudentMixture:
    """Mixture of Student-t densities in suitably scaled parameters.

    Parameters
    ----------
    weights : array_like (K,)
        Non-negative, normalised here.
    means : array_like (K, n)
        Centres, in scaled parameters.
    covariances : array_like (K, n, n)
        Scale matrices (the covariance is degrees/(degrees - 2) times as large), in scaled parameters.
    degrees : float
        Degrees of freedom, > 0.
    scales : Scales
        How each parameter is scaled: as it is, logarithmically, or by its share of its range.

    Raises
    ------
    InputError
        When a scale matrix is not positive definite or shapes disagree.
    """

    def __init__(self, weights: Any, means: Any, covariances: Any, degrees: float, scales: Scales) -> None:
        self.weights = np.atleast_1d(np.asarray(weights, dtype=np.float64))
        self.means = np.atleast_2d(np.asarray(means, dtype=np.float64))
        self.covariances = np.asarray(covariances, dtype=np.float64).reshape(*self.means.shape, -1)
        self.degrees = float(degrees)
        self.scales = scales
        if np.any(self.weights < 0) or not self.weights.sum() > 0 or self.degrees <= 0:
            raise InputError("mixture: weights must be non-negative with a positive sum, degrees positive")
        self.weights = self.weights / self.weights.sum()
        try:
            self._roots = np.linalg.cholesky(self.covariances)
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
        return StudentMixture(self.weights, self.means, self.covariances, degrees, self.scales)

    def component(self, k: int, *, shrink: float = 1.0, degrees: float | None = None) -> StudentMixture:
        """One component alone, ``shrink`` times as wide."""
        degrees = self.degrees if degrees is None else degrees
        return StudentMixture(
            [1.0], self.means[k], shrink**2 * self.covariances[k][None], degrees, self.scales
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
        return self.scales.unscaled(y)

    def log_density(self, theta: np.ndarray) -> np.ndarray:
        """Logarithm of the normalised density at ``theta`` (B, n), shape (B,)."""
        y, log_jacobian = self.scales.scaled(theta)
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
        y, _ = self.scales.scaled(theta)
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
            "covariances": self.covariances,
            "degrees": np.array(self.degrees),
            "lower": self.scales.lower,
            "upper": self.scales.upper,
            "kinds": self.scales.kinds.astype(np.float64),
            "shear": self.scales.shear,
        }

    @classmethod
    def from_arrays(cls, arrays: Mapping[str, np.ndarray]) -> StudentMixture:
        """The mixture back from :meth:`arrays`."""
        shear = arrays.get("shear", np.zeros((0, 0)))
        scales = Scales(arrays["kinds"].astype(np.int64), arrays["lower"], arrays["upper"], shear)
        return cls(
            arrays["weights"], arrays["means"], arrays["covariances"], float(arrays["degrees"]), scales
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

        Parameters that fill their range get a uniform marginal instead of the fit's: near a bound the
        covariance says nothing about them. It does say how the others follow them.
        """
        points = np.array([p for p, _, _ in modes], dtype=np.float64)
        covariances = [regularised(np.asarray(c, dtype=np.float64), spread) for _, c, _ in modes]
        widths = np.sqrt(np.max([np.diagonal(c) for c in covariances], axis=0))
        scales = chosen_scales(points.min(axis=0), widths, lower, upper)
        boxed, logarithmic = scales.boxed, scales.logarithmic
        size = np.where(boxed, scales.upper - scales.lower, 1.0)
        prepared = []
        for point, covariance in zip(points, covariances, strict=True):
            mean = point.copy()
            mean[logarithmic] = np.log(point[logarithmic])
            slope = np.where(logarithmic, 1.0 / np.where(logarithmic, point, 1.0), 1.0) / size
            prepared.append((mean, *_given_boxed(covariance * np.outer(slope, slope), boxed)))
        if boxed.any():
            # The others follow the boxed ones as at the weightiest mode.
            _, _, slopes = prepared[int(np.argmax([w for _, _, w in modes]))]
            scales = replace(scales, shear=np.concatenate([slopes, np.zeros_like(slopes)]))
        means, scaled = [], []
        for point, (mean, covariance, _) in zip(points, prepared, strict=True):
            if scales.shear.size:
                mean -= (scales.features(point[None]) @ scales.shear)[0]
            mean[boxed] = 0.0
            means.append(mean)
            scaled.append(covariance)
        return cls([w for _, _, w in modes], means, scaled, degrees, scales)

    @classmethod
    def from_draws(
        cls,
        draws: np.ndarray,
        labels: np.ndarray,
        lower: np.ndarray,
        upper: np.ndarray,
        *,
        degrees: float = 5.0,
    ) -> StudentMixture:
        """Mixture with one component per label, from draws (B, n) of the density to be imitated."""
        width = draws.std(axis=0)
        # As if every parameter could come this low: a logarithm must not meet zero.
        lowest = np.minimum(draws.mean(axis=0), draws.min(axis=0) + 4.0 * width)
        scales = chosen_scales(lowest, width, lower, upper).sheared(draws, labels)
        y, _ = scales.scaled(draws)
        spread = np.maximum(y.std(axis=0), 1e-300)
        weights, means, covariances = [], [], []
        for label in np.unique(labels):
            members = y[labels == label]
            # Fewer draws than this give a covariance matrix that is mostly noise.
            if len(members) < 5 * y.shape[1]:
                continue
            weights.append(len(members))
            means.append(members.mean(axis=0))
            covariances.append(regularised(np.atleast_2d(np.cov(members, rowvar=False)), spread))
        if not weights:
            weights, means = [1], [y.mean(axis=0)]
            covariances = [regularised(np.atleast_2d(np.cov(y, rowvar=False)), spread)]
        return cls(weights, means, covariances, degrees, scales)


def _given_boxed(covariance: np.ndarray, boxed: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Covariance of the others at given boxed parameters, one for the boxed; and the others' slopes (boxed, n)."""
    given = np.zeros_like(covariance)
    given[boxed, boxed] = 1.0
    slopes = np.zeros((int(boxed.sum()), len(covariance)))
    other = ~boxed
    if other.any():
        width = np.sqrt(np.diagonal(covariance))
        precision = np.linalg.inv(covariance / np.outer(width, width)) / np.outer(width, width)
        inner = np.linalg.inv(precision[np.ix_(other, other)])
        given[np.ix_(other, other)] = 0.5 * (inner + inner.T)
        slopes[:, other] = -precision[np.ix_(boxed, other)] @ inner
    return given, slopes


def regularised(covariance: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """A positive definite covariance matrix near ``covariance``.

    Rows without a finite positive variance (unconstrained or blanked parameters) get the variance
    ``spread``\\ :sup:`2` and no correlation; eigenvalues of the correlation matrix are kept above 1e-9.
    """
    covariance = np.array(covariance, dtype=np.float64)
    variance = np.diagonal(covariance)
    bad = ~(np.isfinite(variance) & (variance > 0))
    covariance = np.where(np.isfinite(covariance), covariance, 0.0)
    covariance[bad, :] = 0.0
    covariance[:, bad] = 0.0
    covariance[bad, bad] = np.asarray(spread, dtype=np.float64)[bad] ** 2
    width = np.sqrt(np.diagonal(covariance))
    values, vectors = np.linalg.eigh(covariance / np.outer(width, width))
    correlation = (vectors * np.maximum(values, 1e-9)) @ vectors.T
    return np.asarray(0.5 * (correlation + correlation.T) * np.outer(width, width))
