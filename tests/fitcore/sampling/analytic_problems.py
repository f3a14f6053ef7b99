"""Problems with known posteriors, for the tests of this folder (loaded by conftest.py and by subprocesses)."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np


class AnalyticProblem:
    """The part of a Problem that sampling uses, around a given log density."""

    hypothesis = "standard"
    theory_errors = "as-given"

    def __init__(
        self, log_density, n, *, lower=None, upper=None, start=None, scale=1.0, period=None, fingerprint="f"
    ):
        self.lower = np.full(n, -np.inf) if lower is None else np.asarray(lower, dtype=float)
        self.upper = np.full(n, np.inf) if upper is None else np.asarray(upper, dtype=float)
        start = np.zeros(n) if start is None else np.asarray(start, dtype=float)
        self.log_density = log_density
        self.parameters = tuple(
            SimpleNamespace(
                name=f"p{i}", unit="1", start=start[i], lower=self.lower[i], upper=self.upper[i], scale=scale,
                title=f"parameter {i}", latex=f"p_{{{i}}}", period=period, prior=None,
            )
            for i in range(n)
        )  # fmt: skip
        self.parameter_names = tuple(p.name for p in self.parameters)
        self.n_parameters = n
        self.fingerprint = fingerprint
        self.fixed = {}
        self.inputs = SimpleNamespace(resolved_toml=lambda: f"title = {fingerprint!r}\n", sha256="00")

    def log_posterior(self, theta):
        inside = ((theta >= self.lower) & (theta <= self.upper)).all(axis=1)
        return np.where(inside, self.log_density(theta), -np.inf)

    def values(self, theta, names):
        known = {
            "sum": theta.sum(axis=1),
            "first_squared": theta[:, 0] ** 2,
            "phase": np.exp(1j * theta[:, 0]),
        }
        return {name: known[name] for name in names}

    def unit_of(self, name):
        return "1"

    def title_of(self, name):
        return name

    def latex_of(self, name):
        return name


def gaussian(covariance, mean=0.0, **options):
    covariance = np.atleast_2d(covariance)
    precision = np.linalg.inv(covariance)

    def log_density(theta):
        d = theta - mean
        return -0.5 * np.einsum("ij,ij->i", d @ precision, d)

    return AnalyticProblem(log_density, len(covariance), **options)


def banana(curvature=0.5, **options):
    """x0 ~ N(0, 1), x1 - curvature (x0^2 - 1) ~ N(0, 0.5): means 0, variances 1 and 0.25 + 2 curvature^2."""

    def log_density(theta):
        bent = theta[:, 1] - curvature * (theta[:, 0] ** 2 - 1.0)
        return -0.5 * theta[:, 0] ** 2 - 0.5 * (bent / 0.5) ** 2

    return AnalyticProblem(log_density, 2, **options)


def two_modes(n=4, weight=0.3, distance=12.0, widths=(1.0, 0.5), **options):
    """weight N(0, w0^2) + (1 - weight) N(distance along the first axis, w1^2)."""

    def log_density(theta):
        shifted = theta.copy()
        shifted[:, 0] -= distance
        a = np.log(weight) - n * np.log(widths[0]) - 0.5 * (theta**2).sum(axis=1) / widths[0] ** 2
        b = np.log1p(-weight) - n * np.log(widths[1]) - 0.5 * (shifted**2).sum(axis=1) / widths[1] ** 2
        return np.logaddexp(a, b)

    return AnalyticProblem(log_density, n, **options)


def flat_range(half=1.5, **options):
    """A measurement y = x + f with error 0.1 and x ~ N(0, 1), f uniform in [-half, half]."""

    def log_density(theta):
        return -0.5 * theta[:, 0] ** 2 - 0.5 * ((theta[:, 0] + theta[:, 1] - 0.4) / 0.1) ** 2

    lower, upper = [-np.inf, -half], [np.inf, half]
    return AnalyticProblem(log_density, 2, lower=lower, upper=upper, **options)


def correlated(n, rho=0.99):
    return np.full((n, n), rho) + (1.0 - rho) * np.eye(n)
