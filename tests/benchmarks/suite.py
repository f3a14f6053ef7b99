"""The speed suite: every number is a ratio of two things measured in the same run on the same machine.

    python tests/benchmarks/suite.py [--set world-2026] [--quick] [--json FILE]

Times are the shortest of several interleaved repeats, in processor time of one thread; only start-up times are wall
clock of a whole process. General-purpose practice means iminuit's MIGRAD on the same chi-square, once as people call
it (one point at a time, no gradient) and once on the fairest scalar path (with the exact gradient).
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
import sampling

from fitcore import Problem
from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile

#: What the project promises, as (lowest, highest) ratio.
PROMISES: dict[str, tuple[float, float]] = {
    "batch_gain_4096": (200.0, np.inf),
    "sparse_jacobian_in_chi2": (0.0, 8.0),
    "dense_jacobian_in_chi2": (0.0, 15.0),
    "linearise_in_chi2": (0.0, 10.0),
    "profile_over_migrad": (1500.0, np.inf),
    "profile_over_migrad_with_gradient": (300.0, np.inf),
    "toys_over_migrad": (1500.0, np.inf),
    "toys_over_migrad_with_gradient": (400.0, np.inf),
    "profile_peak_memory_gib": (0.0, 0.5),
    **sampling.PROMISES,
}


def shortest(*jobs: Callable[[], Any], repeats: int = 7) -> list[float]:
    """Shortest processor time of each job, repeats interleaved so that all see the same machine."""
    best = [np.inf] * len(jobs)
    for job in jobs:
        job()
    for _ in range(repeats):
        for i, job in enumerate(jobs):
            start = time.process_time()
            job()
            best[i] = min(best[i], time.process_time() - start)
    return best


def cloud(problem: Problem, size: int) -> np.ndarray:
    """Points around the start, a third of a step away."""
    scales = np.array([p.scale for p in problem.parameters])
    noise = np.random.default_rng(20260101).normal(size=(size, problem.n_parameters))
    theta = problem.start + 0.3 * scales * noise
    lower = np.array([p.lower for p in problem.parameters])
    upper = np.array([p.upper for p in problem.parameters])
    return np.asarray(np.clip(theta, lower, upper))


def evaluation(problem: Problem) -> dict[str, float]:
    """(c) batch against single points, (d) derivatives in units of chi2."""
    many, some = cloud(problem, 4096), cloud(problem, 1024)
    inside = np.ascontiguousarray(some.T)
    single = many[:64]
    batch, one = shortest(
        lambda: problem.chi2(many), lambda: [problem.chi2(single[i : i + 1]) for i in range(len(single))]
    )
    chi2, sparse, dense, linearise = shortest(
        lambda: problem.chi2(some),
        lambda: problem._chi_square._differentiate(inside),
        lambda: problem.jacobian(some),
        lambda: problem.linearise(some),
        repeats=15,
    )
    return {
        "batch_gain_4096": (one / len(single)) / (batch / len(many)),
        "sparse_jacobian_in_chi2": sparse / chi2,
        "dense_jacobian_in_chi2": dense / chi2,
        "linearise_in_chi2": linearise / chi2,
        "chi2_per_second": len(many) / batch,
    }


def migrad(problem: Problem, start: np.ndarray, fixed: dict[int, float], data: Any, gradient: bool) -> float:
    """One minimisation as general-purpose practice does it; the chi-square reached."""
    from iminuit import Minuit

    free = [i for i in range(problem.n_parameters) if i not in fixed]
    theta = start.copy()
    for i, value in fixed.items():
        theta[i] = value
    scales = np.array([problem.parameters[i].scale for i in free])
    centre = theta[free].copy()

    def point(x: np.ndarray) -> np.ndarray:
        full = theta.copy()
        full[free] = centre + x * scales
        return full[None]

    engine = Minuit(
        lambda x: float(problem.chi2(point(x), data)[0]),
        np.zeros(len(free)),
        grad=(lambda x: problem.linearise(point(x), data).gradient[0][free] * scales) if gradient else None,
    )
    engine.errordef = Minuit.LEAST_SQUARES
    engine.strategy = 0 if gradient else 1
    engine.migrad()
    return float(engine.fval)


def loop_time(count: int, job: Callable[[int], float]) -> tuple[float, list[float]]:
    start = time.process_time()
    values = [job(i) for i in range(count)]
    return (time.process_time() - start) / count, values


def profiles(problem: Problem, best: np.ndarray, sample: int) -> dict[str, float]:
    """(a) a 100 x 100 profile of (rho-bar, eta-bar) against loops of MIGRAD over its points."""
    names = ["wolfenstein_rhobar", "wolfenstein_etabar"]
    place = [problem.parameter_names.index(name) for name in names]
    grids = [np.linspace(best[i] - 0.04, best[i] + 0.04, 100) for i in place]
    (batch,) = shortest(lambda: profile(problem, names, grids, start=best), repeats=2)
    found = profile(problem, names, grids, start=best)
    rng = np.random.default_rng(1)
    cells = rng.integers(0, 100, size=(sample, 2))

    def held(k: int) -> dict[int, float]:
        return {i: float(g[c]) for i, g, c in zip(place, grids, cells[k], strict=True)}

    plain, values = loop_time(sample, lambda k: migrad(problem, best, held(k), None, False))
    exact, exact_values = loop_time(sample, lambda k: migrad(problem, best, held(k), None, True))
    ours = found.chi2[cells[:, 0], cells[:, 1]]
    lowest = np.minimum(values, exact_values)
    return {
        "profile_seconds": batch,
        "profile_over_migrad": plain * 10_000 / batch,
        "profile_over_migrad_with_gradient": exact * 10_000 / batch,
        "profile_above_migrad_at_most": float(np.max(ours - lowest)),
        "migrad_above_profile_at_most": float(np.max(np.asarray(values) - ours)),
    }


def toys(problem: Problem, best: np.ndarray, sample: int) -> dict[str, float]:
    """(b) 2,000 refitted pseudo-experiments against the same two loops."""
    data = problem.pseudo_data(best, 2000, rng=7)
    starts = np.tile(best, (len(data), 1))
    (batch,) = shortest(lambda: minimise_batch(problem, starts, data=data), repeats=2)
    plain, _ = loop_time(sample, lambda k: migrad(problem, best, {}, data[k : k + 1], False))
    exact, _ = loop_time(sample, lambda k: migrad(problem, best, {}, data[k : k + 1], True))
    return {
        "toys_seconds": batch,
        "toys_over_migrad": plain * len(data) / batch,
        "toys_over_migrad_with_gradient": exact * len(data) / batch,
    }


def start_up() -> dict[str, float]:
    """(e) wall-clock seconds of whole processes, shortest of three."""
    script = Path(sys.executable).with_name("weakmix")

    def seconds(*words: str) -> float:
        best = np.inf
        for _ in range(3):
            start = time.perf_counter()
            subprocess.run([str(script), *words], check=True, capture_output=True)
            best = min(best, time.perf_counter() - start)
        return float(best)

    return {
        "help_seconds": seconds("--help"),
        "fit_averages_2026_json_seconds": seconds("fit", "averages-2026", "--json", "-"),
    }


def peak_memory(which: str) -> dict[str, float]:
    """(f) peak memory of a process that computes one 100 x 100 profile, in GiB."""
    code = (
        "import numpy as np, pathlib, resource\n"
        "from fitcore import Problem\n"
        "from fitcore.minimise.profile import profile\n"
        f"problem = Problem.load({which!r})\n"
        "best = problem.minima()[0].theta\n"
        "names = ['wolfenstein_rhobar', 'wolfenstein_etabar']\n"
        "grids = [best[problem.parameter_names.index(n)] + np.linspace(-0.04, 0.04, 100) for n in names]\n"
        "profile(problem, names, grids, start=best)\n"
        # A child's ru_maxrss starts from its parent's on Linux; VmHWM is its own.
        "status = pathlib.Path('/proc/self/status')\n"
        "lines = status.read_text().splitlines() if status.exists() else []\n"
        "own = [line.split()[1] for line in lines if line.startswith('VmHWM')]\n"
        "print(own[0] if own else resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    unit = 1.0 if sys.platform == "darwin" else 1024.0
    return {"profile_peak_memory_gib": float(done.stdout) * unit / 2**30}


def run(which: str, *, quick: bool = False) -> dict[str, Any]:
    """All measurements on one set."""
    problem = Problem.load(which)
    best = find_minima(problem)[0].theta
    sample = 8 if quick else 30
    result: dict[str, Any] = {"set": which, "parameters": problem.n_parameters, "entries": problem.n_entries}
    result |= evaluation(problem)
    result |= profiles(problem, best, sample)
    result |= toys(problem, best, max(4, sample // 3))
    result |= sampling.measure(problem, quick=quick)
    result |= start_up()
    result |= peak_memory(which)
    result["own_peak_memory_gib"] = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024.0 / 2**30
    return result


def broken(result: dict[str, Any]) -> list[str]:
    """Promises that a run did not keep."""
    return [
        f"{name} = {result[name]:.3g}, promised [{low:g}, {high:g}]"
        for name, (low, high) in PROMISES.items()
        if not low <= result[name] <= high
    ]


def main() -> int:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--set", default="world-2026", help="bundled set or inputs file")
    parser.add_argument("--quick", action="store_true", help="fewer MIGRAD samples")
    parser.add_argument("--json", type=Path, help="write the numbers here")
    options = parser.parse_args()
    result = run(options.set, quick=options.quick)
    for name, value in result.items():
        print(f"{name:36} {value:.4g}" if isinstance(value, float) else f"{name:36} {value}")
    if options.json:
        options.json.write_text(json.dumps(result, indent=2) + "\n", encoding="utf-8")
    faults = broken(result)
    print("\n".join(f"PROMISE BROKEN: {fault}" for fault in faults) or "every promise kept")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main())
