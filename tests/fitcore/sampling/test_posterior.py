"""Sampled posteriors against exact ones, within the Monte Carlo error they state themselves."""

import json

import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.diagnostics import effective_sample_size
from fitcore.sampling.posterior import sample
from observables.errors import ConvergenceError, InputError, StoreError

SIGMAS = 5.0


def distance(result, function, expected):
    """(mean of function(samples) - expected) in units of its Monte Carlo error."""
    values = function(result.chain.get_chain())
    size = effective_sample_size(np.ascontiguousarray(values.T))
    return (values.mean() - expected) / (values.std() / np.sqrt(size))


def assert_moments(result, means, variances):
    for k, (mean, variance) in enumerate(zip(means, variances, strict=True)):
        assert abs(distance(result, lambda c, k=k: c[..., k], mean)) < SIGMAS, (k, "mean")
        assert abs(distance(result, lambda c, k=k, m=mean: (c[..., k] - m) ** 2, variance)) < SIGMAS, (
            k,
            "variance",
        )


@pytest.mark.stat
@pytest.mark.parametrize("n", [2, 5, 14, pytest.param(30, marks=pytest.mark.slow)])
def test_gaussian(problems, n):
    rng = np.random.default_rng(n)
    a = rng.normal(size=(n, n))
    covariance = a @ a.T + 0.1 * np.eye(n)
    mean = rng.normal(size=n)
    problem = problems.gaussian(covariance, mean)
    result = sample(problem, modes=[(mean, covariance, 1.0)], effective=4000, rng=n)
    assert result.valid, result.message
    assert result.flags == ()
    assert_moments(result, mean, np.diagonal(covariance))


@pytest.mark.stat
def test_correlation_of_99_percent_and_no_covariance_given(problems):
    covariance = problems.correlated(6)
    result = sample(problems.gaussian(covariance), effective=3000, rng=1)
    assert result.valid, result.message
    assert_moments(result, np.zeros(6), np.ones(6))
    assert abs(distance(result, lambda c: c[..., 0] * c[..., 5], 0.99)) < SIGMAS


@pytest.mark.stat
def test_banana(problems):
    result = sample(problems.banana(), covariance=np.eye(2), effective=3000, rng=2)
    assert result.valid, result.message
    assert_moments(result, [0.0, 0.0], [1.0, 0.75])


@pytest.mark.stat
def test_two_separate_modes_with_their_weights(problems):
    n = 4
    problem = problems.two_modes(n)
    other = np.zeros(n)
    other[0] = 12.0
    # Start weights are wrong on purpose: the chain has to find 0.3 and 0.7 itself.
    modes = [(np.zeros(n), np.eye(n), 0.5), (other, 0.25 * np.eye(n), 0.5)]
    result = sample(problem, modes=modes, effective=3000, rng=3)
    assert result.valid, result.message
    assert result.start_counts == (96, 96)
    assert abs(distance(result, lambda c: (c[..., 0] < 6.0).astype(float), 0.3)) < SIGMAS
    assert sorted(result.diagnostics.walkers_per_mode) == pytest.approx([0.3, 0.7], abs=0.05)


@pytest.mark.stat
def test_flat_range(problems):
    """Marginals by quadrature: uniform times Gaussian, cut at the edges of the range."""
    half = 1.5
    result = sample(problems.flat_range(half), covariance=np.diag([1.0, np.nan]), effective=4000, rng=4)
    assert result.valid, result.message
    x = np.linspace(-6, 6, 2001)[:, None]
    f = np.linspace(-half, half, 1001)[None, :]
    density = np.exp(-0.5 * x**2 - 0.5 * ((x + f - 0.4) / 0.1) ** 2)
    weight_x, weight_f = density.sum(axis=1) / density.sum(), density.sum(axis=0) / density.sum()
    means = [float(weight_x @ x[:, 0]), float(weight_f @ f[0])]
    variances = [float(weight_x @ (x[:, 0] - means[0]) ** 2), float(weight_f @ (f[0] - means[1]) ** 2)]
    assert_moments(result, means, variances)
    assert np.abs(result.samples("p1")).max() <= half


@pytest.mark.stat
def test_uniform_parameter_is_uniform(problems):
    problem = problems.AnalyticProblem(lambda t: -0.5 * t[:, 0] ** 2, 2, lower=[-9.0, -1.0], upper=[9.0, 3.0])
    result = sample(problem, effective=4000, rng=5)
    assert_moments(result, [0.0, 1.0], [1.0, 16.0 / 12.0])
    for edge in (0.1, 0.5, 0.9):
        assert abs(distance(result, lambda c, e=edge: (c[..., 1] < -1.0 + 4.0 * e) * 1.0, edge)) < SIGMAS


@pytest.mark.stat
def test_wrong_density_fails(problems):
    """The same criterion, the wrong truth: widths 3 % off must be seen."""
    result = sample(problems.gaussian(1.03**2 * np.eye(3)), effective=8000, rng=6)
    assert result.valid
    with pytest.raises(AssertionError, match="variance"):
        assert_moments(result, np.zeros(3), np.ones(3))


def test_same_seed_same_chain_in_memory_and_file(problems, tmp_path):
    problem = problems.gaussian(problems.correlated(3, 0.5))
    options = {"until": 100, "walkers": 16, "ensembles": 2, "check_widths": False}
    memory = sample(problem, rng=7, **options)
    file = sample(problem, rng=7, chain_path=tmp_path / "c.h5", block_steps=16, **options)
    other = sample(problem, rng=8, **options)
    np.testing.assert_array_equal(memory.chain.get_chain(), file.chain.get_chain())
    assert not np.array_equal(memory.chain.get_chain(), other.chain.get_chain())
    assert memory.seed == json.dumps({"entropy": 7, "spawn_key": []})


def test_resuming_in_pieces_is_bit_identical(problems, tmp_path):
    problem = problems.banana()
    options = {"rng": 9, "walkers": 16, "ensembles": 2, "check_widths": False, "block_steps": 16}
    whole = sample(problem, chain_path=tmp_path / "whole.h5", until=90, **options)
    for until in (1, 16, 37, 90, 90):
        pieces = sample(problem, chain_path=tmp_path / "pieces.h5", until=until, **options)
        assert pieces.steps == until
    np.testing.assert_array_equal(whole.chain.get_chain(), pieces.chain.get_chain())
    np.testing.assert_array_equal(whole.chain.random_state[1], pieces.chain.random_state[1])
    np.testing.assert_array_equal(whole.density.means, pieces.density.means)
    # Asking for fewer steps than there are changes nothing.
    assert sample(problem, chain_path=tmp_path / "pieces.h5", until=20, **options).steps == 90


def test_stopping_rule_is_reproducible(problems, tmp_path):
    problem = problems.gaussian(np.eye(2))
    a = sample(problem, effective=2000, rng=1, walkers=16, check_widths=False)
    sample(problem, until=33, rng=1, walkers=16, check_widths=False, chain_path=tmp_path / "c.h5")
    b = sample(problem, effective=2000, rng=1, walkers=16, check_widths=False, chain_path=tmp_path / "c.h5")
    assert a.steps == b.steps
    np.testing.assert_array_equal(a.chain.get_chain(), b.chain.get_chain())
    assert "2000 effective samples" in a.stopped_because


@pytest.mark.parametrize("seed", [1, *(pytest.param(s, marks=pytest.mark.slow) for s in (2, 3))])
def test_stopping_rule_and_diagnosis_are_one(problems, monkeypatch, seed):
    """A run that a short look lets stop near 40 autocorrelation times is looked at as the diagnosis does."""
    from fitcore.sampling import run

    looks = []

    def noted(thinned):
        looks.append(run_mixing(thinned))
        return looks[-1]

    run_mixing = run.mixing
    monkeypatch.setattr(run, "mixing", noted)
    monkeypatch.setattr(run, "_CHECK_VALUES", 1 << 13)
    options = {"walkers": 12, "ensembles": 2, "block_steps": 8, "check_widths": False}
    result = sample(problems.banana(2.0), effective=300, until=8000, rng=seed, **options)
    found = result.diagnostics
    np.testing.assert_array_equal(looks[-1].effective_sample_size, found.effective_sample_size)
    np.testing.assert_array_equal(looks[-1].rhat, found.rhat)
    assert "300 effective samples" in result.stopped_because
    assert found.status == "reliable"
    assert found.steps >= 1.05 * 40 * found.autocorrelation_time.max()
    assert not any("run longer" in line for line in found.advice)


def test_minutes(problems):
    result = sample(problems.gaussian(np.eye(2)), minutes=0.002, rng=1, check_widths=False)
    assert "minutes are over" in result.stopped_because
    assert result.steps > 0


def test_progress_is_reported(problems):
    seen = []
    sample(problems.gaussian(np.eye(2)), effective=500, rng=1, progress=seen.append)
    assert {p.phase for p in seen} == {"pilot", "chain"}
    last = seen[-1]
    assert last.effective >= 500
    assert last.rate > 0
    assert 0 < last.acceptance <= 1
    assert last.seconds_to_go == 0


def test_width_comparison_finds_a_lying_proposal(problems):
    """A chain that is too narrow is caught by the short run without the independence move."""
    from fitcore.sampling.preparation import Target
    from fitcore.sampling.run import Run

    problem = problems.gaussian(np.eye(2))
    result = sample(problem, until=400, rng=1)
    assert result.diagnostics.width_check.ratio == pytest.approx(1.0, abs=0.1)
    run = Run(problem, Target(problem), result.chain, None)
    run.prepare(None, None)
    result.chain.chain *= 0.85
    assert run.compare_widths(lambda: False).suspicious.all()


class TestRefusals:
    def test_arguments(self, problems):
        with pytest.raises(InputError) as caught:
            sample(problems.gaussian(np.eye(2)), until=0, minutes=-1, walkers=7, ensembles=1)
        assert len(caught.value.problems) == 4

    def test_too_few_walkers(self, problems):
        with pytest.raises(InputError, match="span no volume"):
            sample(problems.gaussian(np.eye(12)), walkers=12)

    def test_mode_outside_the_bounds(self, problems):
        problem = problems.gaussian(np.eye(2), lower=[-1, -1], upper=[1, 1])
        with pytest.raises(InputError, match="mode 0: outside the bounds in p1"):
            sample(problem, modes=[([0.0, 2.0], np.eye(2), 1.0)], until=10)

    def test_impossible_mode(self, problems):
        problem = problems.AnalyticProblem(lambda t: np.full(len(t), -np.inf), 2)
        with pytest.raises(InputError, match="posterior vanishes at p0 = 0, p1 = 0"):
            sample(problem, until=10)

    def test_covariance_of_the_wrong_shape(self, problems):
        with pytest.raises(InputError, match=r"must be \(2, 2\), got \(3, 3\)"):
            sample(problems.gaussian(np.eye(2)), covariance=np.eye(3), until=10)

    def test_seed_that_is_none(self, problems):
        with pytest.raises(InputError, match="rng: must be"):
            sample(problems.gaussian(np.eye(2)), rng="soup", until=10)

    def test_resumed_run_keeps_its_settings(self, problems, tmp_path):
        problem, path = problems.gaussian(np.eye(2)), tmp_path / "c.h5"
        sample(problem, chain_path=path, until=10, rng=1, walkers=16, ensembles=2, check_widths=False)
        with pytest.raises(InputError) as caught:
            sample(problem, chain_path=path, until=20, rng=2, walkers=18)
        assert "walkers per ensemble: 16 in the file, 18 asked for" in str(caught.value)
        assert "seed" in str(caught.value)
        # Nothing said about them: the file's own settings hold.
        assert sample(problem, chain_path=path, until=20, check_widths=False).walkers == 32

    def test_other_problem(self, problems, tmp_path):
        path = tmp_path / "c.h5"
        sample(problems.gaussian(np.eye(2)), chain_path=path, until=10, walkers=16, check_widths=False)
        with pytest.raises(StoreError, match="different problem"):
            sample(problems.gaussian(np.eye(2), fingerprint="g"), chain_path=path, until=20)

    def test_nan_is_counted_and_located(self, problems):
        def density(theta):
            return np.where(theta[:, 0] > 2.5, np.nan, -0.5 * (theta**2).sum(axis=1))

        result = sample(problems.AnalyticProblem(density, 2), until=100, rng=1)
        assert "nan" in result.flags
        assert any("taken as impossible" in notice and "p0 = " in notice for notice in result.notices)

    def test_nan_nearly_everywhere_stops_the_run(self, problems):
        def density(theta):
            return np.where(theta[:, 0] > 0.1, np.nan, -0.5 * (theta**2).sum(axis=1))

        with pytest.raises(ConvergenceError, match=r"nan at \d+ of \d+ points, first at p0"):
            sample(problems.AnalyticProblem(density, 2), until=500, rng=1)

    def test_stuck_in_one_of_two_modes_is_not_called_valid(self, problems):
        """Without the second mode, ensembles started in both cannot agree."""
        n = 8
        problem = problems.two_modes(n, distance=60.0)
        result = sample(
            problem, modes=[(np.full(n, 0.0), 400.0 * np.eye(n), 1.0)], until=200, rng=5, walkers=48
        )
        shares = [(result.chain.get_chain()[:, result.chain.ensembles == e, 0] < 30).mean() for e in range(4)]
        assert not result.valid or np.ptp(shares) < 0.1
