"""Scales of parameters on which a posterior looks more like a Gaussian."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

__all__ = ["Scales", "chosen_scales"]

LINEAR, LOGARITHMIC, PROBIT = 0, 1, 2

# A parameter whose width is more than this share of its range fills it.
_BOXED_SHARE = 0.1
# A positive parameter at least this many widths from zero is taken logarithmically.
_POSITIVE_WIDTHS = 4.0
_EDGE = 1e-15


@dataclass(frozen=True)
class Scales:
    """A fixed change of variables, parameter by parameter.

    Linear parameters stay as they are. Logarithmic ones are y = ln x: predictions are products of powers, so
    a precise measurement leaves a curved valley in x that is straight in y. Boxed ones are
    y = Phi^-1((x - lower)/(upper - lower)): a uniform parameter becomes a unit Gaussian, and nothing falls
    outside its range.

    A parameter that a measurement ties to boxed ones follows them linearly in x, not in y. So the others are taken
    relative to a polynomial of the boxed ones, ``y -= features @ shear``; a triangular change, its Jacobian is one.

    Attributes
    ----------
    kinds : ndarray (n,) of int
        0 linear, 1 logarithmic, 2 boxed.
    lower, upper : ndarray (n,)
        Bounds; finite for boxed parameters.
    shear : ndarray (2 x number of boxed parameters, n)
        Coefficients of :meth:`features`; zero in the columns of boxed parameters. An empty array means none.
    """

    kinds: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    shear: np.ndarray = field(default_factory=lambda: np.zeros((0, 0)))

    @classmethod
    def linear(cls, n: int) -> Scales:
        """All ``n`` parameters as they are."""
        return cls(np.zeros(n, dtype=np.int64), np.full(n, -np.inf), np.full(n, np.inf))

    @property
    def boxed(self) -> np.ndarray:
        """Boxed parameters (n,) of bool."""
        return np.asarray(self.kinds == PROBIT)

    @property
    def logarithmic(self) -> np.ndarray:
        """Logarithmic parameters (n,) of bool."""
        return np.asarray(self.kinds == LOGARITHMIC)

    def features(self, theta: np.ndarray) -> np.ndarray:
        """Position of the boxed parameters in their ranges from -1/2 to 1/2, then its square less 1/12."""
        k = self.boxed
        share = (theta[:, k] - self.lower[k]) / (self.upper[k] - self.lower[k]) - 0.5
        return np.concatenate([share, share**2 - 1.0 / 12.0], axis=1)

    def sheared(self, theta: np.ndarray, labels: np.ndarray) -> Scales:
        """The same scales with the shear that fits draws (B, n) best, up to a constant per label (B,)."""
        boxed = self.boxed
        features = self.features(theta)
        if boxed.all() or len(theta) < 20 * (features.shape[1] or len(theta)):
            return self
        y = replace(self, shear=np.zeros((0, 0))).scaled(theta)[0]
        for label in np.unique(labels):
            members = labels == label
            features[members] -= features[members].mean(axis=0)
            y[members] -= y[members].mean(axis=0)
        shear = np.linalg.lstsq(features, y, rcond=1e-10)[0]
        shear[:, boxed] = 0.0
        return replace(self, shear=shear)

    def scaled(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Scaled parameters (B, n) of ``theta`` (B, n), and ln |dy/dx| summed over the parameters (B,)."""
        y = np.array(theta, dtype=np.float64)
        log_jacobian = np.zeros(len(y))
        k = np.flatnonzero(self.logarithmic)
        if len(k):
            y[:, k] = np.log(np.maximum(y[:, k], np.finfo(np.float64).tiny))
            log_jacobian -= y[:, k].sum(axis=1)
        k = np.flatnonzero(self.boxed)
        if len(k):
            from scipy.special import ndtri

            size = self.upper[k] - self.lower[k]
            z = ndtri(np.clip((y[:, k] - self.lower[k]) / size, _EDGE, 1.0 - _EDGE))
            y[:, k] = z
            log_jacobian += (0.5 * z**2 + 0.5 * np.log(2.0 * np.pi) - np.log(size)).sum(axis=1)
        if self.shear.size:
            y -= self.features(np.asarray(theta, dtype=np.float64)) @ self.shear
        return y, log_jacobian

    def unscaled(self, y: np.ndarray) -> np.ndarray:
        """Inverse of :meth:`scaled`."""
        theta = np.array(y, dtype=np.float64)
        k = np.flatnonzero(self.boxed)
        if len(k):
            from scipy.special import ndtr

            share = np.clip(ndtr(theta[:, k]), _EDGE, 1.0 - _EDGE)
            theta[:, k] = self.lower[k] + (self.upper[k] - self.lower[k]) * share
            if self.shear.size:
                theta += self.features(theta) @ self.shear
        k = np.flatnonzero(self.logarithmic)
        if len(k):
            # A far draw must stay finite; the posterior rejects it anyway.
            theta[:, k] = np.exp(np.clip(theta[:, k], -700.0, 700.0))
        return theta


def chosen_scales(centre: np.ndarray, widths: np.ndarray, lower: np.ndarray, upper: np.ndarray) -> Scales:
    """Scales for parameters around ``centre`` (n,) with ``widths`` (n,) inside their bounds."""
    lower, upper = np.asarray(lower, dtype=np.float64), np.asarray(upper, dtype=np.float64)
    size = upper - lower
    kinds = np.zeros(len(lower), dtype=np.int64)
    kinds[(lower >= 0.0) & (centre > _POSITIVE_WIDTHS * widths)] = LOGARITHMIC
    kinds[np.isfinite(size) & ~(widths <= _BOXED_SHARE * size)] = PROBIT
    return Scales(kinds, lower, upper)
