"""Moves of the ensemble sampler, vectorised over walkers and over independent ensembles.

Each is an emcee move: it proposes, accepts by the Metropolis-Hastings rule with its own factor, and leaves
the target invariant by itself. Walkers of one ensemble never see those of another, so ensembles stay
statistically independent although all their proposals are evaluated in one batch. The sampler must be made
with ``vectorize=True``.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from emcee.moves import Move

from fitcore.sampling.mixture import StudentMixture

__all__ = ["DifferentialEvolution", "IndependenceMove", "SnookerMove"]


class EnsembleMove(Move):  # type: ignore[misc]
    """Base of moves that update one half of each ensemble given the other half.

    Parameters
    ----------
    n_ensembles : int
        Walkers are ordered by ensemble: ensemble e owns rows e W/n to (e + 1) W/n - 1.
    """

    def __init__(self, n_ensembles: int = 1) -> None:
        self.n_ensembles = int(n_ensembles)

    def propose_given(
        self, active: np.ndarray, others: np.ndarray, random: Any
    ) -> tuple[np.ndarray, np.ndarray | float]:
        """Proposals (E, A, n) and log factors (E, A) for ``active`` (E, A, n), given ``others`` (E, C, n)."""
        raise NotImplementedError

    def propose(self, model: Any, state: Any) -> tuple[Any, np.ndarray]:
        """One step of every walker; returns the state and which proposals were accepted."""
        random = model.random
        n_walkers, n = state.coords.shape
        n_ensembles = self.n_ensembles
        per_ensemble = n_walkers // n_ensembles
        half = per_ensemble // 2
        order = random.random((n_ensembles, per_ensemble)).argsort(axis=1)
        order += (np.arange(n_ensembles) * per_ensemble)[:, None]
        accepted = np.zeros(n_walkers, dtype=bool)
        for rows, rest in ((order[:, :half], order[:, half:]), (order[:, half:], order[:, :half])):
            # The second half sees the first half's new places.
            proposal, factor = self.propose_given(state.coords[rows], state.coords[rest], random)
            rows = rows.reshape(-1)
            proposal = proposal.reshape(-1, n)
            log_prob = model.log_prob_fn(proposal)
            gain = np.reshape(factor, -1) + log_prob - state.log_prob[rows]
            taken = np.log(random.random(len(rows))) < gain
            rows = rows[taken]
            state.coords[rows] = proposal[taken]
            state.log_prob[rows] = log_prob[taken]
            accepted[rows] = True
        return state, accepted


class DifferentialEvolution(EnsembleMove):
    """Step along the difference of two other walkers.

    q = x + g (z1 - z2) with g = 2.38/sqrt(2 n), scattered by ``scatter``; a share ``jumps`` of the
    proposals takes g = 1, which connects separate modes. Source: C. J. F. ter Braak, Statistics and
    Computing 16, 239 (2006).

    Parameters
    ----------
    n_ensembles : int
    jumps : float
        Share of proposals with g = 1.
    scatter : float
        Relative Gaussian spread of g.
    lower, periods : ndarray (n,), optional
        Parameters with a finite period whose range is exactly one period are wrapped into it.
    """

    def __init__(
        self,
        n_ensembles: int = 1,
        *,
        jumps: float = 0.1,
        scatter: float = 0.1,
        lower: np.ndarray | None = None,
        periods: np.ndarray | None = None,
    ) -> None:
        super().__init__(n_ensembles)
        self.jumps = jumps
        self.scatter = scatter
        self.lower = lower
        self.periods = periods
        self._wrapped = None if periods is None else np.flatnonzero(np.isfinite(periods))

    def propose_given(
        self, active: np.ndarray, others: np.ndarray, random: Any
    ) -> tuple[np.ndarray, np.ndarray | float]:
        """Proposals; the step is as likely as its reverse, so the factor is one."""
        n_ensembles, n_active, n = active.shape
        shape = (n_ensembles, n_active)
        first, second = _distinct(others.shape[1], 2, shape, random)
        each = np.arange(n_ensembles)[:, None]
        size = 2.38 / np.sqrt(2.0 * n) * (1.0 + self.scatter * random.standard_normal(shape))
        size[random.random(shape) < self.jumps] = 1.0
        proposal = active + size[..., None] * (others[each, first] - others[each, second])
        if self._wrapped is not None and len(self._wrapped) and self.lower is not None:
            k = self._wrapped
            assert self.periods is not None
            lower, period = self.lower[k], self.periods[k]
            proposal[..., k] = lower + (proposal[..., k] - lower) % period
        return proposal, np.zeros(shape)


class SnookerMove(EnsembleMove):
    """Step along the line through a third walker.

    q = x + g u (u . (z1 - z2)), u the unit vector from z to x, log factor (n - 1) ln(|q - z|/|x - z|).
    Source: C. J. F. ter Braak, J. A. Vrugt, Statistics and Computing 18, 435 (2008), eqs. 4-5.

    Parameters
    ----------
    n_ensembles : int
    size : float
        The factor g.
    """

    def __init__(self, n_ensembles: int = 1, *, size: float = 1.7) -> None:
        super().__init__(n_ensembles)
        self.size = size

    def propose_given(
        self, active: np.ndarray, others: np.ndarray, random: Any
    ) -> tuple[np.ndarray, np.ndarray | float]:
        """Proposals with the Jacobian of the radial step as factor."""
        n_ensembles, n_active, n = active.shape
        anchor, first, second = _distinct(others.shape[1], 3, (n_ensembles, n_active), random)
        each = np.arange(n_ensembles)[:, None]
        z = others[each, anchor]
        line = active - z
        distance = np.sqrt(np.einsum("ijk,ijk->ij", line, line))
        # A walker exactly on the anchor has no line: it stays where it is.
        unit = line / np.where(distance > 0, distance, 1.0)[..., None]
        step = self.size * np.einsum("ijk,ijk->ij", unit, others[each, first] - others[each, second])
        proposal = active + step[..., None] * unit
        with np.errstate(divide="ignore", invalid="ignore"):
            factor = (n - 1.0) * (np.log(np.abs(distance + step)) - np.log(distance))
        return proposal, np.where(distance > 0, factor, -np.inf)


class IndependenceMove(Move):  # type: ignore[misc]
    """Propose from a fixed density that imitates the target, whatever the present place.

    The log factor is ln g(x) - ln g(q). Never use it alone: a walker in a tail that g underrates stays
    there for a long time, and the chain looks well mixed meanwhile.

    Parameters
    ----------
    density : StudentMixture
    """

    def __init__(self, density: StudentMixture) -> None:
        self.density = density

    def propose(self, model: Any, state: Any) -> tuple[Any, np.ndarray]:
        """One step of every walker; returns the state and which proposals were accepted."""
        random = model.random
        n_walkers = len(state.coords)
        proposal = self.density.draw(n_walkers, random)
        both = self.density.log_density(np.concatenate([state.coords, proposal]))
        log_prob = model.log_prob_fn(proposal)
        gain = both[:n_walkers] - both[n_walkers:] + log_prob - state.log_prob
        accepted = np.log(random.random(n_walkers)) < gain
        state.coords[accepted] = proposal[accepted]
        state.log_prob[accepted] = log_prob[accepted]
        return state, accepted


def _distinct(choices: int, picks: int, shape: tuple[int, ...], random: Any) -> list[np.ndarray]:
    """``picks`` arrays of integers below ``choices``, distinct from each other elementwise."""
    picked: list[np.ndarray] = []
    for k in range(picks):
        # Draw among the integers not yet taken, then step over the taken ones in ascending order.
        value = (random.random(shape) * (choices - k)).astype(np.int64)
        for taken in np.sort(np.stack(picked), axis=0) if picked else ():
            value += value >= taken
        picked.append(value)
    return picked
