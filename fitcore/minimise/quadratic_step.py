"""One step of a batch of quadratic problems inside boxes and on linearised equality constraints.

Every member of the batch minimises  h.s + s.(A + damping).s / 2  over  low <= s <= high  and, where asked,
a_k.s = c_k. Bounds are found by a primal-dual active set (Bergounioux, Ito, Kunisch, SIAM J. Control Optim. 37,
1176 (1999)): solve with the active components pinned to their bounds, pin what sticks out, release what pulls
inwards, repeat; rows that go round in circles exchange one component at a time, which must end (Kostreva, Math.
Program. 13, 1 (1977); Judice and Pires, Comput. Oper. Res. 21, 587 (1994)). Clipping a free step instead is wrong as
soon as the parameters are correlated.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from fitcore.minimise.sparse_cholesky import FROZEN, Pattern, analyse

ACTIVE_SET_ROUNDS = 30
PATIENCE = 3
"""Rounds without fewer wrong components before they are exchanged one at a time (last index first)."""


@dataclass
class QuadraticBatch:
    """The quadratic problems of a batch; batch axis last throughout.

    Attributes
    ----------
    values : ndarray, shape (nnz, B)
        Lower triangle of A in the order of the pattern.
    half_gradient : ndarray, shape (n, B)
        h, half the gradient of chi-square.
    damping : ndarray, shape (n, B)
        Non-negative numbers on the diagonal.
    low, high : ndarray, shape (n, B)
        Box of the step; equal for a component whose step is given.
    constraint_gradient : ndarray, shape (k, n, B), or None
    constraint_target : ndarray, shape (k, B), or None
    """

    pattern: Pattern
    values: np.ndarray
    half_gradient: np.ndarray
    damping: np.ndarray
    low: np.ndarray
    high: np.ndarray
    constraint_gradient: np.ndarray | None = None
    constraint_target: np.ndarray | None = None

    def rows(self, pick: np.ndarray) -> QuadraticBatch:
        """The members of the batch named by an index array."""
        gradient, target = self.constraint_gradient, self.constraint_target
        return QuadraticBatch(
            self.pattern,
            self.values[:, pick],
            self.half_gradient[:, pick],
            self.damping[:, pick],
            self.low[:, pick],
            self.high[:, pick],
            None if gradient is None else gradient[:, :, pick],
            None if target is None else target[:, pick],
        )


@dataclass
class QuadraticStep:
    """What `solve_step` found, for every member of the batch.

    Attributes
    ----------
    step : ndarray, shape (n, B)
    curvature_times_step : ndarray, shape (n, B)
        A s, without the damping.
    decrease : ndarray, shape (B,)
        Predicted decrease of chi-square (not of its half), damping not counted as curvature.
    multipliers : ndarray, shape (k, B)
        Of the equality constraints; d (min chi2) / d target = -2 x multiplier.
    reach : ndarray, shape (k, B)
        Standard deviation of each constrained quantity in the (damped) quadratic model.
    active : ndarray of int8, shape (n, B)
        +1 at the upper bound, -1 at the lower one, 0 free.
    singular, settled : ndarray of bool, shape (B,)
        A pivot was lost; the active set came to rest (else the step is only clipped into the box).
    """

    step: np.ndarray
    curvature_times_step: np.ndarray
    decrease: np.ndarray
    multipliers: np.ndarray
    reach: np.ndarray
    active: np.ndarray
    singular: np.ndarray
    settled: np.ndarray

    def put(self, rows: np.ndarray, other: QuadraticStep) -> None:
        """Overwrite the members `rows` with those of `other`."""
        for name in self.__dataclass_fields__:
            getattr(self, name)[..., rows] = getattr(other, name)


def solve_step(problem: QuadraticBatch, active: np.ndarray | None = None) -> QuadraticStep:
    """Solve a batch of box-constrained, equality-constrained quadratic problems.

    Parameters
    ----------
    problem : QuadraticBatch
    active : ndarray of int8, shape (n, B), optional
        First guess of the active set, from the step before.
    """
    held = ~(problem.high > problem.low)
    active = np.zeros(held.shape, dtype=np.int8) if active is None else active.copy()
    active[held] = 0
    result = _solve_pinned(problem, held, active)
    wanted = _next_active(problem, result, held)
    wrong = (wanted != active).sum(axis=0)
    todo = np.flatnonzero(wrong)
    result.settled[todo] = False
    fewest, patience = wrong[todo], np.full(todo.size, PATIENCE)
    for _ in range(ACTIVE_SET_ROUNDS):
        if not todo.size:
            break
        part, part_held = problem.rows(todo), held[:, todo]
        solved = _solve_pinned(part, part_held, wanted[:, todo])
        result.put(todo, solved)
        new = _next_active(part, solved, part_held)
        wrong = (new != solved.active).sum(axis=0)
        patience = np.where(wrong < fewest, PATIENCE, patience - 1)
        fewest = np.minimum(wrong, fewest)
        _one_at_a_time(new, solved.active, np.flatnonzero((patience < 0) & (wrong > 1)))
        wanted[:, todo] = new
        on = wrong > 0
        result.settled[todo] = ~on
        todo, fewest, patience = todo[on], fewest[on], patience[on]
    if todo.size:
        # a feasible step at least; if it is a bad one, the caller damps and tries again
        part = problem.rows(todo)
        step = np.clip(result.step[:, todo], part.low, part.high)
        product = part.pattern.product(part.values, step)
        result.step[:, todo], result.curvature_times_step[:, todo] = step, product
        result.decrease[todo] = -(step * (2.0 * part.half_gradient + product)).sum(axis=0)
    return result


def _one_at_a_time(new: np.ndarray, old: np.ndarray, rows: np.ndarray) -> None:
    """Exchange only the last wrong component of rows that went round in circles."""
    changed = new[:, rows] != old[:, rows]
    last = len(new) - 1 - np.argmax(changed[::-1], axis=0)
    single = old[:, rows]
    single[last, np.arange(rows.size)] = new[last, rows]
    new[:, rows] = single


def _solve_pinned(problem: QuadraticBatch, held: np.ndarray, active: np.ndarray) -> QuadraticStep:
    """Solve with the active and the held components at their bounds."""
    pattern, batch = problem.pattern, active.shape[1]
    pinned = held | (active != 0)
    any_pinned = bool(pinned.any())
    added, right = problem.damping, -problem.half_gradient
    if any_pinned:
        # relative to the diagonal, so that no choice of units can overwhelm it
        weight = FROZEN * np.maximum(pattern.diagonal(problem.values) + added, np.finfo(float).tiny ** 0.5)
        bound = np.where(active > 0, problem.high, problem.low)
        added = np.where(pinned, weight, added)
        right = np.where(pinned, weight * np.where(pinned, bound, 0.0), right)
    factor = pattern.factor(problem.values, added)
    directions = problem.constraint_gradient
    if directions is None or problem.constraint_target is None:
        step = factor.solve(right)
        multipliers = reach = np.zeros((0, batch))
    else:
        sides = np.concatenate([right[None], np.where(pinned, 0.0, directions)]).transpose(1, 0, 2)
        solved = factor.solve(sides)
        step, towards = solved[:, 0], solved[:, 1:].transpose(1, 0, 2)
        multipliers, reach = _constrain(directions, towards, step, problem.constraint_target)
        for k in range(len(multipliers)):
            step -= towards[k] * multipliers[k]
    if any_pinned:
        step = np.where(pinned, bound, step)
    product = pattern.product(problem.values, step)
    decrease = -(step * (2.0 * problem.half_gradient + product)).sum(axis=0)
    return QuadraticStep(
        step,
        product,
        decrease,
        multipliers,
        reach,
        active.copy(),
        factor.singular,
        np.ones(batch, dtype=bool),
    )


def _constrain(
    directions: np.ndarray, towards: np.ndarray, step: np.ndarray, target: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Multipliers that bring a step onto a.s = c, and the standard deviations sqrt(a A^-1 a)."""
    count = len(directions)
    rows, cols = np.tril_indices(count)
    schur = np.array([(directions[i] * towards[j]).sum(axis=0) for i, j in zip(rows, cols, strict=True)])
    missing = (directions * step).sum(axis=1) - target
    # a direction that is blocked entirely gets a frozen pivot: multiplier zero, constraint left violated
    multipliers = analyse(rows, cols, count).factor(schur).solve(missing)
    return multipliers, np.sqrt(np.maximum(schur[rows == cols], 0.0))


def _next_active(problem: QuadraticBatch, solved: QuadraticStep, held: np.ndarray) -> np.ndarray:
    """Pin what left the box; release what the model pulls back inside. Rounding alone does neither."""
    active = solved.active.copy()
    free = (active == 0) & ~held
    width = problem.high - problem.low
    slack = np.where(np.isfinite(width), 1e-12 * width, 0.0)
    active[free & (solved.step > problem.high + slack)] = 1
    active[free & (solved.step < problem.low - slack)] = -1
    if solved.active.any():
        pull = problem.half_gradient + solved.curvature_times_step + problem.damping * solved.step
        if problem.constraint_gradient is not None:
            pull = pull + (problem.constraint_gradient * solved.multipliers[:, None, :]).sum(axis=0)
        noise = 1e-12 * (np.abs(problem.half_gradient) + np.abs(solved.curvature_times_step))
        # nor is a gain below 1e-20 in chi-square worth a release
        noise = np.maximum(noise, 1e-10 * np.sqrt(np.abs(problem.pattern.diagonal(problem.values))))
        active[(solved.active > 0) & (pull > noise)] = 0
        active[(solved.active < 0) & (pull < -noise)] = 0
        if problem.constraint_gradient is not None and problem.constraint_target is not None:
            # a constraint that pinned components block entirely has no multiplier to pull with
            missing = problem.constraint_target - (problem.constraint_gradient * solved.step).sum(axis=1)
            blocked = (solved.reach == 0.0) & (missing != 0.0)
            if blocked.any():
                inwards = problem.constraint_gradient * np.where(blocked, missing, 0.0)[:, None, :]
                active[((solved.active < 0) & (inwards > 0.0).any(axis=0)) & ~held] = 0
                active[((solved.active > 0) & (inwards < 0.0).any(axis=0)) & ~held] = 0
    return active
