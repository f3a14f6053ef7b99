"""Sample a small problem into a chain file: chain_writer.py FILE UNTIL [SECONDS PER EVALUATION [FILE SIZE LIMIT]]."""

import resource
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parent))
sys.path.insert(0, str(Path(__file__).parents[3]))

import analytic_problems as problems

from fitcore.sampling.posterior import sample
from observables.errors import WeakmixError


def write(path, until, pause=0.0, report=None):
    """Write (or go on writing) the chain whose content the tests know; ``report`` is called at every evaluation."""
    problem = problems.gaussian(problems.correlated(5, 0.5))
    plain = problem.log_density

    def slow(theta):
        time.sleep(pause)
        if report is not None:
            report()
        return plain(theta)

    if pause or report is not None:
        problem.log_density = slow
    return sample(
        problem, covariance=problems.correlated(5, 0.5), chain_path=path, until=until, walkers=16, ensembles=2,
        rng=np.random.SeedSequence(11), block_steps=8, check_widths=False,
    )  # fmt: skip


def main():
    path, until = sys.argv[1], int(sys.argv[2])
    pause = float(sys.argv[3]) if len(sys.argv) > 3 else 0.0
    limit = int(sys.argv[4]) if len(sys.argv) > 4 else 0
    if limit:
        resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit))
    try:
        result = write(path, until, pause)
    except WeakmixError as error:
        print(type(error).__name__, error, flush=True)
        sys.exit(2)
    print("steps", result.steps, "interrupted", result.interrupted, flush=True)


if __name__ == "__main__":
    main()
