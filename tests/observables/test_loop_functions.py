from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from observables import loop_functions as lf

ONE_ARGUMENT = [name for name in lf.__all__ if name != "box_function_mixed"]
ratios = st.floats(1e-9, 1e4)


@given(ratios, ratios)
def test_mixed_box_function_is_symmetric(x, y):
    assert lf.box_function_mixed(x, y) == pytest.approx(lf.box_function_mixed(y, x), rel=1e-12)


@given(ratios)
def test_gauge_independent_combinations(x):
    size = 1e-13 * (1 + x + abs(np.log(x)))
    assert lf.neutrino_function(x) == pytest.approx(
        lf.z_penguin_function(x) - 4 * lf.leptonic_box_function(x), abs=size
    )
    assert lf.charged_lepton_function(x) == pytest.approx(
        lf.z_penguin_function(x) - lf.leptonic_box_function(x), abs=size
    )
    assert lf.z_photon_function(x) == pytest.approx(
        lf.z_penguin_function(x) + lf.photon_penguin_function(x) / 4, abs=size
    )


@given(ratios, st.floats(-1e-7, 1e-7))
def test_continuous_in_both_arguments(x, nudge):
    y = x * (1 + nudge)
    assert lf.box_function_mixed(x, y) == pytest.approx(lf.box_function(x), rel=2e-7)


@pytest.mark.parametrize("name", ONE_ARGUMENT)
def test_batch_equals_single_points(name):
    function = getattr(lf, name)
    x = np.concatenate([np.geomspace(1e-6, 50, 57), [1.0, 1 + 1e-9, 0.5, 1.5]])
    batch = function(x)
    assert batch.shape == x.shape
    assert function(x.reshape(61, 1)).shape == (61, 1)
    np.testing.assert_array_equal(batch, [function(np.array([value]))[0] for value in x])


def test_mixed_batch_equals_single_points():
    values = np.array([1e-9, 2.5e-4, 0.3, 0.5, 0.9, 1.0, 1.0 + 1e-10, 1.6, 4.1, 4.2, 30.0])
    x, y = (grid.ravel() for grid in np.meshgrid(values, values))
    batch = lf.box_function_mixed(x, y)
    single = [lf.box_function_mixed(np.array([a]), np.array([b]))[0] for a, b in zip(x, y, strict=True)]
    np.testing.assert_array_equal(batch, single)
    assert lf.box_function_mixed(values[:, None], values).shape == (11, 11)


def test_ends_of_the_domain():
    x = np.array([0.0, -0.5])
    for name in ONE_ARGUMENT:
        at_zero, below = getattr(lf, name)(x)
        assert np.isnan(below), name
        if name in ("photon_penguin_function", "gluon_penguin_function", "z_photon_function"):
            assert at_zero == np.inf
        else:
            assert at_zero == 0.0, name
    assert lf.box_function_mixed(0.0, 4.0) == 0.0
    assert lf.box_function_mixed(0.0, 0.0) == 0.0
    assert np.isnan(lf.box_function_mixed(-1.0, 4.0))


def test_poles_cancel_exactly():
    # The numerators [p + q ln x] must vanish like (x - 1)^n; a mistyped coefficient would leave a pole.
    for quotient in (
        lf._S0,
        lf._B0,
        lf._C0,
        lf._X0,
        lf._Y0,
        lf._D0,
        lf._E0,
        lf._D0_PRIME,
        lf._E0_PRIME,
        lf._G,
    ):
        u = 1e-5
        x = 1 + u
        q = sum(float(c) * x**k for k, c in enumerate(quotient._q))
        p = sum(float(c) * x**k for k, c in enumerate(quotient._p))
        assert abs(p + q * np.log1p(u)) < 1e-14 + 10 * u**quotient.power


def test_light_quark_limits():
    x = 2.5e-4
    # the limits up to higher powers of the light mass;
    # G. Buchalla, A. Buras, M. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996)
    y = 4.1
    assert lf.box_function(x) == pytest.approx(x, rel=3 * x)
    expected = x * (np.log(y / x) - 3 * y / (4 * (1 - y)) - 3 * y**2 * np.log(y) / (4 * (1 - y) ** 2))
    assert lf.box_function_mixed(x, y) == pytest.approx(expected, rel=10 * x)
