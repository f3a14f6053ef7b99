"""Speed of posterior sampling, for the suite: against emcee called the ordinary way, and with a chain file.

:func:`measure` returns every number; :data:`PROMISES` holds what the project promises of them.
"""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np

from fitcore import Problem
from fitcore.sampling.diagnostics import effective_sample_size
from fitcore.sampling.from_fit import modes_of_fit
from fitcore.sampling.posterior import sample
from fitcore.sampling.sample_result import Progress

PROMISES: dict[str, tuple[float, float]] = {
    "sampling_over_plain_emcee": (300.0, np.inf),
    "chain_file_overhead": (-np.inf, 0.10),
}


def against_plain_emcee(problem: Problem, modes: Any, *, plain_steps: int = 400) -> dict[str, float]:
    """Effective samples of the slowest parameter per second of processor time, ours over plain emcee.

    Ours is everything that :func:`sample` does, pilot run, convergence checks and final diagnosis included. Plain is
    emcee with its default move and a function of one point, from places of our chain, timed without any diagnosis.
    Both counts come from the same estimator (multi-chain effective sample size with walkers as chains). The plain run
    is shortened, which underestimates its autocorrelation time: the ratio is a lower limit.
    """
    import emcee

    begin = time.process_time()
    result = sample(problem, modes=modes, effective=20_000.0, rng=1, check_widths=False)
    seconds = time.process_time() - begin
    ours = _smallest(result.chain.get_chain()) / seconds

    n = problem.n_parameters
    walkers = 2 * n + 2
    places = result.chain.get_chain()[0, :walkers]
    sampler = emcee.EnsembleSampler(walkers, n, lambda theta: float(problem.log_posterior(theta)))
    sampler.random_state = np.random.RandomState(2).get_state()
    begin = time.process_time()
    sampler.run_mcmc(places, plain_steps)
    seconds = time.process_time() - begin
    plain = _smallest(sampler.get_chain()) / seconds
    return {
        "effective_per_second": ours,
        "effective_per_second_plain_emcee": plain,
        "sampling_over_plain_emcee": ours / plain,
    }


def _smallest(chain: np.ndarray) -> float:
    """Effective samples of the slowest parameter of a chain (steps, walkers, parameters)."""
    return min(effective_sample_size(np.ascontiguousarray(chain[:, :, k].T)) for k in range(chain.shape[2]))


def chain_file_overhead(
    problem: Problem, modes: Any, *, steps: int = 1000, repeats: int = 4
) -> dict[str, float]:
    """Extra time of sampling into a file over sampling into memory, same seed, so the same steps.

    Time between the first and the last block of the chain: processor time of the whole process (all threads), and
    wall clock beside it. Shortest of interleaved repeats; the first of each is thrown away, since memory that a
    process or the disk cache uses for the first time costs extra.
    """
    taken: dict[str, list[tuple[float, float]]] = {"memory": [], "file": []}
    for _ in range(repeats + 1):
        for kind, times in taken.items():
            marks: list[tuple[float, float]] = []

            def mark(state: Progress, marks: list[tuple[float, float]] = marks) -> None:
                if state.phase == "chain":
                    marks.append((time.process_time(), time.perf_counter()))

            with tempfile.TemporaryDirectory() as folder:
                path = Path(folder) / "chain.h5" if kind == "file" else None
                sample(
                    problem, modes=modes, chain_path=path, until=steps, rng=1, check_widths=False, progress=mark
                )  # fmt: skip
            times.append((marks[-1][0] - marks[0][0], marks[-1][1] - marks[0][1]))
    memory, file = (np.min(taken[kind][1:], axis=0) for kind in ("memory", "file"))
    processor, wall = (file / memory - 1.0).tolist()
    return {"chain_file_overhead": processor, "chain_file_overhead_wall": wall}


def measure(problem: Problem, *, quick: bool = False) -> dict[str, float]:
    """All numbers of this module."""
    modes = modes_of_fit(problem, problem.fit())
    plain = against_plain_emcee(problem, modes, plain_steps=150 if quick else 400)
    return plain | chain_file_overhead(problem, modes, repeats=2 if quick else 4)
