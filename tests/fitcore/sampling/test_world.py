"""The sampler on the published-inputs sets: against the fit, published results, and emcee used the ordinary way."""

import time

import numpy as np
import pytest

emcee = pytest.importorskip("emcee")

from fitcore import Problem  # noqa: E402
from fitcore.sampling.diagnostics import effective_sample_size  # noqa: E402
from fitcore.sampling.from_fit import modes_of_fit  # noqa: E402
from fitcore.sampling.posterior import sample  # noqa: E402
from fitcore.sampling.summary import summarise  # noqa: E402

# PDG 2026, review 12 "CKM Quark-Mixing Matrix" (A. Ceccucci, Z. Ligeti, Y. Sakai, revised March 2026),
# section 12.4, the Bayesian column.
PUBLISHED = {
    "wolfenstein_lambda": (0.22519, 0.00068),
    "wolfenstein_A": (0.820, 0.011),
    "wolfenstein_rhobar": (0.1561, 0.0088),
    "wolfenstein_etabar": (0.3587, 0.0069),
}
WOLFENSTEIN = tuple(PUBLISHED)

# An independent calculation of the same inputs, done before this package existed, never published: posterior
# means and standard deviations. Masses and constants differ a little: 0.08 of the width is asked, as for fits.
REFERENCE = {
    "wolfenstein_lambda": (0.22518, 0.00068),
    "wolfenstein_A": (0.8336, 0.0104),
    "wolfenstein_rhobar": (0.1590, 0.0092),
    "wolfenstein_etabar": (0.3543, 0.0070),
    "jarlskog": (3.205e-5, 0.070e-5),
    "magnitude_V_ub": (3.792e-3, 0.065e-3),
    "magnitude_V_cb": (42.27e-3, 0.45e-3),
    "magnitude_V_td": (8.689e-3, 0.109e-3),
}


@pytest.fixture(scope="module")
def averages():
    problem = Problem.load("averages-2026")
    fit = problem.fit()
    return problem, fit, sample(problem, modes=modes_of_fit(problem, fit), effective=20_000, rng=1)


def test_sampler_is_satisfied(averages):
    _, _, result = averages
    assert result.valid, result.diagnostics.advice
    assert result.diagnostics.autocorrelation_time.max() < 10
    assert result.diagnostics.width_check is not None


def test_posterior_is_near_the_profile(averages):
    """Nearly linear problem: means within 0.1 and widths within 5 % of the fit's."""
    _, fit, result = averages
    summary = summarise(result.chain, names=WOLFENSTEIN)
    for name in WOLFENSTEIN:
        low, high = fit.parameters[name].interval_68
        half = 0.5 * (high - low)
        assert summary[name].mean == pytest.approx(fit.parameters[name].value, abs=0.1 * half)
        assert summary[name].error == pytest.approx(half, rel=0.05)


@pytest.mark.stat
def test_posterior_is_that_of_an_independent_calculation(averages):
    problem, _, result = averages
    values = problem.values(result.samples(), tuple(REFERENCE))
    for name, (mean, width) in REFERENCE.items():
        monte_carlo = 5 * width / np.sqrt(np.min(result.diagnostics.effective_sample_size))
        assert values[name].mean() == pytest.approx(mean, abs=0.08 * width + monte_carlo), name
        assert values[name].std() == pytest.approx(width, rel=0.05), name


@pytest.mark.stat
def test_published_bayesian_fit(averages):
    """The published A rests on lower B-mixing inputs: 1.5 of its uncertainty are asked there, 0.8 elsewhere."""
    summary = summarise(averages[2].chain, names=WOLFENSTEIN)
    for name, (value, error) in PUBLISHED.items():
        share = 1.5 if name == "wolfenstein_A" else 0.8
        assert abs(summary[name].mean - value) < share * error, name


@pytest.mark.stat
def test_published_bayesian_fit_with_b_mixing_of_three_flavours(tmp_path):
    path = tmp_path / "three-flavours.toml"
    path.write_text(
        'title = "review-level set, B mixing with 2+1 flavours"\nrevision = 1\n'
        'include = ["averages-2026", "alternative-B-mixing"]\n'
        'drop = ["mixing-matrix-element-Bs", "mixing-matrix-element-ratio"]\n'
    )
    problem = Problem.load(path)
    result = sample(problem, modes=modes_of_fit(problem, problem.fit()), effective=5000, rng=2)
    assert result.valid, result.diagnostics.advice
    summary = summarise(result.chain, names=WOLFENSTEIN)
    for name, (value, error) in PUBLISHED.items():
        assert abs(summary[name].mean - value) < 0.7 * error, name


@pytest.mark.stat
def test_flat_theory_errors_mix_well():
    """Ranges that a precise measurement ties to other parameters: a valley across a box."""
    problem = Problem.load("averages-2026", theory_errors="flat")
    result = sample(problem, modes=modes_of_fit(problem, problem.fit()), effective=5000, rng=1)
    assert result.valid, result.diagnostics.advice
    assert result.diagnostics.autocorrelation_time.max() < 15
    assert result.diagnostics.acceptance > 0.3


@pytest.mark.slow
def test_many_times_faster_than_emcee_the_ordinary_way():
    """Effective samples per second, slowest parameter, both in this run and from the same start.

    The slow side gets a shortened run: its autocorrelation time is then underestimated and its rate
    overestimated, so the ratio is a lower limit. Estimator on both sides: effective_sample_size with
    walkers as chains, chain time only for both sides.
    """
    problem = Problem.load("world-2026")
    modes = modes_of_fit(problem, problem.fit())
    result = sample(problem, modes=modes, effective=20_000, rng=1, check_widths=False)
    fast = float(np.min(result.diagnostics.effective_sample_size) / result.seconds)
    with_pilot = result.effective_per_second

    n = problem.n_parameters
    walkers = 2 * n + 2
    start = result.chain.get_chain()[0, :walkers]

    def scalar(theta):
        return float(problem.log_posterior(theta))

    sampler = emcee.EnsembleSampler(walkers, n, scalar)
    begin = time.perf_counter()
    sampler.run_mcmc(start, 400)
    seconds = time.perf_counter() - begin
    chain = sampler.get_chain()
    slow = min(effective_sample_size(np.ascontiguousarray(chain[:, :, k].T)) for k in range(n)) / seconds
    print(
        f"\n{n} parameters: {fast:.0f} effective samples/s ({with_pilot:.0f} with the pilot run), plain {slow:.2f}/s"
    )
    print(f"ratio {fast / slow:.0f} ({with_pilot / slow:.0f} with the pilot run)")
    assert fast / slow > 300
    assert with_pilot / slow > 300


@pytest.mark.slow
def test_chain_file_costs_at_most_ten_percent(tmp_path):
    """The same steps (same seed) into a file and into memory, interleaved, the shortest of three each.

    A first run of each is thrown away: memory that a process uses for the first time costs extra on either side.
    """
    problem = Problem.load("world-2026")
    modes = modes_of_fit(problem, problem.fit())
    seconds: dict[str, list[float]] = {"memory": [], "file": []}
    for repeat in range(4):
        for kind, times in seconds.items():
            path = tmp_path / f"{repeat}.h5" if kind == "file" else None
            result = sample(problem, modes=modes, until=1000, rng=1, chain_path=path, check_widths=False)
            times.append(result.seconds)
    share = min(seconds["file"][1:]) / min(seconds["memory"][1:]) - 1.0
    print(f"\na chain file costs {share:+.1%} over memory")
    assert share < 0.10
