"""Simulation-based calibration: ranks of the truth among posterior draws are uniform.

S. Talts, M. Betancourt, D. Simpson, A. Vehtari, A. Gelman, arXiv:1804.06788; simultaneous band of the
empirical distribution by simulation, T. Saeilynoja, P.-C. Buerkner, A. Vehtari, Statistics and Computing
32, 32 (2022).
"""

import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.posterior import sample

DRAWS = 127


def ranks(problems, replications, bias=1.0):
    """Ranks (replications, 3) of the true parameters; two measured with a product, one boxed in a range."""
    rng = np.random.default_rng(17)
    found = np.empty((replications, 3))
    lower, upper = np.array([-10.0, -10.0, -1.0]), np.array([10.0, 10.0, 1.0])
    errors = np.array([0.5, 0.3, 0.7])

    def predicted(theta):
        return np.stack(
            [theta[:, 0] + theta[:, 2], theta[:, 0] * theta[:, 1] + theta[:, 1], theta[:, 1]], axis=1
        )

    for i in range(replications):
        truth = np.array([rng.normal(), rng.normal(), rng.uniform(-1, 1)])
        data = predicted(truth[None])[0] + errors * rng.normal(size=3)

        def log_density(theta, data=data):
            pull = (predicted(theta) - data) / (bias * errors)
            return -0.5 * (pull**2).sum(axis=1) - 0.5 * (theta[:, :2] ** 2).sum(axis=1)

        problem = problems.AnalyticProblem(log_density, 3, lower=lower, upper=upper)
        result = sample(problem, effective=1500, walkers=32, ensembles=2, rng=rng, check_widths=False)
        samples = result.samples()
        picked = samples[np.linspace(0, len(samples) - 1, DRAWS).astype(int)]
        found[i] = (picked < truth).sum(axis=0)
    return found


def band(replications, rng, level=0.999, simulations=4000):
    """Largest distance of the empirical distribution from the uniform that is exceeded 1 - level of the time."""
    uniform = rng.integers(0, DRAWS + 1, size=(simulations, replications))
    return float(np.quantile([distance(row) for row in uniform], level))


def distance(values):
    steps = np.arange(DRAWS + 1)
    empirical = np.searchsorted(np.sort(values), steps, side="right") / len(values)
    return float(np.abs(empirical - (steps + 1) / (DRAWS + 1)).max())


@pytest.mark.slow
@pytest.mark.stat
def test_ranks_are_uniform(problems):
    found = ranks(problems, 200)
    limit = band(200, np.random.default_rng(1))
    assert max(distance(found[:, k]) for k in range(3)) < limit


@pytest.mark.slow
@pytest.mark.stat
def test_errors_taken_too_small_are_seen(problems):
    found = ranks(problems, 200, bias=0.5)
    limit = band(200, np.random.default_rng(1))
    assert max(distance(found[:, k]) for k in range(3)) > limit
