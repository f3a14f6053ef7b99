"""Scales and the mixture that proposes in them."""

import numpy as np
import pytest
from scipy import stats

from fitcore.sampling.mixture import StudentMixture
from fitcore.sampling.scales import Scales

KINDS = np.array([2, 0, 1, 2])
LOWER, UPPER = np.array([-1.0, -np.inf, 0.0, 5.0]), np.array([3.0, np.inf, np.inf, 6.0])
SHEAR = np.array([[0, 2.0, -1.0, 0], [0, 0.5, 0.3, 0], [0, -1.0, 0.2, 0], [0, 3.0, 0.1, 0]])


@pytest.fixture(params=[np.zeros((0, 0)), SHEAR], ids=["plain", "sheared"])
def scales(request):
    return Scales(KINDS, LOWER, UPPER, request.param)


def test_scaling_there_and_back(scales):
    y = np.random.default_rng(1).standard_normal((50, 4))
    theta = scales.unscaled(y)
    assert (theta[:, [0, 3]] > LOWER[[0, 3]]).all()
    np.testing.assert_allclose(scales.scaled(theta)[0], y, atol=1e-9)


def test_jacobian_is_that_of_finite_differences(scales):
    for theta in scales.unscaled(np.random.default_rng(2).standard_normal((5, 4))):
        steps = 1e-6 * np.eye(4)
        slopes = (scales.scaled(theta + steps)[0] - scales.scaled(theta - steps)[0]) / 2e-6
        log_determinant = np.linalg.slogdet(slopes)[1]
        assert scales.scaled(theta[None])[1][0] == pytest.approx(log_determinant, abs=1e-5)


def test_density_integrates_to_one():
    scales = Scales(
        np.array([2, 0]), np.array([0.0, -np.inf]), np.array([1.0, np.inf]), np.array([[0, 3.0], [0, 2.0]])
    )
    mixture = StudentMixture([0.4, 0.6], [[0, 0], [0.5, 2]], [np.eye(2), 0.5 * np.eye(2)], 8.0, scales)
    # At the edges of the range the density rises without bound: integrate over the probit of x.
    z, y = np.linspace(-7.5, 7.5, 601), np.linspace(-25, 25, 2001)
    points = np.stack(np.meshgrid(stats.norm.cdf(z), y, indexing="ij"), axis=-1).reshape(-1, 2)
    density = np.exp(mixture.log_density(points)).reshape(len(z), len(y))
    total = (density.sum(axis=1) * stats.norm.pdf(z)).sum() * (z[1] - z[0]) * (y[1] - y[0])
    assert total == pytest.approx(1.0, abs=1e-3)


def test_survives_storage():
    scales = Scales(KINDS, LOWER, UPPER, SHEAR)
    mixture = StudentMixture([1.0], np.zeros(4), np.eye(4)[None], 5.0, scales)
    theta = mixture.draw(20, np.random.default_rng(3))
    arrays = mixture.arrays()
    again = StudentMixture.from_arrays(arrays)
    np.testing.assert_array_equal(again.log_density(theta), mixture.log_density(theta))
    # Files written before there was a shear hold none.
    del arrays["shear"]
    assert not StudentMixture.from_arrays(arrays).scales.shear.size


@pytest.mark.stat
def test_draws_that_follow_a_range_are_imitated():
    """x1 = 4 u + u^2 + 0.01 noise with u uniform: hopeless for an ellipse, exact for the sheared one."""
    rng = np.random.default_rng(4)
    u = rng.random(20_000)
    draws = np.stack([u, 4.0 * u + u**2 + 0.01 * rng.standard_normal(len(u))], axis=1)
    lower, upper = np.array([0.0, -np.inf]), np.array([1.0, np.inf])
    fitted = StudentMixture.from_draws(draws, np.zeros(len(u), dtype=int), lower, upper, degrees=100.0)
    np.testing.assert_allclose(np.sqrt(fitted.covariances[0, 1, 1]), 0.01, rtol=0.03)
    made = fitted.draw(20_000, rng)
    residual = made[:, 1] - 4.0 * made[:, 0] - made[:, 0] ** 2
    assert residual.std() == pytest.approx(0.01, rel=0.05)
    assert made[:, 0].mean() == pytest.approx(0.5, abs=0.01)


def test_modes_start_on_the_valley():
    """The fit's covariance says how the others follow a range, wherever in the range the fit ended."""
    slope, width = 3.0, 0.01
    covariance = np.array([[4.0, 4.0 * slope], [4.0 * slope, 4.0 * slope**2 + width**2]])
    lower, upper = np.array([-1.0, -np.inf]), np.array([1.0, np.inf])
    point = np.array([0.9, 5.0])
    mixture = StudentMixture.from_modes([(point, covariance, 1.0)], lower, upper, np.ones(2), degrees=100.0)
    made = mixture.draw(5000, np.random.default_rng(5))
    residual = made[:, 1] - 5.0 - slope * (made[:, 0] - 0.9)
    assert residual.std() == pytest.approx(width, rel=0.1)
    assert abs(residual.mean()) < 0.1 * width
    assert made[:, 0].std() == pytest.approx(1.0 / np.sqrt(3.0), rel=0.05)
