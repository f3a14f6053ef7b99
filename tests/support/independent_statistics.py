"""A second, deliberately plain statistical treatment of fits, for comparison only.

NumPy and SciPy, one point at a time where that is simplest; nothing here imports a solver, a likelihood or a study of
the project. The model is a function ``predict(points (B, n)) -> (B, m)``; measurements are plain records. Sources are
those of the definitions, not of the code:

- asymmetric errors: variance linear in the prediction, R. Barlow, arXiv:physics/0406120;
- covariance of shared error sources: sum over sources of the products of signed absolute errors (common practice, no
  source);
- profile intervals: the range of a quantity over the set chi2 <= minimum + level, S. S. Wilks, Ann. Math. Statist. 9,
  60; F. James, Statistical Methods in Experimental Physics (2006), section 9.3;
- tension: M. Maltoni, T. Schwetz, Phys. Rev. D 68, 033020 (parameter goodness of fit).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property, lru_cache

import numpy as np
from scipy.optimize import NonlinearConstraint, brentq, least_squares, minimize

Predict = Callable[[np.ndarray], np.ndarray]


@dataclass(frozen=True)
class Measured:
    """One measured value: errors are either (plus, minus), or named sources with signs."""

    id: str
    value: float
    plus: float = 0.0
    minus: float = 0.0
    sources: Mapping[str, float] = field(default_factory=dict)
    flat: float = 0.0
    period: float | None = None

    @property
    def errors(self) -> tuple[float, float]:
        if not self.sources:
            return self.plus, self.minus
        total = sum(error**2 for error in self.sources.values()) ** 0.5
        return total, total


@lru_cache
def _edge(variance: float, slope: float) -> float:
    """The difference at which d / sqrt(V + V' d) is eight deviations, by Brent's method."""
    edge = -8.0 * np.sign(slope)
    low, high = sorted((0.0, -variance / slope * (1.0 - 1e-13)))
    span = abs(high - low)
    return brentq(
        lambda d: d / np.sqrt(variance + slope * d) - edge, low, high, xtol=1e-15 * span, rtol=1e-14
    )


def standardised(difference: np.ndarray, plus: float, minus: float) -> np.ndarray:
    """d / sqrt(V + V' d), with the straight tangent beyond eight deviations on the side where the root ends."""
    variance, slope = plus * minus, plus - minus
    if slope == 0.0:
        return difference / plus
    at = _edge(variance, slope)
    total = variance + slope * at
    tangent = 1.0 / np.sqrt(total) - 0.5 * at * slope / total**1.5
    inside = np.where((difference - at) * slope < 0.0, at, difference)
    return inside / np.sqrt(variance + slope * inside) + tangent * (difference - inside)


@dataclass(frozen=True)
class Model:
    """Measurements of predicted numbers.

    ``correlations`` has coefficients between pairs of ids, besides what shared sources do. Parameters may have bounds;
    flat ranges of measurements are extra bounded shifts, appended to the parameters.
    """

    predict: Predict
    measured: tuple[Measured, ...]
    start: np.ndarray
    scales: np.ndarray
    correlations: Mapping[tuple[str, str], float] = field(default_factory=dict)
    lower: np.ndarray | None = None
    upper: np.ndarray | None = None

    @cached_property
    def correlation(self) -> np.ndarray:
        m = len(self.measured)
        covariance = np.zeros((m, m))
        for i, a in enumerate(self.measured):
            for j, b in enumerate(self.measured):
                if i == j:
                    covariance[i, i] = a.errors[0] * a.errors[1]
                    continue
                for name in set(a.sources) & set(b.sources) - {"statistical", "stat", "uncorrelated"}:
                    covariance[i, j] += a.sources[name] * b.sources[name]
        deviation = np.sqrt(np.diagonal(covariance))
        matrix = covariance / np.outer(deviation, deviation)
        place = {entry.id: i for i, entry in enumerate(self.measured)}
        for (a, b), coefficient in self.correlations.items():
            if a in place and b in place:
                matrix[place[a], place[b]] += coefficient
                matrix[place[b], place[a]] += coefficient
        return matrix

    def standardised(self, predicted: np.ndarray) -> np.ndarray:
        """Residuals of predictions of shape (B, m)."""
        u = np.empty_like(predicted)
        for i, entry in enumerate(self.measured):
            d = predicted[:, i] - entry.value
            if entry.period:  # the nearest of several images
                images = d + entry.period * np.arange(-3, 4)[:, None]
                d = images[np.argmin(np.abs(images), axis=0), np.arange(d.size)]
            u[:, i] = standardised(d, *entry.errors)
        return u

    def without(self, ids: Sequence[str]) -> Model:
        keep = [i for i, entry in enumerate(self.measured) if entry.id not in ids]
        return replace(
            self,
            measured=tuple(self.measured[i] for i in keep),
            predict=lambda points: self.predict(points)[:, keep],
        )

    def with_values(self, values: Sequence[float]) -> Model:
        return replace(
            self,
            measured=tuple(
                replace(entry, value=float(v)) for entry, v in zip(self.measured, values, strict=True)
            ),
        )

    # -- the fit ------------------------------------------------------------------------------------------------

    @property
    def _flat(self) -> list[int]:
        return [i for i, entry in enumerate(self.measured) if entry.flat > 0.0]

    def _shifted(self, points: np.ndarray) -> np.ndarray:
        predicted = np.array(self.predict(points[:, : self.start.size]), dtype=float)
        for k, i in enumerate(self._flat):
            predicted[:, i] += points[:, self.start.size + k]
        return predicted

    def whitened(self, point: np.ndarray) -> np.ndarray:
        return np.linalg.solve(
            np.linalg.cholesky(self.correlation), self.standardised(self._shifted(point[None]))[0]
        )

    def chi2(self, point: np.ndarray) -> float:
        u = self.standardised(self._shifted(np.asarray(point, dtype=float)[None]))[0]
        return float(u @ np.linalg.solve(self.correlation, u))

    def jacobian(self, point: np.ndarray) -> np.ndarray:
        """Central differences of the whitened residuals."""
        half = np.linalg.inv(np.linalg.cholesky(self.correlation))
        steps = 1e-4 * np.concatenate([self.scales, [self.measured[i].flat for i in self._flat]])
        points = np.concatenate([point + np.diag(steps), point - np.diag(steps)])
        u = self.standardised(self._shifted(points))
        n = len(steps)
        return half @ ((u[:n] - u[n:]) / (2.0 * steps[:, None])).T

    @property
    def bounds(self) -> tuple[np.ndarray, np.ndarray]:
        flat = np.array([self.measured[i].flat for i in self._flat])
        lower = np.full(self.start.size, -np.inf) if self.lower is None else self.lower
        upper = np.full(self.start.size, np.inf) if self.upper is None else self.upper
        return np.concatenate([lower, -flat]), np.concatenate([upper, flat])

    def fit(self, start: np.ndarray | None = None) -> tuple[np.ndarray, float]:
        """Best fit and its chi-square, by SciPy's trust-region least squares."""
        begin = np.concatenate([self.start, np.zeros(len(self._flat))]) if start is None else start
        lower, upper = self.bounds
        width = np.concatenate([self.scales, [self.measured[i].flat for i in self._flat]])
        begin = np.clip(begin, lower + 1e-6 * width, upper - 1e-6 * width)
        found = least_squares(
            self.whitened,
            begin,
            self.jacobian,
            bounds=(lower, upper),
            x_scale=width,
            xtol=1e-14,
            ftol=1e-14,
            gtol=1e-13,
            max_nfev=300,
            method="dogbox" if len(self._flat) else "trf",
        )
        return np.asarray(found.x), float(2.0 * found.cost)

    def degrees_of_freedom(self, point: np.ndarray) -> int:
        jacobian = self.jacobian(point)[:, : self.start.size] * self.scales
        return len(self.measured) - int(
            np.linalg.matrix_rank(jacobian, tol=1e-7 * np.linalg.norm(jacobian, 2))
        )

    def covariance(self, point: np.ndarray) -> np.ndarray:
        """Twice the inverse of the second derivatives of chi-square, by plain central differences."""
        n = self.start.size
        hessian = np.empty((n, n))
        steps = 0.02 * self.scales
        for i in range(n):
            for j in range(i + 1):
                total = 0.0
                for a, b in ((1, 1), (-1, -1), (1, -1), (-1, 1)):
                    moved = point.copy()
                    moved[i] += a * steps[i]
                    moved[j] += b * steps[j]
                    total += a * b * self.chi2(moved)
                hessian[i, j] = hessian[j, i] = total / (4.0 * steps[i] * steps[j])
        return 2.0 * np.linalg.inv(hessian)

    # -- profiles -----------------------------------------------------------------------------------------------

    def profiled(self, place: int, value: float, start: np.ndarray) -> tuple[float, np.ndarray]:
        """Chi-square minimised with one parameter held."""
        free = np.arange(start.size) != place
        lower, upper = self.bounds
        width = np.concatenate([self.scales, [self.measured[i].flat for i in self._flat]])

        def full(rest: np.ndarray) -> np.ndarray:
            point = start.copy()
            point[free], point[place] = rest, value
            return point

        begin = np.clip(start[free], lower[free] + 1e-9 * width[free], upper[free] - 1e-9 * width[free])
        found = least_squares(
            lambda rest: self.whitened(full(rest)),
            begin,
            lambda rest: self.jacobian(full(rest))[:, free],
            bounds=(lower[free], upper[free]),
            x_scale=width[free],
            xtol=1e-13,
            ftol=1e-13,
            gtol=1e-12,
            max_nfev=200,
            method="dogbox" if len(self._flat) else "trf",
        )
        return float(2.0 * found.cost), full(found.x)

    def interval(self, place: int, level: float, best: np.ndarray, deviation: float) -> tuple[float, float]:
        """Where the profile of one parameter crosses the level, by Brent's method on refits."""
        minimum = self.chi2(best)
        ends = []
        for sign in (-1.0, 1.0):
            known = {0.0: best}

            def excess(step: float, sign: float = sign, known: dict[float, np.ndarray] = known) -> float:
                nearest = known[min(known, key=lambda k: abs(k - step))]
                chi2, point = self.profiled(place, best[place] + sign * step, nearest)
                known[step] = point
                return chi2 - minimum - level

            reach = 1.3 * np.sqrt(level) * deviation
            while excess(reach) < 0.0:
                reach *= 1.4
            ends.append(best[place] + sign * brentq(excess, 1e-9 * deviation, reach, xtol=1e-6 * deviation))
        return ends[0], ends[1]

    def extreme_values(
        self, quantity: Callable[[np.ndarray], float], level: float, best: np.ndarray, covariance: np.ndarray
    ) -> tuple[float, float]:
        """Lowest and highest value of a quantity over the set chi2 <= minimum + level (SciPy's SLSQP)."""
        root = np.linalg.cholesky(covariance)
        minimum = self.chi2(best)
        centre = quantity(best)
        gradient = np.array([(quantity(best + 0.01 * c) - quantity(best - 0.01 * c)) / 0.02 for c in root.T])
        size = float(np.linalg.norm(gradient))
        ends = []
        for sign in (-1.0, 1.0):
            found = minimize(
                lambda y, sign=sign: -sign * (quantity(best + root @ y) - centre) / size,
                sign * np.sqrt(level) * gradient / size,
                method="SLSQP",
                constraints=[
                    NonlinearConstraint(lambda y: self.chi2(best + root @ y) - minimum, -np.inf, level)
                ],
                options={"ftol": 1e-11, "maxiter": 200},
            )
            ends.append(centre - sign * found.fun * size)
        return ends[0], ends[1]

    # -- studies ------------------------------------------------------------------------------------------------

    def own_chi2(self, ids: Sequence[str]) -> tuple[float, float]:
        """Several measurements of one quantity alone: the common value and chi-square at it."""
        places = [i for i, entry in enumerate(self.measured) if entry.id in ids]
        own = replace(
            self,
            measured=tuple(self.measured[i] for i in places),
            predict=lambda points: np.repeat(points[:, :1], len(places), axis=1),
            start=np.array([np.mean([self.measured[i].value for i in places])]),
            scales=np.array([min(min(self.measured[i].errors) for i in places)]),
            lower=None,
            upper=None,
        )
        best, chi2 = own.fit()
        return float(best[0]), chi2

    def tension(self, ids: Sequence[str], best: np.ndarray) -> float:
        """Square root of chi2(all) - chi2(without these) - chi2(these alone)."""
        _, rest = self.without(ids).fit(best)
        return float(np.sqrt(max(self.chi2(best) - rest - self.own_chi2(ids)[1], 0.0)))

    def unit_shifts(self, quantity: Callable[[np.ndarray], float], best: np.ndarray) -> dict[str, float]:
        """Half the change of a quantity when each measured value moves up and down by its error, refitting."""
        shifts = {}
        values = np.array([entry.value for entry in self.measured])
        for i, entry in enumerate(self.measured):
            moved = []
            for step in (entry.errors[0], -entry.errors[1]):
                changed = values.copy()
                changed[i] += step
                moved.append(quantity(self.with_values(changed).fit(best)[0]))
            shifts[entry.id] = 0.5 * (moved[0] - moved[1])
        return shifts
