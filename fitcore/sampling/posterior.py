"""Sampling the posterior of a problem: arguments, chain, stopping, and a result that explains itself."""

from __future__ import annotations

import contextlib
import json
import os
import signal
import threading
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.chain_file import ChainFile
from fitcore.sampling.chain_format import ChainHeader
from fitcore.sampling.diagnostics import WidthCheck, diagnose
from fitcore.sampling.preparation import PILOT_STEPS, Target
from fitcore.sampling.run import Run
from fitcore.sampling.sample_result import Progress, SampleResult
from observables.errors import InputError, StoreError

__all__ = ["sample"]

_DEFAULT_EFFECTIVE = 2000.0


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
        run = Run(problem, target, chain, progress)
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
    until: int | None,
    effective: float | None,
    minutes: float | None,
    walkers: int | None,
    ensembles: int | None,
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
    entropy: Any = sequence.entropy
    plain = int(entropy) if np.ndim(entropy) == 0 else [int(word) for word in entropy]
    return json.dumps({"entropy": plain, "spawn_key": list(sequence.spawn_key)})


def _open_chain(
    problem: Any, path: Any, walkers: int | None, ensembles: int | None, rng: Any, block_steps: int | None
) -> Any:
    """The chain to append to: resumed, new, or in memory."""
    if path is not None and Path(path).exists():
        chain = ChainFile.resume(path, problem)
        stored = chain.header.sampler
        asked = {"walkers per ensemble": walkers, "ensembles": ensembles}
        wrong = [
            f"{k}: {stored[k]} in the file, {v} asked for"
            for k, v in asked.items()
            if v not in (None, stored[k])
        ]
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
        sampler={"walkers per ensemble": per_ensemble, "ensembles": n_ensembles, "pilot steps": PILOT_STEPS},
        seed=_seed_text(_seed_sequence(rng)),
    )
    if path is not None:
        return ChainFile.create(path, header, block_steps=block_steps)
    from fitcore.sampling.memory_chain import MemoryChain

    return MemoryChain(header, block_steps=block_steps)


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


def _result(run: Run, chain: Any, reason: str, interrupted: bool, check: WidthCheck | None) -> SampleResult:
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
