"""Before the chain: places to start from, and an independence proposal refitted to a pilot run."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.sampling.mixture import StudentMixture
from observables.errors import ConvergenceError, InputError

__all__ = [
    "Mode",
    "Target",
    "best_degrees",
    "checked_modes",
    "legacy_random_state",
    "refitted",
    "start_points",
]

Mode = tuple[np.ndarray, np.ndarray, float]

_DEGREES = (4.0, 8.0, 16.0, 32.0, 100.0)
_NAN_SHARE = 0.1
# Share of the best acceptance that a heavier tail must keep: in a tail too light a walker sits for long.
_TAIL_PRICE = 0.8
PILOT_STEPS = 150


class Target:
    """The log posterior of a problem for a sampler: batches only, never nan, and it counts.

    Parameters
    ----------
    problem : problem-like
        Offers ``log_posterior(theta (B, n)) -> (B,)``.

    Attributes
    ----------
    evaluations : int
        Points evaluated.
    nan_count : int
        Points where the posterior was nan (taken as impossible).
    nan_point : ndarray or None
        The first of them.
    """

    def __init__(self, problem: Any) -> None:
        self.log_posterior: Callable[[np.ndarray], np.ndarray] = problem.log_posterior
        self.names = tuple(problem.parameter_names)
        self.evaluations = 0
        self.nan_count = 0
        self.nan_point: np.ndarray | None = None

    def __call__(self, theta: np.ndarray) -> np.ndarray:
        """Log posterior (B,), -inf where it is impossible or nan."""
        value = np.asarray(self.log_posterior(theta), dtype=np.float64)
        self.evaluations += len(theta)
        bad = np.isnan(value)
        if bad.any():
            if self.nan_point is None:
                self.nan_point = theta[bad][0].copy()
            self.nan_count += int(bad.sum())
            value = np.where(bad, -np.inf, value)
            if self.evaluations > 10_000 and self.nan_count > _NAN_SHARE * self.evaluations:
                raise ConvergenceError(
                    f"the posterior is nan at {self.nan_count} of {self.evaluations} points, first at "
                    f"{self.describe(self.nan_point)}; tighten the bounds or mend the quantity"
                )
        return value

    def describe(self, point: np.ndarray) -> str:
        """A parameter point as text."""
        return ", ".join(f"{name} = {value:.6g}" for name, value in zip(self.names, point, strict=True))


def legacy_random_state(sequence: np.random.SeedSequence) -> np.random.RandomState:
    """The generator that emcee understands, seeded from a modern seed sequence."""
    return np.random.RandomState(np.random.MT19937(sequence))


def checked_modes(problem: Any, target: Target, modes: Sequence[Any]) -> list[Mode]:
    """The modes as arrays, each a possible point.

    Raises
    ------
    InputError
        Naming every mode that has the wrong shape, lies outside the bounds, or is impossible.
    """
    n = len(target.names)
    lower = np.array([p.lower for p in problem.parameters], dtype=np.float64)
    upper = np.array([p.upper for p in problem.parameters], dtype=np.float64)
    checked: list[Mode] = []
    complaints: list[str] = []
    for number, (point, covariance, weight) in enumerate(modes):
        point = np.asarray(point, dtype=np.float64)
        covariance = np.asarray(covariance, dtype=np.float64)
        if point.shape != (n,) or covariance.shape != (n, n) or not weight >= 0:
            complaints.append(
                f"mode {number}: needs a point ({n},), a covariance ({n}, {n}) and a weight >= 0, got "
                f"{point.shape}, {covariance.shape} and {weight}"
            )
            continue
        outside = [target.names[k] for k in np.flatnonzero(~((point >= lower) & (point <= upper)))]
        if outside:
            complaints.append(f"mode {number}: outside the bounds in {', '.join(outside)}")
        elif not np.isfinite(target(point[None])[0]):
            # A fit may end exactly on a bound where the prior vanishes: a hair inside is good enough.
            size = upper - lower
            margin = np.where(np.isfinite(size), 1e-9 * np.where(np.isfinite(size), size, 1.0), 0.0)
            inside = np.clip(point, lower + margin, upper - margin)
            if np.isfinite(target(inside[None])[0]):
                checked.append((inside, covariance, float(weight)))
            else:
                complaints.append(f"mode {number}: the posterior vanishes at {target.describe(point)}")
        else:
            checked.append((point, covariance, float(weight)))
    if not complaints and not any(w > 0 for _, _, w in checked):
        complaints.append("modes: at least one needs a positive weight")
    if complaints:
        raise InputError(complaints)
    return checked


def shares(weights: Any, walkers: int) -> np.ndarray:
    """Walkers per mode by largest remainder, (K,) of int."""
    ideal = np.asarray(weights, dtype=np.float64)
    ideal = ideal / ideal.sum() * walkers
    counts = np.floor(ideal).astype(np.int64)
    order = np.argsort(counts - ideal, kind="stable")
    counts[order[: walkers - counts.sum()]] += 1
    return np.asarray(counts)


def start_points(
    target: Target, density: StudentMixture, n_ensembles: int, per_ensemble: int, random: Any
) -> tuple[np.ndarray, np.ndarray]:
    """Starting places (walkers, n) and their log posterior.

    Walkers of each ensemble are shared among the modes by weight and scattered as wide as the mode
    (uniformly in parameters that fill their range); impossible places are drawn again, closer and closer.

    Raises
    ------
    ConvergenceError
        When no possible places are found.
    """
    counts = shares(density.weights, per_ensemble)
    component = np.tile(np.repeat(np.arange(len(counts)), counts), n_ensembles)
    n = density.means.shape[1]
    coords = np.empty((len(component), n))
    log_prob = np.full(len(component), -np.inf)
    shrink = 1.0
    for _ in range(60):
        open_ = np.flatnonzero(~np.isfinite(log_prob))
        if not len(open_):
            return coords, log_prob
        for k in np.unique(component[open_]):
            rows = open_[component[open_] == k]
            single = density.component(int(k), shrink=shrink, degrees=50.0)
            coords[rows] = single.draw(len(rows), random)
        log_prob[open_] = target(coords[open_])
        shrink *= 0.85
    raise ConvergenceError(
        f"{len(open_)} of {len(component)} walkers found no possible place to start, e.g. "
        f"{target.describe(coords[open_[0]])}; check bounds and priors"
    )


def best_degrees(
    target: Target, density: StudentMixture, coords: np.ndarray, log_prob: np.ndarray, random: Any
) -> tuple[StudentMixture, float]:
    """The heaviest tail that costs next to no acceptance, and its predicted acceptance.

    Predicted as the mean of min(1, w(q)/w(x)) over pairs of a proposal q and a chain point x, with
    w = posterior/proposal.

    Parameters
    ----------
    target : Target
    density : StudentMixture
    coords, log_prob : ndarray (B, n), (B,)
        Points of the pilot chain.
    random : RandomState or Generator

    Returns
    -------
    density : StudentMixture
    acceptance : float
    """
    tried = []
    for degrees in _DEGREES:
        trial = density.with_degrees(degrees)
        proposal = trial.draw(len(coords), random)
        weight_now = log_prob - trial.log_density(coords)
        weight_new = target(proposal) - trial.log_density(proposal)
        tried.append((trial, float(np.exp(np.minimum(weight_new - weight_now, 0.0)).mean())))
    enough = _TAIL_PRICE * max(acceptance for _, acceptance in tried)
    return next((trial, acceptance) for trial, acceptance in tried if acceptance >= enough)


def refitted(
    target: Target,
    previous: StudentMixture,
    coords: np.ndarray,
    log_prob: np.ndarray,
    lower: np.ndarray,
    upper: np.ndarray,
    random: Any,
    *,
    held_out: np.ndarray | None = None,
) -> tuple[StudentMixture, float]:
    """The mixture that imitates chain points (B, n) best, and its predicted acceptance.

    One component per component of ``previous``. The degrees of freedom and the acceptance are judged on the points
    ``held_out`` (B,) of bool, by a mixture fitted to the others: on its own points a fit looks better than it is.
    """
    labels = previous.nearest(coords)
    fitted = StudentMixture.from_draws(coords, labels, lower, upper)
    judged, tests = fitted, np.arange(len(coords))
    if held_out is not None:
        judged = StudentMixture.from_draws(coords[~held_out], labels[~held_out], lower, upper)
        tests = np.flatnonzero(held_out)
    pick = tests[(random.random(min(2000, len(tests))) * len(tests)).astype(np.int64)]
    best, acceptance = best_degrees(target, judged, coords[pick], log_prob[pick], random)
    return fitted.with_degrees(best.degrees), acceptance


@dataclass(frozen=True)
class Prepared:
    """What the pilot run leaves to the chain.

    Attributes
    ----------
    density : StudentMixture
        The tuned independence proposal; fixed from here on.
    acceptance : float
        Its predicted acceptance.
    coords, log_prob : ndarray (walkers, n), (walkers,)
        Where the walkers are.
    start_counts : tuple of int
        Walkers started in each mode.
    steps : int
        Steps of the pilot run.
    """

    density: StudentMixture
    acceptance: float
    coords: np.ndarray
    log_prob: np.ndarray
    start_counts: tuple[int, ...]
    steps: int
