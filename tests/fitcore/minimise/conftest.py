"""A small dense least-squares problem that quacks like the real one."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest

from fitcore.minimise.normal_matrix import Linearisation, SparseNormal


@dataclass(frozen=True)
class FreeParameter:
    name: str
    start: float = 0.0
    lower: float = -np.inf
    upper: float = np.inf
    scale: float = 1.0
    period: float | None = None
    unit: str = "1"


class LeastSquaresProblem:
    """Residuals from a function of the parameters; derivatives by complex steps (exact for analytic functions).

    ``residual(t)`` gets the parameters as t[0], t[1], ... of shape (B, 1) and returns (B, m);
    quantities are functions of the same t returning (B, 1).
    """

    def __init__(
        self,
        residual: Callable,
        parameters: list[FreeParameter],
        quantities: dict[str, Callable] | None = None,
        periods: dict[str, float] | None = None,
        impossible: Callable | None = None,
    ) -> None:
        self.residual = residual
        self.parameters = tuple(parameters)
        self.parameter_names = tuple(p.name for p in parameters)
        self.n_parameters = len(parameters)
        self.quantities = dict(quantities or {})
        for k, name in enumerate(self.parameter_names):
            self.quantities.setdefault(name, lambda t, k=k: t[k])
        self.period_by_name = periods or {}
        self.impossible = impossible
        self.calls = {"chi2": 0, "linearise": 0}

    def period_of(self, name):
        return self.period_by_name.get(name)

    def _evaluate(self, function, theta, data=None):
        t = np.asarray(theta).T[:, :, None]
        with np.errstate(all="ignore"):
            values = np.atleast_2d(function(t) if data is None else function(t, data))
        return np.broadcast_to(values, (len(theta), values.shape[-1]))

    def residuals(self, theta, data=None):
        return self._evaluate(self.residual, np.atleast_2d(theta), data)

    def chi2(self, theta, data=None):
        theta = np.atleast_2d(np.asarray(theta, dtype=float))
        self.calls["chi2"] += len(theta)
        with np.errstate(all="ignore"):
            chi2 = (self.residuals(theta, data) ** 2).sum(axis=1)
        if self.impossible is not None:
            chi2 = np.where(self.impossible(theta.T), np.inf, chi2)
        return np.where(np.isfinite(chi2), chi2, np.inf)

    def _gradient(self, function, theta, data=None):
        scale = np.array([p.scale for p in self.parameters])
        slopes = []
        for k in range(self.n_parameters):
            moved = theta.astype(complex)
            moved[:, k] += 1e-40j * scale[k]
            slopes.append(self._evaluate(function, moved, data).imag / (1e-40 * scale[k]))
        return np.stack(slopes, axis=2)

    def jacobian(self, theta, data=None):
        return self._gradient(self.residual, np.atleast_2d(theta), data)

    def linearise(self, theta, data=None):
        self.calls["linearise"] += len(theta)
        theta = np.asarray(theta, dtype=float)
        chi2 = self.chi2(theta, data)
        with np.errstate(all="ignore"):
            residuals, slopes = self.residuals(theta, data), self.jacobian(theta, data)
            gradient = 2.0 * (residuals[:, :, None] * slopes).sum(axis=1)
            normal = np.matmul(slopes.transpose(0, 2, 1), slopes)
        bad = ~(np.isfinite(chi2) & np.isfinite(gradient).all(axis=1) & np.isfinite(normal).all(axis=(1, 2)))
        chi2, gradient = np.where(bad, np.inf, chi2), np.where(bad[:, None], 0.0, gradient)
        normal[bad] = 0.0
        rows, cols = np.tril_indices(self.n_parameters)
        return Linearisation(chi2, gradient, SparseNormal(rows, cols, normal[:, rows, cols].T.copy()))

    def values(self, theta, names):
        theta = np.atleast_2d(theta)
        return {name: self._evaluate(self.quantities[name], theta)[:, 0] for name in names}

    def linearise_quantities(self, theta, names):
        theta = np.asarray(theta, dtype=float)
        values = np.stack([self._evaluate(self.quantities[name], theta)[:, 0] for name in names], axis=1)
        slopes = np.stack([self._gradient(self.quantities[name], theta)[:, 0] for name in names], axis=1)
        return values, slopes


@pytest.fixture(scope="session")
def free_parameter():
    return FreeParameter


@pytest.fixture(scope="session")
def least_squares_problem():
    return LeastSquaresProblem
