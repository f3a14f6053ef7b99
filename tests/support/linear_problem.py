"""A linear problem with Gaussian errors, where everything about pseudo-experiments is known in closed form.

Importable by worker processes (a plain module on the path), picklable, and with knobs that plant bugs.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass

import numpy as np

from fitcore.minimise.normal_matrix import Linearisation, SparseNormal


@dataclass(frozen=True)
class Axis:
    name: str
    start: float = 0.0
    lower: float = -np.inf
    upper: float = np.inf
    scale: float = 1.0
    period: float | None = None
    unit: str = "1"
    is_range: bool = False


@dataclass(frozen=True)
class Datum:
    id: str
    value: float
    quantity: str = "a line"


class LinearProblem:
    """Predictions ``design @ theta``, measured values with unit or given errors.

    ``stretch`` multiplies the fluctuations of the pseudo-data and ``frozen`` names entries that do not fluctuate: both
    are bugs that a calibration must notice. Rows whose first datum exceeds ``impossible_above`` cannot be fitted.
    """

    hypothesis = "standard"
    theory_errors = "as-given"

    def __init__(
        self, design, values, axes=None, errors=None, *, stretch=1.0, frozen=(), impossible_above=np.inf
    ):
        self.design = np.array(design, dtype=float)
        self.measured = np.array(values, dtype=float)
        m, n = self.design.shape
        self.errors = np.ones(m) if errors is None else np.array(errors, dtype=float)
        self.parameters = tuple(axes or [Axis(f"x{k}") for k in range(n)])
        self.parameter_names = tuple(axis.name for axis in self.parameters)
        self.n_parameters, self.n_entries = n, m
        self.entries = tuple(Datum(f"d{i}", float(v)) for i, v in enumerate(self.measured))
        self.start = np.array([axis.start for axis in self.parameters])
        self.stretch, self.frozen, self.impossible_above = stretch, tuple(frozen), impossible_above

    @property
    def fingerprint(self):
        text = repr((self.design.tolist(), self.measured.tolist(), self.errors.tolist(), self.parameters))
        return hashlib.sha256(text.encode()).hexdigest()

    def predictions(self, theta):
        return np.asarray(theta) @ self.design.T

    def residuals(self, theta, data=None):
        data = self.measured if data is None else data
        return (self.predictions(np.atleast_2d(theta)) - data) / self.errors

    def chi2(self, theta, data=None):
        chi2 = (self.residuals(theta, data) ** 2).sum(axis=1)
        if data is not None:
            chi2 = np.where(np.asarray(data)[:, 0] > self.impossible_above, np.inf, chi2)
        return chi2 if np.ndim(theta) == 2 else float(chi2[0])

    def jacobian(self, theta, data=None):
        slopes = self.design / self.errors[:, None]
        return slopes if np.ndim(theta) == 1 else np.tile(slopes, (len(theta), 1, 1))

    def linearise(self, theta, data=None):
        slopes = self.design / self.errors[:, None]
        rows, cols = np.tril_indices(self.n_parameters)
        normal = np.tile((slopes.T @ slopes)[rows, cols][:, None], (1, len(theta)))
        gradient = 2.0 * self.residuals(theta, data) @ slopes
        return Linearisation(self.chi2(theta, data), gradient, SparseNormal(rows, cols, normal))

    def linearise_quantities(self, theta, names):
        rows = np.array([self._direction(name) for name in names])
        single = np.ndim(theta) == 1
        theta = np.atleast_2d(theta)
        values, slopes = theta @ rows.T, np.tile(rows, (len(theta), 1, 1))
        return (values[0], slopes[0]) if single else (values, slopes)

    def _direction(self, name):
        if name == "total":
            return np.ones(self.n_parameters)
        return np.eye(self.n_parameters)[{axis.name: k for k, axis in enumerate(self.parameters)}[name]]

    def pseudo_data(self, theta, size, *, rng):
        noise = self.stretch * np.random.default_rng(rng).standard_normal((size, self.n_entries))
        noise[:, list(self.frozen)] = 0.0
        return self.predictions(theta) + noise * self.errors

    def unit_of(self, name):
        return "1"

    def period_of(self, name):
        return None


class TwoValleys(LinearProblem):
    """x^2 and x measured: minima near +1 and -1, and pseudo-experiments that prefer either."""

    def __init__(self):
        super().__init__(
            [[1.0], [1.0]], [1.0, 0.1], [Axis("x", start=0.9, lower=-3.0, upper=3.0)], [0.2, 1.0]
        )

    def predictions(self, theta):
        x = np.asarray(theta)[..., 0]
        return np.stack([x**2, x], axis=-1)

    def jacobian(self, theta, data=None):
        x = np.asarray(theta)[..., 0]
        return np.stack([2.0 * x, np.ones_like(x)], axis=-1)[..., None] / self.errors[:, None]

    def linearise(self, theta, data=None):
        slopes = self.jacobian(theta)[..., 0]
        gradient = 2.0 * (self.residuals(theta, data) * slopes).sum(axis=1)
        place = np.zeros(1, dtype=int)
        normal = SparseNormal(place, place, (slopes**2).sum(axis=1)[None])
        return Linearisation(self.chi2(theta, data), gradient[:, None], normal)
