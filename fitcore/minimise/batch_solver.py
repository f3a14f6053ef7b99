"""Minimise chi-square from many starting points at once.

Damped Gauss-Newton (Levenberg, Q. Appl. Math. 2, 164 (1944); Marquardt, SIAM J. 11, 431 (1963)) on a batch of
rows: each row has its own damping, controlled by the ratio of the achieved to the predicted decrease (Madsen,
Nielsen, Tingleff, "Methods for non-linear least squares problems", DTU 2004), its own bounds, held parameters and
equality constraints. Rows that are done leave the batch and waiting rows take their places, so one slow row costs
next to nothing and memory never grows with the number of starts.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import fields
from typing import Any

import numpy as np

from fitcore.minimise.batch_result import BatchResult, Status
from fitcore.minimise.damped_steps import DampedRun
from fitcore.minimise.equality_constraints import EqualityConstraints, constraint_rows

__all__ = ["BatchResult", "EqualityConstraints", "Status", "minimise_batch", "retry", "solve_with_retries"]


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
    run = DampedRun(
        problem,
        theta,
        low,
        high,
        data,
        constraint_rows(constraints, count),
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
    rungs: list[tuple[np.ndarray, dict[str, Any]]] = [
        (np.asarray(other, dtype=float), {}) for other in alternatives
    ]
    rungs.append((starts, {"initial_damping": 1.0, "forget_scale": True}))
    extras = () if extra_starts is None else np.atleast_2d(extra_starts)
    rungs += [(np.broadcast_to(extra, starts.shape), {}) for extra in extras]
    for rung, changed in rungs:
        failed = np.flatnonzero(~result.converged)
        if not failed.size:
            break
        retry(problem, result, failed, rung[failed], starts, **{**options, **changed})
    return result


def retry(
    problem: Any,
    result: BatchResult,
    rows: np.ndarray,
    new_starts: np.ndarray,
    starts: np.ndarray,
    **options: Any,
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
    better = (again.converged & ~result.converged[rows]) | (
        lower & (again.converged == result.converged[rows])
    )
    keep = np.flatnonzero(better)
    effort = result.n_linearisations[rows] + again.n_linearisations
    result.put(rows[keep], _rows_of(again, keep))
    result.n_linearisations[rows] = effort
    return rows[keep]


def _pick(name: str, value: Any, rows: np.ndarray, count: int) -> Any:
    """The share of some rows in an option of `minimise_batch`."""
    if name == "constraints" and value is not None:
        full = constraint_rows(value, count)
        return None if full is None else full.rows(rows)
    if name in ("fixed", "lower", "upper", "data") and value is not None and np.ndim(value) == 2:
        return np.asarray(value)[rows]
    return value


def _rows_of(result: BatchResult, rows: np.ndarray) -> BatchResult:
    return BatchResult(*(getattr(result, field.name)[rows] for field in fields(result)))


def _bounds(given: np.ndarray | None, own: list, default: float, shape: tuple[int, ...]) -> np.ndarray:
    values = [default if bound is None else bound for bound in own] if given is None else given
    return np.broadcast_to(np.asarray(values, dtype=float), shape)
