"""Priors are normalised inside the bounds: evidences are ratios of them."""

import math
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, stats

from fitcore.priors import log_prior


def parameter(lower, upper, prior=None):
    return SimpleNamespace(
        lower=lower, upper=upper, period=None, prior=None if prior is None else SimpleNamespace(**prior)
    )


def density(one, x):
    return np.exp(log_prior([one], np.atleast_2d(np.asarray(x, dtype=float))))


NORMAL = {"kind": "normal", "mean": 2.0, "error": 0.5}


@pytest.mark.parametrize(
    "one",
    [
        parameter(1.0, 4.0),
        parameter(0.0, 9.0, {"kind": "uniform", "lower": 1.0, "upper": 5.0}),
        parameter(2.0, 9.0, {"kind": "log-uniform", "lower": 1.0, "upper": 5.0}),
        parameter(-180.0, 180.0, {"kind": "isotropic-angle"}),
        parameter(-math.inf, math.inf, NORMAL),
        parameter(0.0, math.inf, NORMAL),
        parameter(-math.inf, 1.0, NORMAL),
        parameter(1.9, 2.3, NORMAL),
        parameter(4.0, 5.0, NORMAL),
    ],
)
def test_integrates_to_one_inside_the_bounds(one):
    low, high = max(one.lower, -200.0), min(one.upper, 200.0)
    inside = [x for x in (1.0, 2.0, 3.0, 5.0) if low < x < high]
    total, _ = integrate.quad(lambda x: density(one, x)[0], low, high, points=inside or None, limit=200)
    assert total == pytest.approx(1.0, rel=1e-7)
    outside = [x for x in (one.lower - 0.1, one.upper + 0.1) if np.isfinite(x)]
    assert (density(one, outside) == 0.0).all()


@given(mean=st.floats(-50, 50), error=st.floats(0.1, 10), low=st.floats(-60, 60), size=st.floats(0.01, 40))
def test_cut_normal_is_that_of_scipy(mean, error, low, size):
    """Against ``scipy.stats.truncnorm``, also far out in either tail, where a plain difference of two
    probabilities would be zero."""
    one = parameter(low, low + size, {"kind": "normal", "mean": mean, "error": error})
    x = low + size * np.array([0.1, 0.5, 0.9])
    expected = stats.truncnorm.logpdf(x, (low - mean) / error, (low + size - mean) / error, mean, error)
    # Both take differences of logarithms as large as the squared distance from the mean.
    scale = 1.0 + np.max(np.abs(x - mean) / error) ** 2
    np.testing.assert_allclose(log_prior([one], x[None]), expected, atol=1e-9 * scale)


def test_far_tail_against_the_exponential_limit():
    """Beyond z = 30 the normal falls like exp(-z (x - a)); first correction 1/z^2."""
    one = parameter(30.0, math.inf, {"kind": "normal", "mean": 0.0, "error": 1.0})
    assert density(one, 30.0)[0] == pytest.approx(30.0 * (1.0 + 1.0 / 30.0**2), rel=1e-5)
