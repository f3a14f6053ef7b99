"""Minimise chi-square from many starting points at once.

Damped Gauss-Newton (Levenberg, Q. Appl. Math. 2, 164 (1944); Marquardt, SIAM J. 11, 431 (1963)) on a batch of
rows: each row has its own damping, controlled by the ratio of the achieved to the predicted decrease (Madsen,
Nielsen, Tingleff, "Methods for non-linear least squares problems", DTU 2004), its own bounds, held parameters and
equality constraints. Rows that are done leave the batch and waiting rows take their places, so one slow row costs
next to nothing and memory never grows with the number of starts.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from enum import IntEnum
from typing import Any

import numpy as np

from fitcore.minimise.quadratic_step import QuadraticBatch, QuadraticStep, solve_step
from fitcore.minimise.sparse_cholesky import analyse

RIDGE = 1e-12
SINGULAR_RIDGE = 1e-6
FIRST_DAMPING = 1e-3
LAST_DAMPING = 1e15
HOPELESS_DAMPING = 1e8
ROUNDING = 1e-13


class Status(IntEnum):
    """How a row of `minimise_batch` ended; only ``CONVERGED`` is a minimum."""

    CONVERGED = 0
    TOO_MANY_ITERATIONS = 1
    STALLED = 2
    IMPOSSIBLE_START = 3
    OUT_OF_REACH = 4


@dataclass(frozen=True)
class EqualityConstraints:
    """Values that real quantities must take, row by row.

    Attributes
    ----------
    names : tuple of str
        Quantities (or parameters) known to ``problem.linearise_quantities``.
    targets : ndarray, shape (B, k)
        Wanted values in the units of the quantities; those with a period compare modulo it.
    which : ndarray of int, shape (B, k), optional
        Index into `names` of each target; by default target k belongs to name k in every row.
    tolerance : ndarray, shape (B, k), optional
        Largest accepted distance, in the quantities' units; by default 1e-6 of the quantity's standard deviation in
        the quadratic model.
    """

    names: tuple[str, ...]
    targets: np.ndarray
    which: np.ndarray | None = None
    tolerance: np.ndarray | None = None


@dataclass(frozen=True)
class BatchResult:
    """Minima found by `minimise_batch`, one per row.

    Attributes
    ----------
    theta : ndarray, shape (B, n)
    chi2 : ndarray, shape (B,)
        Chi-square evaluated at `theta`; +inf where the row never had a possible point.
    converged : ndarray of bool, shape (B,)
        Expected distance below the tolerance and constraints met; everything else is not a minimum.
    distance : ndarray, shape (B,)
        Expected distance to the minimum in chi-square, at the last linearised point (one step before `theta`).
    status : ndarray of int8, shape (B,)
        `Status` of the row.
    gradient : ndarray, shape (B, n)
        d chi2 / d theta at `theta` by the last linear model: for a held parameter the slope of the profile.
    slopes : ndarray, shape (B, k)
        d (min chi2) / d target of the equality constraints.
    reach : ndarray, shape (B, k)
        Standard deviations of the constrained quantities in the last quadratic model.
    at_bound : ndarray of int8, shape (B, n)
        +1 (-1) where the upper (lower) bound is active.
    singular : ndarray of bool, shape (B,)
        The normal matrix lost rank on the way and got a ridge of 1e-6: some direction is not constrained.
    iterations, n_linearisations : ndarray of int, shape (B,)
        Accepted steps; linearisations used.
    """

    theta: np.ndarray
    chi2: np.ndarray
    converged: np.ndarray
    distance: np.ndarray
    status: np.ndarray
    gradient: np.ndarray
    slopes: np.ndarray
    reach: np.ndarray
    at_bound: np.ndarray
    singular: np.ndarray
    iterations: np.ndarray
    n_linearisations: np.ndarray

    def copy(self) -> BatchResult:
        """The same with arrays of its own."""
        return BatchResult(*(getattr(self, field.name).copy() for field in fields(self)))

    def put(self, rows: np.ndarray, other: BatchResult) -> None:
        """Overwrite rows with those of `other` (effort is added up)."""
        for field in fields(self):
            mine, theirs = getattr(self, field.name), getattr(other, field.name)
            mine[rows] = mine[rows] + theirs if field.name in ("iterations", "n_linearisations") else theirs


def minimise_batch(
    problem: Any,
    starts: np.ndarray,
    *,
    fixed: np.ndarray | None = None,
    data: np.ndarray | None = None,
    lower: np.ndarray | None = None,
    upper: np.ndarray | None = None,
    constraints: EqualityConstraints | Mapping[str, Any] | None = None,
    max_iterations: int = 100,
    tolerance: float = 1e-8,
    initial_damping: float = 0.0,
    forget_scale: bool = False,
    chunk: int = 1024,
) -> BatchResult:
    """Minimise chi-square from every row of `starts`.

    Parameters
    ----------
    problem : Problem
        Anything with ``parameters``, ``chi2``, ``linearise`` and, for constraints, ``linearise_quantities`` and
        ``period_of``.
    starts : array, shape (B, n)
        Starting points in the parameters' units; moved inside the bounds first.
    fixed : array of bool, shape (n,) or (B, n), optional
        Parameters that keep the value of their start.
    data : array, shape (B, n_entries), optional
        Measured values that replace the entries' own, row by row.
    lower, upper : array, shape (n,) or (B, n), optional
        Bounds; those of the parameters by default.
    constraints : EqualityConstraints, or mapping of name to value or (B,) values, optional
    max_iterations : int
        Largest number of linearisations per row.
    tolerance : float
        A row has converged when its expected distance to the minimum, in chi-square, falls below this.
    initial_damping : float
        Marquardt's damping of the first step, relative to the diagonal; 0 is a full Gauss-Newton step, best for
        good starts.
    forget_scale : bool
        Damp by the present diagonal of the normal matrix instead of the largest one met so far (More, Lecture Notes in
        Mathematics 630, 105 (1978)): worse in curved valleys, better after a start on a cliff.
    chunk : int
        Rows worked on at once.

    Returns
    -------
    BatchResult
        Failures are marked row by row, never raised.

    Raises
    ------
    ValueError
        If shapes do not fit together.
    """
    starts = np.array(starts, dtype=float, ndmin=2)
    count, n = starts.shape
    parameters = problem.parameters
    if len(parameters) != n:
        raise ValueError(f"starts have {n} columns, the problem has {len(parameters)} free parameters")
    if data is not None and len(data) != count:
        raise ValueError(f"{len(data)} rows of data for {count} starts")
    if chunk < 1 or max_iterations < 1:
        raise ValueError("chunk and max_iterations must be at least 1")
    low = _bounds(lower, [p.lower for p in parameters], -np.inf, starts.shape)
    high = _bounds(upper, [p.upper for p in parameters], np.inf, starts.shape)
    theta = np.clip(starts, low, high)
    if fixed is not None:
        held = np.broadcast_to(np.asarray(fixed, dtype=bool), starts.shape)
        theta = np.where(held, starts, theta)
        low, high = np.where(held, starts, low), np.where(held, starts, high)
    run = _Run(
        problem,
        theta,
        low,
        high,
        data,
        _constraint_rows(constraints, count),
        max_iterations,
        tolerance,
        initial_damping,
        forget_scale,
    )
    return run.minimise(chunk)


def solve_with_retries(
    problem: Any,
    starts: np.ndarray,
    *,
    alternatives: Sequence[np.ndarray] = (),
    extra_starts: np.ndarray | None = None,
    **options: Any,
) -> BatchResult:
    """`minimise_batch` with a ladder for the rows that fail.

    Rungs: the given start; each of `alternatives` (a neighbour's solution, say); the given start with strong
    damping; every one of `extra_starts`. Rows that still fail keep their best point and stay marked as not converged.

    Parameters
    ----------
    problem, starts, **options
        As for `minimise_batch`.
    alternatives : sequence of array, shape (B, n)
        Further starts, row by row. Held parameters keep the value they have in `starts`.
    extra_starts : array, shape (S, n), optional
        Starts tried for every failing row.
    """
    starts = np.array(starts, dtype=float, ndmin=2)
    result = minimise_batch(problem, starts, **options)
    rungs = [(np.asarray(other, dtype=float), {}) for other in alternatives]
    rungs.append((starts, {"initial_damping": 1.0, "forget_scale": True}))
    for extra in () if extra_starts is None else np.atleast_2d(extra_starts):
        rungs.append((np.broadcast_to(extra, starts.shape), {}))
    for rung, changed in rungs:
        failed = np.flatnonzero(~result.converged)
        if not failed.size:
            break
        retry(problem, result, failed, rung[failed], starts, **{**options, **changed})
    return result


def retry(
    problem: Any, result: BatchResult, rows: np.ndarray, new_starts: np.ndarray, starts: np.ndarray, **options: Any
) -> np.ndarray:
    """Minimise some rows again from other starts and keep what is better; returns the rows that improved.

    Better is a minimum where there was none, or a minimum that is lower by more than 1e-9; a row that fails twice keeps
    the lower chi-square. Held parameters keep the value they have in `starts`.
    """
    options = {name: _pick(name, value, rows, len(starts)) for name, value in options.items()}
    fixed = options.get("fixed")
    if fixed is not None:
        new_starts = np.where(fixed, starts[rows], new_starts)
    again = minimise_batch(problem, new_starts, **options)
    lower = again.chi2 < result.chi2[rows] - 1e-9
    better = (again.converged & ~result.converged[rows]) | (lower & (again.converged == result.converged[rows]))
    keep = np.flatnonzero(better)
    effort = result.n_linearisations[rows] + again.n_linearisations
    result.put(rows[keep], _rows_of(again, keep))
    result.n_linearisations[rows] = effort
    return rows[keep]


def _pick(name: str, value: Any, rows: np.ndarray, count: int) -> Any:
    """The share of some rows in an option of `minimise_batch`."""
    if name == "constraints" and value is not None:
        value = _constraint_rows(value, count)
        parts = (None if part is None else part[rows] for part in (value.targets, value.which, value.tolerance))
        return EqualityConstraints(value.names, *parts)
    if name in ("fixed", "lower", "upper", "data") and value is not None and np.ndim(value) == 2:
        return np.asarray(value)[rows]
    return value


def _rows_of(result: BatchResult, rows: np.ndarray) -> BatchResult:
    return BatchResult(*(getattr(result, field.name)[rows] for field in fields(result)))


def _bounds(given: np.ndarray | None, own: list, default: float, shape: tuple[int, ...]) -> np.ndarray:
    values = [default if bound is None else bound for bound in own] if given is None else given
    return np.broadcast_to(np.asarray(values, dtype=float), shape)


def _constraint_rows(constraints: Any, count: int) -> EqualityConstraints | None:
    """Any accepted form of the constraints with full (B, k) arrays."""
    if not constraints:
        return None
    if isinstance(constraints, Mapping):
        columns = [np.broadcast_to(np.asarray(value, dtype=float), (count,)) for value in constraints.values()]
        constraints = EqualityConstraints(tuple(constraints), np.stack(columns, axis=1))
    targets = np.asarray(constraints.targets, dtype=float)
    if targets.ndim != 2 or len(targets) != count:
        raise ValueError(f"constraint targets have shape {targets.shape}, expected ({count}, k)")
    which = np.arange(targets.shape[1]) if constraints.which is None else constraints.which
    return EqualityConstraints(
        tuple(constraints.names),
        targets,
        np.broadcast_to(which, targets.shape),
        None if constraints.tolerance is None else np.broadcast_to(constraints.tolerance, targets.shape),
    )


@dataclass
class _Rows:
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
    undamped_failed: np.ndarray
    active: np.ndarray
    trial: np.ndarray
    predicted: np.ndarray  # predicted decrease of the merit function
    accepted: np.ndarray
    used: np.ndarray

    def keep(self, rows: np.ndarray) -> None:
        for field in fields(self):
            setattr(self, field.name, getattr(self, field.name)[..., rows])

    def append(self, other: _Rows) -> None:
        for field in fields(self):
            both = [getattr(self, field.name), getattr(other, field.name)]
            setattr(self, field.name, np.concatenate(both, axis=-1))


class _Run:
    """One call of `minimise_batch`."""

    def __init__(self, problem, starts, low, high, data, constraints, max_iterations, tolerance, initial_damping,
                 forget_scale):
        self.problem, self.data, self.constraints = problem, data, constraints
        self.starts, self.low, self.high = starts.T, low.T, high.T
        self.max_iterations, self.tolerance, self.initial_damping = max_iterations, tolerance, initial_damping
        self.forget_scale = forget_scale
        n, count = self.starts.shape
        scale = np.array([getattr(p, "scale", None) or 1.0 for p in problem.parameters])
        self.floor = 1e-8 / scale[:, None] ** 2  # for a parameter that nothing depends on
        k = 0 if constraints is None else constraints.targets.shape[1]
        self.n, self.k, self.pattern, self.nnz = n, k, None, 0
        if k:
            periods = np.array([problem.period_of(name) or np.inf for name in constraints.names])
            self.period = periods[constraints.which].T
            place = {p.name: i for i, p in enumerate(problem.parameters)}
            self.places = [place.get(name) for name in constraints.names]
            self.derived = tuple(name for name in constraints.names if name not in place)
        self.last_theta = starts.copy()
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

    def _enter(self, index: np.ndarray) -> _Rows:
        size, n, k = index.size, self.n, self.k
        return _Rows(
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
            ridge=np.full(size, RIDGE),
            relax=np.ones(size),
            price=np.zeros((k, size)),
            undamped_failed=np.zeros(size, dtype=bool),
            active=np.zeros((n, size), dtype=np.int8),
            trial=self.starts[:, index],
            predicted=np.zeros(size),
            accepted=np.zeros(size, dtype=int),
            used=np.zeros(size, dtype=int),
        )

    def _evaluate(self, rows: _Rows) -> np.ndarray:
        """Linearise at the trial points, accept or reject; False for rows that end here."""
        points = rows.trial.T
        data = None if self.data is None else self.data[rows.index]
        linear = self.problem.linearise(points, data) if data is not None else self.problem.linearise(points)
        chi2, normal = np.asarray(linear.chi2, dtype=float), linear.normal
        if self.pattern is None:
            self.pattern = analyse(normal.rows, normal.cols, self.n)
            self.nnz = len(normal.rows)
            rows.values = np.zeros((self.nnz, rows.index.size))
        violation, gradient = self._violation(points, rows.index)
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
            rows.theta[:, take], rows.chi2[take] = rows.trial[:, take], chi2[take]
            if not rows.values.flags.writeable or rows.values is normal.values:
                rows.values = rows.values.copy()
            rows.values[:, take] = normal.values[:, take]
            rows.half_gradient[:, take] = 0.5 * linear.gradient.T[:, take]
            rows.violation[:, take] = violation[:, take]
            rows.constraint_gradient[..., take] = gradient[..., take]
        diagonal = np.maximum(self.pattern.diagonal(rows.values), self.floor)
        rows.diagonal = diagonal if self.forget_scale else np.maximum(diagonal, rows.diagonal)
        return alive

    def _control(self, rows: _Rows, moved: np.ndarray, good: np.ndarray, ratio: np.ndarray) -> None:
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
        if self.k:
            rows.relax = np.where(rejected, np.maximum(0.5 * rows.relax, 1e-3), np.minimum(2.0 * rows.relax, 1.0))

    def _violation(self, points: np.ndarray, index: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Value minus target (k, A), modulo the period, and its gradient (k, n, A)."""
        if not self.k:
            return np.zeros((0, index.size)), np.zeros((0, self.n, index.size))
        values, gradient = self._quantities(points)
        which = self.constraints.which[index]
        row = np.arange(index.size)[:, None]
        missing = (values[row, which] - self.constraints.targets[index]).T
        period = self.period[:, index]
        with np.errstate(invalid="ignore"):
            turns = np.where(np.isfinite(period), np.round(missing / period), 0.0)
            missing = missing - np.where(turns != 0.0, turns * np.where(np.isfinite(period), period, 0.0), 0.0)
        slope = np.moveaxis(gradient[row, which], 0, -1)
        missing[~np.isfinite(slope).all(axis=1)] = np.nan
        return missing, np.where(np.isfinite(slope), slope, 0.0)

    def _quantities(self, points: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Values (A, q) and gradients (A, q, n) of everything constrained; parameters are their own values."""
        if self.derived:
            derived, slopes = self.problem.linearise_quantities(points, self.derived)
        if len(self.derived) == len(self.places):
            return derived, slopes
        values = np.empty((len(points), len(self.places)))
        gradient = np.zeros((len(points), len(self.places), self.n))
        others = iter(range(len(self.derived)))
        for column, place in enumerate(self.places):
            if place is None:
                other = next(others)
                values[:, column], gradient[:, column] = derived[:, other], slopes[:, other]
            else:
                values[:, column], gradient[:, column, place] = points[:, place], 1.0
        return values, gradient

    def _quadratic(self, rows: _Rows) -> QuadraticBatch:
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

    def _step(self, rows: _Rows) -> None:
        """Next trial points; rows that are done go to the result and leave."""
        quadratic = self._quadratic(rows)
        step = solve_step(quadratic, rows.active)
        self._again(rows, step, np.flatnonzero(step.singular & (rows.ridge < SINGULAR_RIDGE)), ridge=SINGULAR_RIDGE)
        predicted = self._predict(rows, step)
        # close by the damped model: only the undamped one can tell
        small = (predicted < self.tolerance) & ((rows.damping > 0.0) | (rows.relax < 1.0)) & ~rows.undamped_failed
        if small.any():
            pick = np.flatnonzero(small)
            rows.undamped_failed[pick] = True
            self._again(rows, step, pick, damping=0.0)
            predicted = self._predict(rows, step)
        met = self._constraints_met(rows, step)
        undamped = (rows.damping == 0.0) & (rows.relax == 1.0)
        converged = (predicted < self.tolerance) & met & undamped & step.settled
        # no computer can see such a decrease: as good as it gets
        lost = (rows.growth > 2.0) & (predicted <= ROUNDING * np.abs(rows.chi2)) & met
        # a constraint that short, strongly damped steps do not bring nearer is out of reach
        stalled = (rows.damping > np.where(met, LAST_DAMPING, HOPELESS_DAMPING)) & ~lost
        exhausted = rows.used >= self.max_iterations
        done = converged | lost | stalled | exhausted
        if done.any():
            self._leave(rows, step, predicted, np.flatnonzero(done), converged | lost, stalled, met)
        rows.active, rows.predicted = step.active, predicted
        rows.trial = np.clip(rows.theta + step.step, self.low[:, rows.index], self.high[:, rows.index])
        if done.any():
            rows.keep(np.flatnonzero(~done))

    def _again(self, rows: _Rows, step: QuadraticStep, pick: np.ndarray, *, ridge=None, damping=None) -> None:
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

    def _predict(self, rows: _Rows, step: QuadraticStep) -> np.ndarray:
        """Predicted decrease of the merit function chi2 + price x |violation| (exact penalty, for acceptance only)."""
        if not self.k:
            return step.decrease
        rows.price = np.maximum(4.0 * np.abs(step.multipliers), 0.5 * rows.price)
        left = rows.violation + (rows.constraint_gradient * step.step).sum(axis=1)
        return step.decrease + (rows.price * (np.abs(rows.violation) - np.abs(left))).sum(axis=0)

    def _constraints_met(self, rows: _Rows, step: QuadraticStep) -> np.ndarray:
        if not self.k:
            return np.ones(rows.index.size, dtype=bool)
        wanted = 1e-6 * step.reach
        if self.constraints.tolerance is not None:
            wanted = self.constraints.tolerance[rows.index].T
        return (np.abs(rows.violation) <= wanted).all(axis=0)

    def _leave(self, rows, step, predicted, pick, minimum, stalled, met) -> None:
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
        result.distance[index] = np.maximum(predicted[pick], 0.0)
        final = np.where(minimum[pick], step.step[:, pick], 0.0)
        inside = np.clip(rows.theta[:, pick] + final, self.low[:, index], self.high[:, index])
        self.last_theta[index] = inside.T
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
            chi2 = self.problem.chi2(points) if self.data is None else self.problem.chi2(points, self.data[part])
            # with constraints the last step may climb: it removes what is left of the violation
            better = np.isfinite(chi2) & ((chi2 <= result.chi2[part]) | (self.k > 0))
            result.theta[part[better]], result.chi2[part[better]] = points[better], chi2[better]
