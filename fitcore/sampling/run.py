"""One run of the sampler: pilot, chain, comparison of widths."""

from __future__ import annotations

import json
import logging
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from fitcore.sampling.diagnostics import RELIABLE_TAUS, WidthCheck, effective_sizes, mixing
from fitcore.sampling.mixture import StudentMixture
from fitcore.sampling.preparation import (
    PILOT_STEPS,
    Mode,
    Prepared,
    Target,
    checked_modes,
    legacy_random_state,
    refitted,
    shares,
    start_points,
)
from fitcore.sampling.sample_result import Progress
from fitcore.sampling.thinned import ThinnedChain
from observables.errors import InputError

__all__ = ["Run"]

_LOG = logging.getLogger(__name__)
_PILOT_ROUNDS = 12
_CHECK_VALUES = 1 << 22
_MOST_STEPS = 200_000
#: A run stops only when it is this much longer than the diagnosis at its end asks for.
_MARGIN = 1.05


class Run:
    """One call of :func:`sample`: preparation, chain, comparison of widths."""

    def __init__(
        self, problem: Any, target: Target, chain: Any, progress: Callable[[Progress], None] | None
    ) -> None:
        self.problem, self.target, self.chain, self.progress = problem, target, chain, progress
        settings = chain.header.sampler
        self.n_ensembles = int(settings["ensembles"])
        self.per_ensemble = int(settings["walkers per ensemble"])
        parameters = tuple(problem.parameters)
        self.lower = np.array([p.lower for p in parameters], dtype=np.float64)
        self.upper = np.array([p.upper for p in parameters], dtype=np.float64)
        self.spread = np.array([abs(getattr(p, "scale", 0.0) or 1.0) for p in parameters])
        periods = np.array([float(getattr(p, "period", None) or np.inf) for p in parameters])
        self.periods = np.where(np.isclose(self.upper - self.lower, periods), periods, np.inf)
        stored = json.loads(chain.header.seed)
        self.seeds = np.random.SeedSequence(stored["entropy"], spawn_key=tuple(stored["spawn_key"])).spawn(3)
        self.seconds = self.pilot_seconds = self.width_seconds = 0.0
        self.start_counts: tuple[int, ...] = ()
        self.state: Any = None
        self.density: Any = None
        self.acceptance = 0.0
        self.limit_reached = False

    # -- moves and samplers ----------------------------------------------------------------------------

    def moves(self, density: StudentMixture | None, acceptance: float) -> list[tuple[Any, float]]:
        """The mixture of moves; the independence move gets its share by what it achieves, never all."""
        from fitcore.sampling.moves import DifferentialEvolution, IndependenceMove, SnookerMove

        evolution = DifferentialEvolution(self.n_ensembles, lower=self.lower, periods=self.periods)
        snooker = SnookerMove(self.n_ensembles)
        if density is None:
            return [(evolution, 0.8), (snooker, 0.2)]
        share = 0.7 if acceptance > 0.65 else 0.5 if acceptance > 0.05 else 0.2
        return [
            (evolution, 0.8 * (1.0 - share)),
            (snooker, 0.2 * (1.0 - share)),
            (IndependenceMove(density), share),
        ]

    def sampler(self, moves: list[tuple[Any, float]], backend: Any) -> Any:
        """An emcee sampler on the batch target."""
        import emcee

        walkers, n = self.n_ensembles * self.per_ensemble, len(self.target.names)
        sampler = emcee.EnsembleSampler(walkers, n, self.target, moves=moves, backend=backend, vectorize=True)
        # emcee's wrapper prints to stdout when the function raises; the bare function does not.
        sampler.log_prob_fn = self.target
        return sampler

    def memory(self) -> Any:
        """A scratch chain."""
        from fitcore.sampling.memory_chain import MemoryChain

        return MemoryChain(self.chain.header)

    # -- preparation -----------------------------------------------------------------------------------

    def prepare(self, covariance: Any, modes: Sequence[tuple[Any, Any, float]] | None) -> None:
        """Take up a stored chain where it ended, or run the pilot."""
        if self.chain.steps:
            arrays = self.chain.read_proposal()
            self.acceptance = float(arrays.pop("acceptance"))
            self.density = StudentMixture.from_arrays(arrays)
            self.state = self.chain.get_last_sample()
            return
        begin = time.perf_counter()
        prepared = self.pilot(self._modes(covariance, modes))
        self.density, self.acceptance = prepared.density, prepared.acceptance
        self.start_counts = prepared.start_counts
        self.chain.write_proposal(prepared.density.arrays() | {"acceptance": np.array(prepared.acceptance)})
        from emcee.state import State

        random = legacy_random_state(self.seeds[1])
        self.state = State(prepared.coords, log_prob=prepared.log_prob, random_state=random.get_state())
        self.pilot_seconds = time.perf_counter() - begin

    def _modes(self, covariance: Any, modes: Sequence[tuple[Any, Any, float]] | None) -> list[Mode]:
        n = len(self.target.names)
        if covariance is None:
            covariance = np.diag(self.spread**2)
        covariance = np.asarray(covariance, dtype=np.float64)
        if covariance.shape != (n, n):
            raise InputError(f"covariance: must be ({n}, {n}), got {covariance.shape}")
        if modes is None:
            modes = [(np.array([p.start for p in self.problem.parameters]), None, 1.0)]
        filled = [(point, covariance if own is None else own, weight) for point, own, weight in modes]
        return checked_modes(self.problem, self.target, filled)

    def pilot(self, modes: list[Mode]) -> Prepared:
        """Rounds of short runs, each with the proposal refitted to the one before."""
        from emcee.state import State

        random = legacy_random_state(self.seeds[0])
        density = StudentMixture.from_modes(modes, self.lower, self.upper, self.spread)
        coords, log_prob = start_points(self.target, density, self.n_ensembles, self.per_ensemble, random)
        counts = tuple(int(c) * self.n_ensembles for c in shares(density.weights, self.per_ensemble))
        state = State(coords, log_prob=log_prob, random_state=random.get_state())
        acceptance, steps = 0.3, 0
        rounds: list[tuple[np.ndarray, np.ndarray]] = []
        climbed = float(np.mean(log_prob))
        for number in range(_PILOT_ROUNDS):
            store = self.memory()
            sampler = self.sampler(self.moves(density, acceptance), store)
            for step in sampler.sample(state, iterations=PILOT_STEPS, skip_initial_state_check=True):
                last = step
            state = last
            steps += PILOT_STEPS
            discard = 0 if number else PILOT_STEPS // 2
            rounds.append(
                (store.get_chain(discard=discard, thin=3), store.get_log_prob(discard=discard, thin=3))
            )
            # The later half of what there is so far: enough draws for a fit, the way from the start forgotten.
            draws, log_prob = (np.concatenate(part) for part in zip(*rounds[len(rounds) // 2 :], strict=True))
            # The last ensemble is independent of those before it.
            held_out = np.tile(self.chain.ensembles == self.n_ensembles - 1, len(draws))
            random.set_state(state.random_state)
            density, achieved = refitted(
                self.target, density, draws.reshape(-1, draws.shape[2]), log_prob.reshape(-1),
                self.lower, self.upper, random, held_out=held_out,
            )  # fmt: skip
            state.random_state = random.get_state()
            # While walkers still climb, the proposal imitates where they were.
            height = float(rounds[-1][1].mean())
            settled = achieved < 1.1 * acceptance and achieved > 0.2 and height < climbed + 1.0
            climbed = height
            acceptance = achieved
            _LOG.debug("pilot: %d steps, predicted acceptance %.2f", steps, acceptance)
            if self.progress is not None:
                self.progress(Progress("pilot", steps, len(coords), 0.0, None, None, acceptance, 0.0, None))
            if settled:
                break
        return Prepared(density, acceptance, state.coords, state.log_prob, counts, steps)

    # -- the chain -------------------------------------------------------------------------------------

    def advance(
        self,
        until: int | None,
        effective: float | None,
        minutes: float | None,
        interrupted: Callable[[], bool],
    ) -> str:
        """Append steps until a stopping rule holds; returns why it stopped."""
        sampler = self.sampler(self.moves(self.density, self.acceptance), self.chain)
        begin, evaluations = time.perf_counter(), self.target.evaluations
        block = self.chain.block_steps
        first = self.chain.steps
        found: tuple[float, float] | None = None
        reason = ""
        next_check = _next_check(first, block)
        if effective is not None and first:
            found = self._effective(effective)
        while not reason:
            if until is not None and self.chain.steps >= until:
                reason = f"reached {until} steps"
            elif effective is not None and found is not None and found[0] >= effective:
                reason = f"reached {effective:g} effective samples with the ensembles in agreement"
            elif minutes is not None and time.perf_counter() - begin > 60.0 * minutes:
                reason = f"{minutes:g} minutes are over"
            elif interrupted():
                reason = "interrupted"
            elif self.chain.steps >= max(_MOST_STEPS, first) and until is None and minutes is None:
                reason, self.limit_reached = f"gave up at {self.chain.steps} steps", True
            if reason:
                break
            # Blocks end at multiples of the block length, also after a short block of an interrupted run.
            goal = (self.chain.steps // block + 1) * block
            goal = goal if until is None else min(goal, until)
            self._steps(sampler, goal - self.chain.steps, interrupted, begin, minutes)
            if effective is not None and self.chain.steps >= next_check:
                found = self._effective(effective)
                next_check = _next_check(self.chain.steps, block)
            self._report(begin, evaluations, first, until, effective, minutes, found)
        self.seconds = time.perf_counter() - begin
        return reason

    def _steps(
        self, sampler: Any, steps: int, interrupted: Callable[[], bool], begin: float, minutes: float | None
    ) -> None:
        for state in sampler.sample(self.state, iterations=steps, skip_initial_state_check=True):
            self.state = state
            if interrupted() or (minutes is not None and time.perf_counter() - begin > 60.0 * minutes):
                break

    def _effective(self, effective: float) -> tuple[float, float]:
        """Usable effective samples (0 while unreliable or in disagreement) and the longest tau."""
        usable = tau = 0.0
        # A short look first; what it lets pass is looked at again as the diagnosis will look at it.
        for quick in (True, False):
            thinned = (
                ThinnedChain.read(self.chain, max_values=_CHECK_VALUES)
                if quick
                else ThinnedChain.read(self.chain)
            )
            found = mixing(thinned)
            sizes = found.effective_sample_size
            smallest = float(np.min(np.where(np.isfinite(sizes), sizes, 0.0)))
            tau = thinned.steps * len(thinned.ensembles) / smallest if smallest > 0 else np.inf
            usable = smallest if found.status(_MARGIN) == "reliable" and found.agree else 0.0
            if usable < effective or thinned.stride == 1:
                break
        return usable, tau

    def _report(
        self, begin: float, evaluations: int, first: int, until: int | None, effective: float | None,
        minutes: float | None, found: tuple[float, float] | None,
    ) -> None:  # fmt: skip
        if self.progress is None:
            return
        seconds = time.perf_counter() - begin
        done = self.chain.steps - first
        remaining = []
        if until is not None and done:
            remaining.append(seconds / done * max(until - self.chain.steps, 0))
        if minutes is not None:
            remaining.append(max(60.0 * minutes - seconds, 0.0))
        if effective is not None and found is not None and np.isfinite(found[1]) and done:
            walkers = self.n_ensembles * self.per_ensemble
            needed = (
                max(effective * found[1] / walkers, _MARGIN * RELIABLE_TAUS * found[1]) - self.chain.steps
            )
            remaining.append(seconds / done * max(needed, 0.0))
        self.progress(
            Progress(
                "chain", self.chain.steps, self.n_ensembles * self.per_ensemble,
                (self.target.evaluations - evaluations) / max(seconds, 1e-9),
                None if found is None else found[0], None if found is None else found[1],
                float(np.mean(self.chain.accepted)) / max(self.chain.steps, 1), seconds,
                min(remaining) if remaining else None,
            )
        )  # fmt: skip

    def compare_widths(self, interrupted: Callable[[], bool]) -> WidthCheck | None:
        """Widths of the chain over those of a short run without the independence move; None if interrupted."""
        from emcee.state import State

        begin = time.perf_counter()
        steps = int(np.clip(self.chain.steps // 4, 100, 2000))
        random = legacy_random_state(self.seeds[2])
        state = State(
            self.state.coords, log_prob=self.state.log_prob, random_state=random.get_state(), copy=True
        )
        store = self.memory()
        for _ in self.sampler(self.moves(None, 0.0), store).sample(
            state, iterations=steps, skip_initial_state_check=True
        ):
            if interrupted():
                return None
        main = ThinnedChain.read(self.chain, max_values=_CHECK_VALUES)
        short = ThinnedChain.read(store, max_values=_CHECK_VALUES)
        width_main, error_main = _log_widths(main)
        width_short, error_short = _log_widths(short)
        difference = width_main - width_short
        error = np.sqrt(error_main**2 + error_short**2)
        self.width_seconds = time.perf_counter() - begin
        if not np.isfinite(error).all() or not (error > 0).all():
            return None
        return WidthCheck(np.exp(difference), difference / error, steps)


def _log_widths(thinned: ThinnedChain) -> tuple[np.ndarray, np.ndarray]:
    """Logarithm of each parameter's standard deviation and its Monte Carlo error."""
    samples = thinned.samples
    squares = (samples - samples.mean(axis=(0, 1))) ** 2
    variance = squares.mean(axis=(0, 1))
    sizes = effective_sizes(replace(thinned, samples=squares, tail=thinned.tail[:0]))
    with np.errstate(divide="ignore", invalid="ignore"):
        return 0.5 * np.log(variance), 0.5 * squares.std(axis=(0, 1)) / variance / np.sqrt(sizes)


def _next_check(steps: int, block: int) -> int:
    """The step of the next convergence check: a fixed sequence, so that stopping is reproducible."""
    check = block
    while check <= steps:
        check = max(check + block, int(1.2 * check) // block * block)
    return check
