"""Log marginal likelihood by importance sampling from a Student-t mixture fitted to the chain."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.sampling.mixture import StudentMixture
from fitcore.sampling.preparation import Target, refitted
from fitcore.sampling.thinned import ThinnedChain
from observables.errors import InputError

__all__ = ["Evidence", "evidence", "pareto_k"]

PARETO_LIMIT = 0.7
_MOST_DEGREES = 16.0


@dataclass(frozen=True)
class Evidence:
    """A log marginal likelihood and how far to trust it.

    Attributes
    ----------
    valid : bool
        False when the importance weights are too heavy-tailed; ``log_evidence`` is None then.
    log_evidence : float or None
        Natural logarithm of the integral of exp(log posterior) over the parameters: likelihood
        exp(-chi2/2) times normalised prior.
    error : float or None
        Its standard error.
    effective_fraction : float
        Effective sample fraction of the weights, 0 to 1.
    pareto_k : float
        Tail index of the weights; below 0.5 the error is sound, above 0.7 nothing is quoted.
    draws : int
    message : str
    """

    valid: bool
    log_evidence: float | None
    error: float | None
    effective_fraction: float
    pareto_k: float
    draws: int
    message: str


def evidence(
    problem: Any, chain: Any, *, draws: int = 40_000, rng: Any = None, density: Any = None
) -> Evidence:
    """Estimate the evidence of a problem from its chain.

    Parameters
    ----------
    problem : problem-like
    chain : ChainFile or MemoryChain
        A converged chain of that problem.
    draws : int
        Importance draws.
    rng : Generator, int or None
    density : StudentMixture, optional
        Its components tell the modes apart; default: one mode.

    Returns
    -------
    Evidence

    Raises
    ------
    InputError
        When a parameter has no proper prior: the evidence of an improper prior is meaningless.

    Notes
    -----
    The density proposed from is fitted to the chain, then sampled afresh, so the estimate is unbiased
    whatever the chain did. Normalising constants of the likelihood that depend on the data alone are left
    out; they cancel in ratios between hypotheses for the same data.
    """
    improper = [
        p.name
        for p in problem.parameters
        if getattr(p, "prior", None) is None and not (np.isfinite(p.lower) and np.isfinite(p.upper))
    ]
    if improper:
        raise InputError(
            [
                f"{name}: no proper prior; set finite bounds or a prior before asking for the evidence"
                for name in improper
            ]
        )
    random = np.random.default_rng(rng)
    target = Target(problem)
    thinned = ThinnedChain.read(chain, max_values=1 << 22)
    samples = thinned.samples.reshape(-1, thinned.samples.shape[-1])
    log_posterior = thinned.log_posterior.reshape(-1)
    lower = np.array([p.lower for p in problem.parameters], dtype=np.float64)
    upper = np.array([p.upper for p in problem.parameters], dtype=np.float64)
    single = StudentMixture.from_draws(samples, np.zeros(len(samples), dtype=np.int64), lower, upper)
    fitted, _ = refitted(target, density or single, samples, log_posterior, lower, upper, random)
    # Heavier tails than a chain's proposal needs: the weights then have their maximum inside the posterior.
    fitted = fitted.with_degrees(min(fitted.degrees, _MOST_DEGREES))
    points = fitted.draw(draws, random)
    log_weights = target(points) - fitted.log_density(points)
    return _estimate(log_weights)


def _estimate(log_weights: np.ndarray) -> Evidence:
    draws = len(log_weights)
    top = log_weights.max()
    if not np.isfinite(top):
        return Evidence(False, None, None, 0.0, float("inf"), draws, "no draw has a finite posterior")
    weights = np.exp(log_weights - top)
    mean = weights.mean()
    fraction = float(mean**2 / (weights**2).mean())
    k = pareto_k(log_weights)
    if not k <= PARETO_LIMIT:
        return Evidence(
            False, None, None, fraction, k, draws,
            f"not quoted: Pareto k = {k:.2f} > {PARETO_LIMIT}; the fitted density misses a tail of the posterior. "
            "Run a longer chain from all modes of the fit",
        )  # fmt: skip
    error = float(weights.std(ddof=1) / mean / np.sqrt(draws))
    return Evidence(
        True, float(np.log(mean) + top), error, fraction, k, draws,
        f"effective sample fraction {fraction:.2f}, Pareto k {k:.2f}",
    )  # fmt: skip


def pareto_k(log_weights: np.ndarray) -> float:
    """Shape of the generalised Pareto distribution of the largest importance weights.

    Parameters
    ----------
    log_weights : ndarray (N,)

    Returns
    -------
    float
        -inf when the weights are all equal, inf for fewer than 25 weights.

    Notes
    -----
    The min(N/5, 3 sqrt(N)) largest weights; A. Vehtari, D. Simpson, A. Gelman, Y. Yao, J. Gabry, Journal of
    Machine Learning Research 25, 72 (2024). Estimator: J. Zhang, M. A. Stephens, Technometrics 51, 316
    (2009), with the weak prior of the former.
    """
    size = len(log_weights)
    count = int(min(0.2 * size, 3.0 * np.sqrt(size)))
    if count < 5:
        return float("inf")
    ordered = np.sort(log_weights)
    top = ordered[-1]
    threshold = np.exp(ordered[-count - 1] - top)
    tail = np.exp(ordered[-count:] - top) - threshold
    if not tail[-1] > 0:
        return float("-inf")
    tail = tail[tail > 0]
    n = len(tail)
    if n < 5:
        return float("inf")
    grid = 30 + int(np.sqrt(n))
    quartile = tail[int(n / 4 + 0.5) - 1]
    b = 1.0 / tail[-1] + (1.0 - np.sqrt(grid / (np.arange(1, grid + 1) - 0.5))) / (3.0 * quartile)
    k = np.log1p(-b[:, None] * tail).mean(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        log_likelihood = n * (np.log(-b / k) - k - 1.0)
    with np.errstate(over="ignore", invalid="ignore"):
        weight = 1.0 / np.exp(log_likelihood - log_likelihood[:, None]).sum(axis=1)
    weight = np.where(np.isfinite(weight), weight, 0.0)
    best = float((b * weight).sum() / weight.sum())
    shape = float(np.log1p(-best * tail).mean())
    return (n * shape + 10.0 * 0.5) / (n + 10.0)
