"""The engine of the batch solver: damped Gauss-Newton steps on a changing set of rows.

Levenberg, Q. Appl. Math. 2, 164 (1944); Marquardt, SIAM J. 11, 431 (1963); damping controlled by the ratio of the
achieved to the predicted decrease (Madsen, Nielsen, Tingleff, "Methods for non-linear least squares problems", DTU
2004); scaled by the largest diagonal met so far (More, Lecture Notes in Mathematics 630, 105 (1978)).
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

import numpy as np

from fitcore.minimise.batch_result import BatchResult, Status
from fitcore.minimise.equality_constraints import ConstraintEvaluator, EqualityConstraints
from fitcore.minimise.quadratic_step import QuadraticBatch, QuadraticStep, solve_step
from fitcore.minimise.sparse_cholesky import Pattern, analyse

RIDGE = 1e-15
SINGULAR_RIDGE = 1e-6
FIRST_DAMPING = 1e-3
LAST_DAMPING = 1e15
IDLE_STEPS = 8
ROUNDING = 1e-13
LOOSE_ROUNDING = 1e-10


@dataclass
class Rows:
    """State of the rows at work; the batch axis is the last of every array."""

    index: np.ndarray  # row of the caller
    theta: np.ndarray  # accepted point (n, A)
    chi2: np.ndarray  # its chi-square, +inf for a row that just came in
    half_gradient: np.ndarray
    values: np.ndarray  # normal matrix (nnz, A)
    diagonal: np.ndarray  # Marquardt's scale
    constraint_gradient: np.ndarray  # (k, n, A)
    violation: np.ndarray  # value minus target (k, A)
    damping: np.ndarray
    growth: np.ndarray
    ridge: np.ndarray
    relax: np.ndarray  # share of the violation that a step should remove
    price: np.ndarray  # weight of |violation| in the merit function (k, A)
    nearest: np.ndarray  # smallest violation so far (k, A)
    idle: np.ndarray  # linearisations since it last shrank by a tenth
    undamped_failed: np.ndarray
    expected: np.ndarray  # decrease predicted by the undamped model at the accepted point
    active: np.ndarray
    trial: np.ndarray
    predicted: np.ndarray  # predicted decrease of the merit function
    accepted: np.ndarray
    used: np.ndarray

    def keep(self, rows: np.ndarray) -> None:
        for field in fields(self):
            setattr(self, field.name, getattr(self, field.name)[..., rows])

    def append(self, other: Rows) -> None:
        for field in fields(self):
            both = [getattr(self, field.name), getattr(other, field.name)]
            setattr(self, field.name, np.concatenate(both, axis=-1))


class DampedRun:
    """One call of `minimise_batch`."""

    def __init__(
        self,
        problem: Any,
        starts: np.ndarray,
        low: np.ndarray,
        high: np.ndarray,
        data: np.ndarray | None,
        constraints: EqualityConstraints | None,
        max_iterations: int,
        tolerance: float,
        initial_damping: float,
        forget_scale: bool,
    ) -> None:
        self.problem, self.data = problem, data
        self.constraints = ConstraintEvaluator(problem, constraints)
        self.starts, self.low, self.high = starts.T, low.T, high.T
        self.max_iterations, self.tolerance, self.initial_damping = max_iterations, tolerance, initial_damping
        self.forget_scale = forget_scale
        n, count = self.starts.shape
        scale = np.array([getattr(p, "scale", None) or 1.0 for p in problem.parameters])
        self.floor = 1e-8 / scale[:, None] ** 2  # for a parameter that nothing depends on
        k = self.constraints.count
        self.n, self.k, self.nnz = n, k, 0
        self.pattern: Pattern  # known with the first linearisation
        self.last_theta = starts.copy()
        self.first_ridge = RIDGE
        self.result = BatchResult(
            theta=starts.copy(),
            chi2=np.full(count, np.inf),
            converged=np.zeros(count, dtype=bool),
            distance=np.full(count, np.inf),
            status=np.full(count, Status.IMPOSSIBLE_START, dtype=np.int8),
            gradient=np.zeros((count, n)),
            slopes=np.zeros((count, k)),
            reach=np.zeros((count, k)),
            at_bound=np.zeros((count, n), dtype=np.int8),
            singular=np.zeros(count, dtype=bool),
            iterations=np.zeros(count, dtype=int),
            n_linearisations=np.zeros(count, dtype=int),
        )

    def minimise(self, chunk: int) -> BatchResult:
        waiting = len(self.result.chi2)
        rows = self._enter(np.arange(min(chunk, waiting)))
        following = rows.index.size
        while rows.index.size:
            alive = self._evaluate(rows)
            if not alive.all():
                rows.keep(np.flatnonzero(alive))
            if rows.index.size:
                self._step(rows)
            free = min(chunk - rows.index.size, waiting - following)
            if free > 0 and (2 * rows.index.size <= chunk or free == waiting - following):
                rows.append(self._enter(np.arange(following, following + free)))
                following += free
        self._last_steps(chunk)
        return self.result

    def _enter(self, index: np.ndarray) -> Rows:
        size, n, k = index.size, self.n, self.k
        return Rows(
            index=index,
            theta=np.full((n, size), np.nan),
            chi2=np.full(size, np.inf),
            half_gradient=np.zeros((n, size)),
            values=np.zeros((self.nnz, size)),
            diagonal=np.zeros((n, size)),
            constraint_gradient=np.zeros((k, n, size)),
            violation=np.zeros((k, size)),
            damping=np.full(size, self.initial_damping),
            growth=np.full(size, 2.0),
            ridge=np.full(size, self.first_ridge),
            relax=np.ones(size),
            price=np.zeros((k, size)),
            nearest=np.full((k, size), np.inf),
            idle=np.zeros(size, dtype=int),
            undamped_failed=np.zeros(size, dtype=bool),
            expected=np.full(size, np.inf),
            active=np.zeros((n, size), dtype=np.int8),
            trial=self.starts[:, index],
            predicted=np.zeros(size),
            accepted=np.zeros(size, dtype=int),
            used=np.zeros(size, dtype=int),
        )

    def _evaluate(self, rows: Rows) -> np.ndarray:
        """Linearise at the trial points, accept or reject; False for rows that end here."""
        points = rows.trial.T
        data = None if self.data is None else self.data[rows.index]
        linear = self.problem.linearise(points, data) if data is not None else self.problem.linearise(points)
        chi2, normal = np.asarray(linear.chi2, dtype=float), linear.normal
        if not self.nnz:
            self.pattern = analyse(normal.rows, normal.cols, self.n)
            self.nnz = len(normal.rows)
            rows.values = np.zeros((self.nnz, rows.index.size))
        violation, gradient = self.constraints.violation(points, rows.index)
        possible = np.isfinite(chi2) & np.isfinite(violation).all(axis=0)
        rows.used += 1
        fresh = ~np.isfinite(rows.chi2)
        with np.errstate(invalid="ignore", over="ignore"):
            gain = rows.chi2 - chi2 + (rows.price * (np.abs(rows.violation) - np.abs(violation))).sum(axis=0)
            ratio = gain / rows.predicted
        good = possible & (fresh | ((ratio > 1e-4) & (rows.predicted > 0.0)))
        self._control(rows, good & ~fresh, good, ratio)

        alive = good | ~fresh
        if good.all():
            rows.theta, rows.chi2, rows.values = rows.trial, chi2, normal.values
            rows.half_gradient = 0.5 * linear.gradient.T
            rows.violation, rows.constraint_gradient = violation, gradient
        else:
            take = np.flatnonzero(good)
            # the arrays of the last linearisation belong to the problem
            rows.chi2, rows.values = rows.chi2.copy(), rows.values.copy()
            rows.theta[:, take], rows.chi2[take] = rows.trial[:, take], chi2[take]
            rows.values[:, take] = normal.values[:, take]
            rows.half_gradient[:, take] = 0.5 * linear.gradient.T[:, take]
            rows.violation[:, take] = violation[:, take]
            rows.constraint_gradient[..., take] = gradient[..., take]
        if fresh.any():
            # first guess of the active set: at a bound and pushed outwards
            new = np.flatnonzero(fresh & good)
            high, low = self.high[:, rows.index[new]], self.low[:, rows.index[new]]
            push = -rows.half_gradient[:, new]
            at_high, at_low = rows.theta[:, new] >= high, rows.theta[:, new] <= low
            rows.active[:, new] = (at_high & (push > 0.0)).astype(np.int8) - (at_low & (push < 0.0))
        diagonal = np.maximum(self.pattern.diagonal(rows.values), self.floor)
        rows.diagonal = diagonal if self.forget_scale else np.maximum(diagonal, rows.diagonal)
        return np.asarray(alive)

    def _control(self, rows: Rows, moved: np.ndarray, good: np.ndarray, ratio: np.ndarray) -> None:
        """Damping, relaxation of the constraints and counters after a trial."""
        rows.accepted += moved
        with np.errstate(invalid="ignore", over="ignore"):
            factor = np.clip(1.0 - (2.0 * ratio - 1.0) ** 3, 0.1, 2.0)
        shrunk = rows.damping * factor
        shrunk[shrunk < 1e-12] = 0.0
        # a poor but accepted full step: damp the next one a little
        shrunk = np.where(moved & (ratio < 0.25), np.maximum(shrunk, 0.1 * FIRST_DAMPING), shrunk)
        rejected = ~good
        rows.damping = np.where(rejected, np.maximum(rows.damping * rows.growth, FIRST_DAMPING), rows.damping)
        rows.damping = np.where(moved, shrunk, rows.damping)
        rows.growth = np.where(rejected, np.minimum(2.0 * rows.growth, 64.0), 2.0)
        rows.undamped_failed &= rejected
        rows.expected[good] = np.inf
        if self.k:
            rows.relax = np.where(
                rejected, np.maximum(0.5 * rows.relax, 1e-3), np.minimum(2.0 * rows.relax, 1.0)
            )

    def _quadratic(self, rows: Rows) -> QuadraticBatch:
        return QuadraticBatch(
            self.pattern,
            rows.values,
            rows.half_gradient,
            (rows.damping + rows.ridge) * rows.diagonal,
            self.low[:, rows.index] - rows.theta,
            self.high[:, rows.index] - rows.theta,
            rows.constraint_gradient if self.k else None,
            -rows.relax * rows.violation if self.k else None,
        )

    def _step(self, rows: Rows) -> None:
        """Next trial points; rows that are done go to the result and leave."""
        quadratic = self._quadratic(rows)
        step = solve_step(quadratic, rows.active)
        singular = np.flatnonzero(step.singular & (rows.ridge < SINGULAR_RIDGE))
        if 2 * singular.size > rows.index.size:
            self.first_ridge = (
                SINGULAR_RIDGE  # it is the problem, not the point: spare later rows the discovery
            )
        self._again(rows, step, singular, ridge=SINGULAR_RIDGE)
        predicted = self._predict(rows, step)
        # close by the damped model: only the undamped one can tell
        small = (
            (predicted < self.tolerance) & ((rows.damping > 0.0) | (rows.relax < 1.0)) & ~rows.undamped_failed
        )
        if small.any():
            pick = np.flatnonzero(small)
            rows.undamped_failed[pick] = True
            self._again(rows, step, pick, damping=0.0)
            predicted = self._predict(rows, step)
        self._watch(rows)
        met = self.constraints.met(rows.violation, step.reach, rows.index)
        undamped = (rows.damping == 0.0) & (rows.relax == 1.0)
        converged = (predicted < self.tolerance) & met & undamped & step.settled
        rows.expected = np.where(undamped & step.settled, predicted, rows.expected)
        # no step helps and none was expected to: as good as rounding allows
        rejected = rows.growth > 2.0
        lost = rejected & met & (rows.expected <= ROUNDING * np.abs(rows.chi2))
        stuck = rows.damping > LAST_DAMPING
        lost |= stuck & met & (rows.expected <= LOOSE_ROUNDING * np.abs(rows.chi2))
        # a constraint that several steps have brought no nearer is out of reach
        stalled = (stuck & ~lost) | (~met & (rows.idle > IDLE_STEPS))
        exhausted = rows.used >= self.max_iterations
        done = converged | lost | stalled | exhausted
        if done.any():
            self._leave(rows, step, predicted, np.flatnonzero(done), converged | lost, stalled, met)
        rows.active, rows.predicted = step.active, predicted
        rows.trial = self._inside(rows.theta + step.step, step.active, rows.index)
        if done.any():
            rows.keep(np.flatnonzero(~done))

    def _inside(self, theta: np.ndarray, active: np.ndarray, index: np.ndarray) -> np.ndarray:
        """Points (n, A) in their boxes; active components exactly at the bound, rounding apart."""
        low, high = self.low[:, index], self.high[:, index]
        theta = np.where(active > 0, high, np.where(active < 0, low, theta))
        return np.asarray(np.clip(theta, low, high))

    def _again(
        self,
        rows: Rows,
        step: QuadraticStep,
        pick: np.ndarray,
        *,
        ridge: float | None = None,
        damping: float | None = None,
    ) -> None:
        """Repeat the step of some rows with another ridge or damping."""
        if not pick.size:
            return
        if ridge is not None:
            rows.ridge[pick] = ridge
        if damping is not None:
            rows.damping[pick], rows.relax[pick] = damping, 1.0
        repeated = solve_step(self._quadratic(rows).rows(pick), step.active[:, pick])
        repeated.singular |= step.singular[pick]
        step.put(pick, repeated)

    def _watch(self, rows: Rows) -> None:
        """Count the linearisations since any violation shrank visibly."""
        if self.k:
            size = np.abs(rows.violation)
            nearer = size < 0.9 * rows.nearest
            rows.nearest = np.where(nearer, size, rows.nearest)
            rows.idle = np.where(nearer.any(axis=0), 0, rows.idle + 1)

    def _predict(self, rows: Rows, step: QuadraticStep) -> np.ndarray:
        """Predicted decrease of chi2 + price x |violation|, which decides on acceptance only (exact penalty)."""
        if not self.k:
            return step.decrease
        rows.price = np.maximum(4.0 * np.abs(step.multipliers), 0.5 * rows.price)
        left = rows.violation + (rows.constraint_gradient * step.step).sum(axis=1)
        decrease: np.ndarray = step.decrease + (rows.price * (np.abs(rows.violation) - np.abs(left))).sum(
            axis=0
        )
        return decrease

    def _leave(
        self,
        rows: Rows,
        step: QuadraticStep,
        predicted: np.ndarray,
        pick: np.ndarray,
        minimum: np.ndarray,
        stalled: np.ndarray,
        met: np.ndarray,
    ) -> None:
        """Write rows to the result; those at a minimum still take their last step in `_last_steps`."""
        index, result = rows.index[pick], self.result
        ended = np.full(pick.size, Status.TOO_MANY_ITERATIONS, dtype=np.int8)
        ended[stalled[pick]] = Status.STALLED
        ended[~met[pick]] = Status.OUT_OF_REACH
        ended[minimum[pick]] = Status.CONVERGED
        result.status[index] = ended
        result.converged[index] = minimum[pick]
        result.theta[index] = rows.theta[:, pick].T
        result.chi2[index] = rows.chi2[pick]
        result.distance[index] = np.maximum(
            np.where(np.isfinite(rows.expected[pick]), rows.expected[pick], predicted[pick]), 0.0
        )
        final = np.where(minimum[pick], step.step[:, pick], 0.0)
        active = np.where(minimum[pick], step.active[:, pick], 0)
        self.last_theta[index] = self._inside(rows.theta[:, pick] + final, active, index).T
        moved = np.where(minimum[pick], step.curvature_times_step[:, pick], 0.0)
        result.gradient[index] = 2.0 * (rows.half_gradient[:, pick] + moved).T
        result.slopes[index] = -2.0 * step.multipliers[:, pick].T
        result.reach[index] = step.reach[:, pick].T
        result.at_bound[index] = step.active[:, pick].T
        result.singular[index] = step.singular[pick] | (rows.ridge[pick] >= SINGULAR_RIDGE)
        result.iterations[index] = rows.accepted[pick]
        result.n_linearisations[index] = rows.used[pick]

    def _last_steps(self, chunk: int) -> None:
        """The step that proved convergence is worth taking: chi-square is evaluated there."""
        result = self.result
        rows = np.flatnonzero(result.converged & (self.last_theta != result.theta).any(axis=1))
        for first in range(0, rows.size, 4 * chunk):
            part = rows[first : first + 4 * chunk]
            points = self.last_theta[part]
            chi2 = (
                self.problem.chi2(points) if self.data is None else self.problem.chi2(points, self.data[part])
            )
            # with constraints the last step may climb: it removes what is left of the violation
            better = np.isfinite(chi2) & ((chi2 <= result.chi2[part]) | (self.k > 0))
            result.theta[part[better]], result.chi2[part[better]] = points[better], chi2[better]
