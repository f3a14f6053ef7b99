"""Blocks of pseudo-experiments: throw, refit, and keep what a calibration needs of each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import (
    BatchResult,
    EqualityConstraints,
    Status,
    minimise_batch,
    retry,
    solve_with_retries,
)
from fitcore.scaleout import problem_from

__all__ = ["Truth", "held_fit", "run_block", "likelihood_ratio"]

#: A held fit that ends lower than the free one by more than this shows that the free one missed its minimum.
LOWER_BY = 1e-6
#: A variance below this share of the uncorrelated one means that all its parameters sit at bounds.
FROZEN = 1e-9


@dataclass(frozen=True)
class Truth:
    """A parameter point around which pseudo-experiments are thrown.

    Attributes
    ----------
    label : str
        Unique among the truths of a calibration.
    theta : ndarray, shape (n,)
    held : tuple of (str, float)
        Quantities, with the values they have here, whose likelihood ratio is the test statistic; may be empty.
    covered : tuple of (str, float)
        Quantities, with their values here, whose intervals and pulls are recorded one by one.
    starts : ndarray, shape (s, n)
        Other minima: every refit is tried from them too.
    held_starts : ndarray, shape (s, n)
        The same for refits with `held` held.
    """

    label: str
    theta: np.ndarray
    held: tuple[tuple[str, float], ...] = ()
    covered: tuple[tuple[str, float], ...] = ()
    starts: Sequence[np.ndarray] = ()
    held_starts: Sequence[np.ndarray] = ()


def run_block(
    problem: Any, truth: Truth, size: int, entropy: int, spawn_key: tuple[int, ...]
) -> dict[str, np.ndarray]:
    """Throw and refit one block of pseudo-experiments.

    Parameters
    ----------
    problem : Problem or its spec
    truth : Truth
    size : int
    entropy, spawn_key : int, tuple of int
        Seed of the block: the same numbers wherever it runs.

    Returns
    -------
    dict of str to ndarray, shape (size,)
        ``chi2``: minimum of each; ``failed``: 1 where no minimum was found; with held quantities ``t``: their
        likelihood ratio; for each covered NAME ``t NAME`` and ``pull NAME``.
    """
    problem = problem_from(problem)
    rng = np.random.default_rng(np.random.SeedSequence(entropy, spawn_key=spawn_key))
    data = problem.pseudo_data(truth.theta, size, rng=rng)
    free = _free_fit(problem, truth, data)
    columns: dict[str, np.ndarray] = {}
    if truth.held:
        columns["t"] = likelihood_ratio(problem, free, truth.held, (truth.theta, *truth.held_starts), data)
    for name, value in truth.covered:
        columns[f"t {name}"] = likelihood_ratio(problem, free, ((name, value),), (truth.theta,), data)
    for name, value in truth.covered:
        columns[f"pull {name}"] = _pulls(problem, free, name, value, data)
    return {"chi2": free.chi2, "failed": (~free.converged).astype(float), **columns}


def _free_fit(problem: Any, truth: Truth, data: np.ndarray) -> BatchResult:
    """Refit all parameters, from the truth and from every other minimum; keep the lowest."""
    starts = np.tile(truth.theta, (len(data), 1))
    others = [np.tile(other, (len(data), 1)) for other in truth.starts]
    scattered = np.asarray(
        problem.start if hasattr(problem, "start") else [p.start for p in problem.parameters]
    )
    result = solve_with_retries(
        problem, starts, alternatives=others, extra_starts=scattered[None], data=data, tolerance=1e-8
    )
    for other in others:
        retry(problem, result, np.arange(len(data)), other, starts, data=data, tolerance=1e-8)
    return result


def held_fit(
    problem: Any, held: Sequence[tuple[str, float]], starts: np.ndarray, data: np.ndarray | None
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Refit with quantities held.

    Parameters
    ----------
    problem : Problem
    held : sequence of (str, float)
    starts : ndarray, shape (B, n)
    data : ndarray, shape (B, m), or None

    Returns
    -------
    theta (B, n), chi2 (B,), converged (B,)
        chi2 is +inf where the values could not be met; otherwise it is never below the true minimum.
    """
    place = {parameter.name: i for i, parameter in enumerate(problem.parameters)}
    starts = starts.copy()
    fixed = np.zeros(len(problem.parameters), dtype=bool)
    targets = {}
    for name, value in held:
        if name in place:
            fixed[place[name]] = True
            starts[:, place[name]] = value
        else:
            targets[name] = value
    constraints = None
    if targets:
        values = np.tile(np.array(list(targets.values())), (len(starts), 1))
        constraints = EqualityConstraints(tuple(targets), values)
    options: dict[str, Any] = {"fixed": fixed, "data": data, "constraints": constraints, "tolerance": 1e-8}
    result = minimise_batch(problem, starts, **options)
    failed = np.flatnonzero(~result.converged)
    if failed.size:
        retry(
            problem, result, failed, starts[failed], starts, **options, initial_damping=1.0, forget_scale=True
        )
    chi2 = np.where(result.status == Status.OUT_OF_REACH, np.inf, result.chi2)
    return result.theta, chi2, result.converged


def likelihood_ratio(
    problem: Any,
    free: BatchResult,
    held: Sequence[tuple[str, float]],
    starts: Sequence[np.ndarray],
    data: np.ndarray,
) -> np.ndarray:
    """Likelihood ratio min chi2(held) - min chi2, row by row.

    Rows whose free fit failed, or that do not reach the held values, get +inf: they count as more extreme than
    anything observed, which makes p-values and intervals larger, never smaller. A free fit that turns out higher
    than the held one is repeated from there (`free` is improved in place).

    Parameters
    ----------
    problem : Problem
    free : BatchResult
    held : sequence of (str, float)
    starts : sequence of ndarray, shape (n,)
        The held fit is tried from each of them, and from the free minimum where none succeeded.
    data : ndarray, shape (B, m)

    Returns
    -------
    ndarray, shape (B,)
    """
    count = len(data)
    theta, chi2, good = held_fit(problem, held, np.tile(starts[0], (count, 1)), data)
    for other in starts[1:]:
        _keep_lower(problem, held, np.arange(count), np.tile(other, (count, 1)), data, theta, chi2, good)
    rest = np.flatnonzero(~good)
    if rest.size:
        _keep_lower(problem, held, rest, free.theta[rest], data, theta, chi2, good)
    missed = np.flatnonzero(chi2 < free.chi2 - LOWER_BY)
    if missed.size:
        retry(problem, free, missed, theta[missed], free.theta.copy(), data=data, tolerance=1e-8)
    with np.errstate(invalid="ignore"):
        ratio = np.maximum(chi2 - free.chi2, 0.0)
    ratio[~free.converged | ~np.isfinite(ratio)] = np.inf
    return np.asarray(ratio)


def _keep_lower(
    problem: Any,
    held: Any,
    rows: np.ndarray,
    starts: np.ndarray,
    data: np.ndarray,
    theta: np.ndarray,
    chi2: np.ndarray,
    good: np.ndarray,
) -> None:
    """Fit rows again from other starts and keep, in place, what is better."""
    again, again_chi2, again_good = held_fit(problem, held, starts, data[rows])
    better = (again_good & ~good[rows]) | ((again_chi2 < chi2[rows]) & (again_good == good[rows]))
    pick = rows[better]
    theta[pick], chi2[pick], good[pick] = again[better], again_chi2[better], again_good[better]


def _pulls(problem: Any, free: BatchResult, name: str, value: float, data: np.ndarray) -> np.ndarray:
    """(fitted - true) / error, the error from the curvature J^T J at each minimum; nan where there is none."""
    from fitcore.minimise.sparse_cholesky import analyse

    linear = problem.linearise(free.theta, data)
    fitted, direction = _linear(problem, free.theta, name)
    pattern = analyse(linear.normal.rows, linear.normal.cols, free.theta.shape[1])
    diagonal = pattern.diagonal(linear.normal.values)
    diagonal = np.where(diagonal > 0.0, diagonal, 1.0)
    # parameters at a bound do not move
    ridge = np.where(free.at_bound.T != 0, 1e30, 1e-12) * diagonal
    factor = pattern.factor(linear.normal.values, ridge)
    solved = factor.solve(direction[:, None, :])[:, 0]
    variance = (direction * solved).sum(axis=0)
    period = problem.period_of(name)
    difference = fitted - value
    if period:
        difference = difference - period * np.rint(difference / period)
    with np.errstate(invalid="ignore", divide="ignore"):
        pull = difference / np.sqrt(variance)
    frozen = variance <= FROZEN * (direction**2 / diagonal).sum(axis=0)
    pull[~free.converged | ~np.isfinite(pull) | frozen] = np.nan
    return np.asarray(pull)


def _linear(problem: Any, theta: np.ndarray, name: str) -> tuple[np.ndarray, np.ndarray]:
    """A quantity or parameter and its gradient, shapes (B,) and (n, B)."""
    place = {parameter.name: i for i, parameter in enumerate(problem.parameters)}
    if name in place:
        gradient = np.zeros(theta.T.shape)
        gradient[place[name]] = 1.0
        return theta[:, place[name]], gradient
    values, slopes = problem.linearise_quantities(theta, (name,))
    return values[:, 0], np.ascontiguousarray(slopes[:, 0].T)
