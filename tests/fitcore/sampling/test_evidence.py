import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.evidence import _estimate, evidence, pareto_k
from fitcore.sampling.posterior import sample
from observables.errors import InputError


def boxed_gaussian(problems, n, half=20.0):
    """Normalised Gaussian likelihood up to its peak, normalised uniform prior: closed form below."""
    covariance = problems.correlated(n, 0.6)
    precision = np.linalg.inv(covariance)

    def log_density(theta):
        return -0.5 * np.einsum("ij,ij->i", theta @ precision, theta) - n * np.log(2 * half)

    problem = problems.AnalyticProblem(log_density, n, lower=np.full(n, -half), upper=np.full(n, half))
    expected = 0.5 * np.linalg.slogdet(2 * np.pi * covariance)[1] - n * np.log(2 * half)
    return problem, covariance, expected


@pytest.mark.stat
@pytest.mark.parametrize("n", [2, 10, pytest.param(25, marks=pytest.mark.slow)])
def test_gaussian_in_closed_form(problems, n):
    problem, covariance, expected = boxed_gaussian(problems, n)
    result = sample(problem, covariance=covariance, effective=2000, rng=1, check_widths=False)
    found = evidence(problem, result.chain, rng=2)
    assert found.valid
    assert found.error < 0.02
    assert found.effective_fraction > 0.3
    assert abs(found.log_evidence - expected) < 5 * found.error


@pytest.mark.stat
def test_wrong_closed_form_fails(problems):
    problem, covariance, expected = boxed_gaussian(problems, 4)
    result = sample(problem, covariance=covariance, effective=2000, rng=1, check_widths=False)
    found = evidence(problem, result.chain, rng=2)
    assert abs(found.log_evidence - (expected + np.log(2.0))) > 5 * found.error


@pytest.mark.stat
def test_two_modes(problems):
    problem = problems.two_modes(3, lower=np.full(3, -30.0), upper=np.full(3, 30.0))
    other = np.array([12.0, 0.0, 0.0])
    modes = [(np.zeros(3), np.eye(3), 0.3), (other, 0.25 * np.eye(3), 0.7)]
    result = sample(problem, modes=modes, effective=2000, rng=3, check_widths=False)
    found = evidence(problem, result.chain, rng=4, density=result.density)
    # The two components are normalised up to (2 pi)^(3/2).
    assert found.valid
    assert abs(found.log_evidence - 1.5 * np.log(2 * np.pi)) < 5 * found.error


@pytest.mark.stat
def test_parameter_that_fills_its_range(problems):
    problem = problems.AnalyticProblem(
        lambda t: -0.5 * t[:, 0] ** 2 + 0.3 * t[:, 1], 2, lower=[-10.0, -1.0], upper=[10.0, 1.0]
    )
    result = sample(problem, effective=2000, rng=5, check_widths=False)
    found = evidence(problem, result.chain, rng=6)
    expected = 0.5 * np.log(2 * np.pi) + np.log(2 * np.sinh(0.3) / 0.3)
    assert abs(found.log_evidence - expected) < 5 * found.error


def test_improper_priors_are_refused(problems):
    problem = problems.gaussian(np.eye(2), lower=[0, -np.inf], upper=[1, 1])
    result = sample(problem, until=50, rng=1, check_widths=False)
    with pytest.raises(InputError, match="p1: no proper prior") as caught:
        evidence(problem, result.chain)
    assert "p0" not in str(caught.value)


def test_heavy_weights_are_not_quoted():
    found = _estimate(np.random.default_rng(1).standard_cauchy(20_000).clip(-50, 50))
    assert not found.valid
    assert found.log_evidence is None
    assert found.pareto_k > 0.7
    assert "not quoted" in found.message


def test_impossible_everywhere():
    assert not _estimate(np.full(100, -np.inf)).valid


@pytest.mark.parametrize("shape", [0.1, 0.4, 0.8])
def test_tail_index_agrees_with_arviz(shape):
    arviz = pytest.importorskip("arviz")
    u = np.random.default_rng(2).uniform(size=20_000)
    log_weights = -shape * np.log(u)
    _, expected = arviz.psislw(log_weights.copy())
    assert pareto_k(log_weights) == pytest.approx(float(expected), abs=0.01)
    # Weights u^-k have the tail index k.
    assert pareto_k(log_weights) == pytest.approx(shape, abs=0.15)


def test_equal_weights_have_no_tail():
    assert pareto_k(np.zeros(1000)) == -np.inf
    assert pareto_k(np.zeros(10)) == np.inf
