"""Minimise chi-square with named quantities held at given values: the one operation behind every profile."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import BatchResult, EqualityConstraints, Status, minimise_batch
from fitcore.minimise.quadratic_step import QuadraticBatch, solve_step
from fitcore.minimise.sparse_cholesky import analyse

PREDICTOR_RIDGES = (1e-12, 1e-6)
SCATTER_DEVIATIONS = (3.0, 10.0, 30.0)


@dataclass
class HeldPoints:
    """Profiled points.

    Attributes
    ----------
    theta : ndarray, shape (B, n)
    chi2 : ndarray, shape (B,)
        +inf where the held values cannot be reached.
    slopes : ndarray, shape (B, k)
        d (profiled chi2) / d (held value).
    good : ndarray of bool, shape (B,)
        Converged with the held values met.
    linearisations : int
        Rows linearised for all this.
    """

    theta: np.ndarray
    chi2: np.ndarray
    slopes: np.ndarray
    good: np.ndarray
    linearisations: int = 0

    def rows(self, pick: np.ndarray) -> HeldPoints:
        """Some of the points."""
        return HeldPoints(self.theta[pick], self.chi2[pick], self.slopes[pick], self.good[pick])

    def put(self, pick: np.ndarray, other: HeldPoints) -> None:
        """Overwrite some of the points."""
        self.theta[pick], self.chi2[pick] = other.theta, other.chi2
        self.slopes[pick], self.good[pick] = other.slopes, other.good

    def improve(self, pick: np.ndarray, other: HeldPoints) -> np.ndarray:
        """Keep what is better among the points `pick`; returns the ones that changed by more than 1e-6."""
        self.linearisations += other.linearisations
        lower = other.chi2 < self.chi2[pick]
        better = (other.good & (lower | ~self.good[pick])) | (lower & ~self.good[pick])
        with np.errstate(invalid="ignore"):
            visible = better & ((other.good & ~self.good[pick]) | (self.chi2[pick] - other.chi2 > 1e-6))
        self.put(pick[better], other.rows(np.flatnonzero(better)))
        return np.asarray(pick[visible])


class HeldQuantities:
    """Chi-square of a problem minimised over everything but named quantities.

    Parameters
    ----------
    problem : Problem
    names : sequence of str
        Parameters or real quantities. A row of `solve` holds one or more of them.
    """

    def __init__(self, problem: Any, names: Sequence[str], *, chunk: int = 1024) -> None:
        self.problem, self.names, self.chunk = problem, tuple(names), chunk
        place = {parameter.name: k for k, parameter in enumerate(problem.parameters)}
        self.place = np.array([place.get(name, -1) for name in self.names])
        self.lower = np.array([_bound(p.lower, -np.inf) for p in problem.parameters])
        self.upper = np.array([_bound(p.upper, np.inf) for p in problem.parameters])

    def limits(self) -> tuple[np.ndarray, np.ndarray]:
        """Bounds of the named quantities: those of parameters, infinite for derived ones."""
        own = self.place >= 0
        return np.where(own, self.lower[self.place], -np.inf), np.where(own, self.upper[self.place], np.inf)

    def values(self, theta: np.ndarray) -> np.ndarray:
        """The named quantities at points, (B, n) -> (B, q)."""
        return self._linear(np.atleast_2d(theta))[0]

    def _linear(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        values = np.empty((len(theta), len(self.names)))
        slopes = np.zeros((len(theta), len(self.names), theta.shape[1]))
        derived = np.flatnonzero(self.place < 0)
        if derived.size:
            names = [self.names[k] for k in derived]
            values[:, derived], slopes[:, derived] = self.problem.linearise_quantities(theta, names)
        for k in np.flatnonzero(self.place >= 0):
            values[:, k], slopes[:, k, self.place[k]] = theta[:, self.place[k]], 1.0
        return values, slopes

    def solve(
        self,
        points: np.ndarray,
        starts: np.ndarray,
        *,
        which: np.ndarray | None = None,
        tolerance: float = 1e-4,
        distance: np.ndarray | float | None = None,
        max_iterations: int = 50,
    ) -> HeldPoints:
        """Minimise with the quantities held at `points`.

        Parameters
        ----------
        points : ndarray, shape (B, k)
            Values to hold.
        starts : ndarray, shape (B, n)
        which : ndarray of int, shape (B, k), optional
            Which names are held in each row; by default all, in order.
        tolerance : float
            Expected distance to the minimum that counts as converged; the last step still follows.
        distance : array, shape (B, k), optional
            Accepted distance of a derived quantity from the wanted value.
        """
        count, k = points.shape
        which = np.broadcast_to(np.arange(k) if which is None else which, points.shape)
        n = len(self.lower)
        out = HeldPoints(
            starts.copy(), np.full(count, np.inf), np.zeros((count, k)), np.zeros(count, dtype=bool)
        )
        place = self.place[which]
        own = place >= 0
        outside = (own & ((points < self.lower[place]) | (points > self.upper[place]))).any(axis=1)
        outside |= ~np.isfinite(points).all(axis=1)
        only_parameters = own.all(axis=1)
        options: dict[str, Any] = {
            "tolerance": tolerance,
            "max_iterations": max_iterations,
            "chunk": self.chunk,
        }

        rows = np.flatnonzero(only_parameters & ~outside)
        if rows.size:
            line = np.arange(rows.size)[:, None]
            fixed = np.zeros((rows.size, n), dtype=bool)
            fixed[line, place[rows]] = True
            first = starts[rows]
            first[line, place[rows]] = points[rows]
            found = minimise_batch(self.problem, first, fixed=fixed, **options)
            self._store(out, rows, found, found.gradient[line, place[rows]])
        rows = np.flatnonzero(~only_parameters & ~outside)
        if rows.size:
            wanted = None if distance is None else np.broadcast_to(distance, points.shape)[rows]
            constraints = EqualityConstraints(self.names, points[rows], which[rows], wanted)
            found = minimise_batch(self.problem, starts[rows], constraints=constraints, **options)
            self._store(out, rows, found, found.slopes)
        return out

    @staticmethod
    def _store(out: HeldPoints, rows: np.ndarray, found: BatchResult, slopes: np.ndarray) -> None:
        out.theta[rows], out.slopes[rows], out.good[rows] = found.theta, slopes, found.converged
        out.chi2[rows] = np.where(found.status == Status.OUT_OF_REACH, np.inf, found.chi2)
        out.linearisations += int(found.n_linearisations.sum())

    def predict(
        self, theta: np.ndarray, points: np.ndarray, *, which: np.ndarray | None = None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Starts for `points` by the quadratic model at one known minimum, bounds respected.

        Parameters
        ----------
        theta : ndarray, shape (n,)
            A minimum.
        points : ndarray, shape (B, k)
        which : ndarray of int, shape (B, k), optional

        Returns
        -------
        starts : ndarray, shape (B, n)
        deviation : ndarray, shape (q,)
            Standard deviations of all the names in the model (infinite where nothing constrains them).
        """
        count, k = points.shape
        which = np.broadcast_to(np.arange(k) if which is None else which, points.shape)
        linear = self.problem.linearise(theta[None])
        pattern = analyse(linear.normal.rows, linear.normal.cols, theta.size)
        values, slopes = self._linear(theta[None])
        diagonal = pattern.diagonal(linear.normal.values)
        diagonal = np.where(diagonal > 0.0, diagonal, 1.0)
        for ridge in PREDICTOR_RIDGES:
            factor = pattern.factor(linear.normal.values, ridge * diagonal)
            if not factor.singular.any():
                break
        spread = factor.solve(slopes[0].T[:, :, None])
        variance = (slopes[0].T * spread[:, :, 0]).sum(axis=0)

        def wide(array: np.ndarray) -> np.ndarray:
            return np.repeat(array, count, axis=1)

        low, high = wide((self.lower - theta)[:, None]), wide((self.upper - theta)[:, None])
        low, high = np.minimum(low, 0.0), np.maximum(high, 0.0)
        targets = (points - values[0][which]).T
        row = np.arange(count)
        derived = self.place[which] < 0
        for j in range(k):
            rows = row[~derived[:, j]]
            place = self.place[which[rows, j]]
            shift = np.clip(targets[j, rows], low[place, rows], high[place, rows])
            low[place, rows] = high[place, rows] = shift
        directions, wanted = None, None
        if derived.any():
            # a parameter's own row is satisfied by the box already: give it nothing to do
            directions = np.where(derived.T[:, None, :], np.moveaxis(slopes[0][which], 0, -1), 0.0)
            wanted = np.where(derived.T, targets, 0.0)
        quadratic = QuadraticBatch(
            pattern,
            wide(linear.normal.values),
            wide(0.5 * linear.gradient.T),
            wide(ridge * diagonal),
            low,
            high,
            directions,
            wanted,
        )
        step = solve_step(quadratic).step.T
        step = np.where(np.isfinite(step), step, 0.0)
        starts = np.clip(theta + step, self.lower, self.upper)
        return starts, np.sqrt(np.maximum(variance, 0.0))

    def scatter(self, theta: np.ndarray, count: int, sets: int) -> list[np.ndarray]:
        """`sets` arrays (count, n) of points spread over some standard deviations around a minimum, inside the bounds.

        Always the same ones (seed 0): they only add starting points.
        """
        linear = self.problem.linearise(theta[None])
        normal = linear.normal.dense()[0]
        scale = np.array([getattr(p, "scale", None) or 1.0 for p in self.problem.parameters])
        weight, axes = np.linalg.eigh(normal * np.outer(scale, scale))
        reach = 1.0 / np.sqrt(np.maximum(weight, 1e-2))
        draws = np.random.default_rng(0).standard_normal((sets, count, theta.size))
        widths = [SCATTER_DEVIATIONS[k % len(SCATTER_DEVIATIONS)] for k in range(sets)]
        moves = [width * scale * ((draw * reach) @ axes.T) for width, draw in zip(widths, draws, strict=True)]
        return [np.clip(theta + move, self.lower, self.upper) for move in moves]


def _bound(value: float | None, default: float) -> float:
    return default if value is None else float(value)
