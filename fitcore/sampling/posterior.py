"""Sampling the posterior: moves, pilot run, chain, stopping rule, and a result that explains itself."""

from __future__ import annotations

import contextlib
import json
import logging
import os
import signal
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.chain_format import ChainHeader
from fitcore.sampling.diagnostics import Diagnostics, WidthCheck, diagnose, effective_sizes
from fitcore.sampling.mixture import StudentMixture
from fitcore.sampling.preparation import (
    Mode,
    Prepared,
    Target,
    best_degrees,
    checked_modes,
    legacy_random_state,
    shares,
    start_points,
)
from fitcore.sampling.thinned import ThinnedChain
from observables.errors import InputError, StoreError

__all__ = ["Progress", "SampleResult", "sample"]

_LOG = logging.getLogger(__name__)
_PILOT_STEPS = 150
_PILOT_ROUNDS = 5
_CHECK_VALUES = 1 << 22
_DEFAULT_EFFECTIVE = 2000.0
_MOST_STEPS = 200_000


@dataclass(frozen=True)
class Progress:
    """State of a run, handed to the progress callback after every block.

    Attributes
    ----------
    phase : {"pilot", "chain", "widths"}
    steps, walkers : int
    rate : float
        Posterior evaluations per second.
    effective : float or None
        Effective samples so far in the slowest parameter; None before the first check.
    tau : float or None
        Longest autocorrelation time in steps.
    acceptance : float
    seconds, seconds_to_go : float, float or None
    """

    phase: str
    steps: int
    walkers: int
    rate: float
    effective: float | None
    tau: float | None
    acceptance: float
    seconds: float
    seconds_to_go: float | None


@dataclass(frozen=True)
class SampleResult:
    """A sampled posterior.

    Attributes
    ----------
    valid : bool
        Whether the diagnostics allow using the chain.
    flags : tuple of str
        Short words for what happened: "interrupted", "nan", "not-converged", "step-limit".
    message : str
        The verdict in one sentence.
    chain : ChainFile or MemoryChain
        The samples; a chain file is open for reading.
    path : Path or None
    diagnostics : Diagnostics
    density : StudentMixture
        The tuned proposal; its components are the modes.
    start_counts : tuple of int
        Walkers that this run started in each mode; empty on a resumed run.
    steps, walkers, ensembles : int
    evaluations : int
        Posterior evaluations of this call, pilot included.
    seconds, pilot_seconds, width_seconds : float
        Wall time of the chain, of the pilot run and of the width comparison.
    stopped_because : str
    interrupted : bool
    seed : str
        Entropy of the run, as JSON.
    notices : tuple of str
        What the reader should know: ignored tails, adopted settings.
    """

    valid: bool
    flags: tuple[str, ...]
    message: str
    chain: Any
    path: Path | None
    diagnostics: Diagnostics
    density: StudentMixture
    start_counts: tuple[int, ...]
    steps: int
    walkers: int
    ensembles: int
    evaluations: int
    seconds: float
    pilot_seconds: float
    width_seconds: float
    stopped_because: str
    interrupted: bool
    seed: str
    notices: tuple[str, ...] = ()

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names along the last axis of the samples."""
        return tuple(self.chain.parameter_names)

    @property
    def effective_per_second(self) -> float:
        """Effective samples of the slowest parameter per second of chain and pilot run."""
        return float(np.nanmin(self.diagnostics.effective_sample_size) / (self.seconds + self.pilot_seconds))

    def samples(self, name: str | None = None, *, max_values: int = 1 << 24) -> np.ndarray:
        """Flat samples (N, n), or (N,) of one parameter, thinned to at most ``max_values`` numbers."""
        flat = ThinnedChain.read(self.chain, max_values=max_values).samples.reshape(
            -1, len(self.parameter_names)
        )
        return flat if name is None else flat[:, self.parameter_names.index(name)]


def sample(
    problem: Any,
    *,
    covariance: Any = None,
    modes: Sequence[tuple[Any, Any, float]] | None = None,
    chain_path: str | os.PathLike[str] | None = None,
    until: int | None = None,
    effective: float | None = None,
    minutes: float | None = None,
    walkers: int | None = None,
    ensembles: int | None = None,
    rng: Any = None,
    progress: Callable[[Progress], None] | None = None,
    block_steps: int | None = None,
    check_widths: bool = True,
) -> SampleResult:
    """Sample the posterior of a problem.

    Parameters
    ----------
    problem : problem-like
        Offers ``parameters``, ``parameter_names``, ``fingerprint`` and ``log_posterior(theta)`` on batches.
    covariance : array_like (n, n), optional
        Covariance of the fit; used for modes without one of their own.
    modes : sequence of (point, covariance or None, weight), optional
        The minima of the fit and their relative weights. Default: the parameters' start values.
    chain_path : path-like, optional
        Chain file; resumed when it exists. Without it the chain stays in memory.
    until : int, optional
        Stop at this total number of steps (a second call with the same number does nothing).
    effective : float, optional
        Stop when every parameter has this many effective samples, the autocorrelation time is reliable
        and the ensembles agree. Default when nothing else is asked for: 2000.
    minutes : float, optional
        Stop after this wall time of the present call.
    walkers : int, optional
        Walkers per ensemble, even. Default: max(48, 2 n + 2).
    ensembles : int, optional
        Independent ensembles, at least 2. Default 4.
    rng : Generator, SeedSequence, int or None
        Source of randomness. The same inputs and seed give the same chain, bit for bit, however often the
        run was stopped and resumed.
    progress : callable, optional
        Called with a :class:`Progress` after every block.
    block_steps : int, optional
        Steps per block of the chain file, default 128 or fewer for very large ensembles.
    check_widths : bool
        Compare the widths with those of a short run without the independence move at the end.

    Returns
    -------
    SampleResult

    Raises
    ------
    InputError
        When an argument or a mode cannot be used, or disagrees with the settings of the file.
    StoreError
        When the chain file cannot be used; see :class:`~fitcore.sampling.chain_file.ChainFile`.
    ConvergenceError
        When no possible starting places are found, or the posterior is nan too often.

    Notes
    -----
    Flat in the parameters inside their bounds unless a parameter has its own prior. An interrupt from the
    keyboard ends the run in good order: what was sampled is committed, and the result says so.
    """
    _check_arguments(until, effective, minutes, walkers, ensembles)
    if until is None and effective is None and minutes is None:
        effective = _DEFAULT_EFFECTIVE
    target = Target(problem)
    chain = _open_chain(problem, chain_path, walkers, ensembles, rng, block_steps)
    try:
        run = _Run(problem, target, chain, progress)
        run.prepare(covariance, modes)
        with _interruptible() as interrupted:
            reason = run.advance(until, effective, minutes, interrupted)
            chain.commit()
            check = run.compare_widths(interrupted) if check_widths and chain.steps else None
    finally:
        chain.close()
    if chain_path is not None:
        chain = ChainFile.open(chain_path)
    return _result(run, chain, reason, interrupted(), check)


def _check_arguments(
    until: int | None, effective: float | None, minutes: float | None, walkers: int | None, ensembles: int | None
) -> None:
    complaints = [
        f"{name}: must be positive, got {value}"
        for name, value in (("until", until), ("effective", effective), ("minutes", minutes))
        if value is not None and not value > 0
    ]
    if walkers is not None and (walkers < 8 or walkers % 2):
        complaints.append(f"walkers: must be an even number of at least 8 per ensemble, got {walkers}")
    if ensembles is not None and ensembles < 2:
        complaints.append(f"ensembles: must be at least 2 (one alone cannot be checked), got {ensembles}")
    if complaints:
        raise InputError(complaints)


def _seed_sequence(rng: Any) -> np.random.SeedSequence:
    if isinstance(rng, np.random.SeedSequence):
        return rng
    if isinstance(rng, np.random.Generator):
        return np.random.SeedSequence([int(v) for v in rng.integers(0, 2**32, 4)])
    try:
        return np.random.SeedSequence(rng)
    except (TypeError, ValueError) as error:
        raise InputError(f"rng: must be a Generator, a seed or None, got {rng!r}") from error


def _seed_text(sequence: np.random.SeedSequence) -> str:
    entropy = sequence.entropy
    plain = int(entropy) if isinstance(entropy, int | np.integer) else [int(v) for v in np.ravel(entropy)]  # type: ignore[arg-type]
    return json.dumps({"entropy": plain, "spawn_key": list(sequence.spawn_key)})


def _open_chain(
    problem: Any, path: Any, walkers: int | None, ensembles: int | None, rng: Any, block_steps: int | None
) -> Any:
    """The chain to append to: resumed, new, or in memory."""
    if path is not None and Path(path).exists():
        chain = ChainFile.resume(path, problem)
        stored = chain.header.sampler
        asked = {"walkers per ensemble": walkers, "ensembles": ensembles}
        wrong = [f"{k}: {stored[k]} in the file, {v} asked for" for k, v in asked.items() if v not in (None, stored[k])]
        if rng is not None and not isinstance(rng, np.random.Generator):
            text = _seed_text(_seed_sequence(rng))
            if text != chain.header.seed:
                wrong.append(f"seed: {chain.header.seed} in the file, {text} asked for")
        if wrong:
            chain.close()
            raise InputError([f"{path}: a resumed run keeps its settings; {w}" for w in wrong])
        return chain
    n = len(problem.parameter_names)
    per_ensemble = walkers or max(48, 2 * n + 2)
    n_ensembles = ensembles or 4
    if per_ensemble < n + 2:
        raise InputError(
            f"walkers: {per_ensemble} per ensemble span no volume of {n} parameters; take at least {2 * n + 2}"
        )
    if block_steps is None:
        block_steps = int(np.clip((8 << 20) // (8 * n * per_ensemble * n_ensembles), 64, 128))
    header = ChainHeader.for_problem(
        problem,
        tuple(int(e) for e in np.repeat(np.arange(n_ensembles), per_ensemble)),
        sampler={"walkers per ensemble": per_ensemble, "ensembles": n_ensembles, "pilot steps": _PILOT_STEPS},
        seed=_seed_text(_seed_sequence(rng)),
    )
    if path is not None:
        return ChainFile.create(path, header, block_steps=block_steps)
    from fitcore.sampling.memory_chain import MemoryChain

    return MemoryChain(header, block_steps=block_steps)


class _Run:
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
        share = 0.7 if acceptance > 0.2 else 0.5 if acceptance > 0.05 else 0.2
        return [
            (evolution, 0.8 * (1.0 - share)),
            (snooker, 0.2 * (1.0 - share)),
            (IndependenceMove(density), share),
        ]

    def sampler(self, moves: list[tuple[Any, float]], backend: Any) -> Any:
        """An emcee sampler on the batch target."""
        import emcee

        walkers, n = self.n_ensembles * self.per_ensemble, len(self.target.names)
        sampler = emcee.EnsembleSampler(
            walkers, n, self.target, moves=moves, backend=backend, vectorize=True
        )
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
        for _ in range(_PILOT_ROUNDS):
            store = self.memory()
            for state in self.sampler(self.moves(density, acceptance), store).sample(
                state, iterations=_PILOT_STEPS, skip_initial_state_check=True
            ):
                pass
            steps += _PILOT_STEPS
            half = store.get_chain(discard=_PILOT_STEPS // 2, flat=True)
            half_log_prob = store.get_log_prob(discard=_PILOT_STEPS // 2, flat=True)
            labels = density.nearest(half)
            refitted = StudentMixture.from_draws(half, labels, self.lower, self.upper, self.spread)
            random.set_state(state.random_state)
            pick = random.randint(len(half), size=min(2000, len(half)))
            refitted, achieved = best_degrees(self.target, refitted, half[pick], half_log_prob[pick], random)
            state.random_state = random.get_state()
            settled = achieved < 1.1 * acceptance and achieved > 0.2
            density, acceptance = refitted, achieved
            _LOG.debug("pilot: %d steps, predicted acceptance %.2f", steps, acceptance)
            if self.progress is not None:
                self.progress(Progress("pilot", steps, len(coords), 0.0, None, None, acceptance, 0.0, None))
            if settled:
                break
        return Prepared(density, acceptance, state.coords, state.log_prob, counts, steps)

    # -- the chain -------------------------------------------------------------------------------------

    def advance(
        self, until: int | None, effective: float | None, minutes: float | None, interrupted: Callable[[], bool]
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
            found = self._effective()
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
                found = self._effective()
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

    def _effective(self) -> tuple[float, float]:
        """Usable effective samples (0 while unreliable or in disagreement) and the longest tau."""
        from fitcore.sampling.diagnostics import RELIABLE_TAUS, RHAT_LIMIT, rhat_of

        thinned = ThinnedChain.read(self.chain, max_values=_CHECK_VALUES)
        sizes = effective_sizes(thinned)
        total = thinned.steps * len(thinned.ensembles)
        smallest = float(np.min(np.where(np.isfinite(sizes), sizes, 0.0)))
        tau = total / smallest if smallest > 0 else np.inf
        reliable = thinned.steps >= RELIABLE_TAUS * tau
        agree = reliable and bool(np.all(rhat_of(thinned) <= RHAT_LIMIT))
        return (smallest if agree else 0.0), tau

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
            needed = max(effective * found[1] / walkers, 40.0 * found[1]) - self.chain.steps
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
        state = State(self.state.coords, log_prob=self.state.log_prob, random_state=random.get_state(), copy=True)
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


@contextlib.contextmanager
def _interruptible() -> Iterator[Callable[[], bool]]:
    """Turn the first interrupt from the keyboard into a flag; the second one interrupts for real."""
    seen = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield seen.is_set
        return
    previous = signal.getsignal(signal.SIGINT)

    def note(number: int, frame: object) -> None:
        seen.set()
        signal.signal(signal.SIGINT, previous)

    signal.signal(signal.SIGINT, note)
    try:
        yield seen.is_set
    finally:
        signal.signal(signal.SIGINT, previous)


def _result(run: _Run, chain: Any, reason: str, interrupted: bool, check: WidthCheck | None) -> SampleResult:
    target = run.target
    if not chain.steps:
        where = chain.path or "the chain"
        raise StoreError(f"{where}: stopped before the first step; run it again")
    extra = ["the run gave up before the effective samples asked for were there"] if run.limit_reached else []
    diagnostics = diagnose(chain, density=run.density, width_check=check, extra=extra)
    flags = []
    if interrupted:
        flags.append("interrupted")
    if target.nan_count:
        flags.append("nan")
    if run.limit_reached:
        flags.append("step-limit")
    if not diagnostics.valid:
        flags.append("not-converged")
    notices = list(chain.notices) + list(getattr(run.chain, "notices", ()))
    if target.nan_count and target.nan_point is not None:
        notices.append(
            f"the posterior was nan at {target.nan_count} of {target.evaluations} points (taken as impossible), "
            f"first at {target.describe(target.nan_point)}"
        )
    return SampleResult(
        valid=diagnostics.valid,
        flags=tuple(flags),
        message=diagnostics.verdict,
        chain=chain,
        path=chain.path,
        diagnostics=diagnostics,
        density=run.density,
        start_counts=run.start_counts,
        steps=chain.steps,
        walkers=diagnostics.walkers,
        ensembles=diagnostics.ensembles,
        evaluations=target.evaluations,
        seconds=run.seconds,
        pilot_seconds=run.pilot_seconds,
        width_seconds=run.width_seconds,
        stopped_because=reason,
        interrupted=interrupted,
        seed=chain.header.seed,
        notices=tuple(dict.fromkeys(notices)),
    )
