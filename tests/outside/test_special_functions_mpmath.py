"""Special functions against mpmath: textbook formulas at 30 digits and more, also at degenerate arguments."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from fitcore.minimise.derivatives import seed, tangents_of
from observables import loop_functions, scale_evolution

# The textbook forms lose up to four powers of the distance from x = 1: digits to spare.
WORKING_DIGITS = 120
EPSILON = np.finfo(float).eps


def s0(x):
    return (4 * x - 11 * x**2 + x**3) / (4 * (1 - x) ** 2) - 3 * x**3 * mpmath.log(x) / (2 * (1 - x) ** 3)


def b0(x):
    return (x / (1 - x) + x * mpmath.log(x) / (x - 1) ** 2) / 4


def c0(x):
    return x / 8 * ((x - 6) / (x - 1) + (3 * x + 2) * mpmath.log(x) / (x - 1) ** 2)


def d0(x):
    return (
        -4 * mpmath.log(x) / 9
        + (-19 * x**3 + 25 * x**2) / (36 * (x - 1) ** 3)
        + x**2 * (5 * x**2 - 2 * x - 6) * mpmath.log(x) / (18 * (x - 1) ** 4)
    )


def e0(x):
    return (
        -2 * mpmath.log(x) / 3
        + x**2 * (15 - 16 * x + 4 * x**2) * mpmath.log(x) / (6 * (1 - x) ** 4)
        + x * (18 - 11 * x - x**2) / (12 * (1 - x) ** 3)
    )


def d0_prime(x):
    first = -(8 * x**3 + 5 * x**2 - 7 * x) / (12 * (1 - x) ** 3)
    return first + x**2 * (2 - 3 * x) * mpmath.log(x) / (2 * (1 - x) ** 4)


def e0_prime(x):
    return -x * (x**2 - 5 * x - 2) / (4 * (1 - x) ** 3) + 3 * x**2 * mpmath.log(x) / (2 * (1 - x) ** 4)


def x0(x):
    return x / 8 * ((x + 2) / (x - 1) + (3 * x - 6) * mpmath.log(x) / (x - 1) ** 2)


def y0(x):
    return x / 8 * ((x - 4) / (x - 1) + 3 * x * mpmath.log(x) / (x - 1) ** 2)


def z0(x):
    return c0(x) + d0(x) / 4


def s0_mixed(x, y):
    def f(a):
        return mpmath.mpf(1) / 4 + 3 / (2 * (1 - a)) - 3 / (4 * (1 - a) ** 2)

    brackets = mpmath.log(x) / (x - y) * f(x) + mpmath.log(y) / (y - x) * f(y) - 3 / (4 * (1 - x) * (1 - y))
    return x * y * brackets


# Source of all of them: G. Buchalla, A. Buras, M. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996).
TEXTBOOK = {
    "box_function": s0,
    "leptonic_box_function": b0,
    "z_penguin_function": c0,
    "photon_penguin_function": d0,
    "gluon_penguin_function": e0,
    "magnetic_photon_function": d0_prime,
    "magnetic_gluon_function": e0_prime,
    "neutrino_function": x0,
    "charged_lepton_function": y0,
    "z_photon_function": z0,
}

TINY = 10.0 ** np.arange(-30.0, -3.0, 3.0)
ORDINARY = np.geomspace(1e-3, 1e4, 60)
NEAR_ONE = np.concatenate([1.0 + sign * 10.0 ** np.arange(-15.0, 0.0) for sign in (1, -1)])
REACH = loop_functions.SERIES_REACH
SWITCH = np.array([np.nextafter(1 + side * REACH, target) for side in (1, -1) for target in (0.0, 9.0)])
ARGUMENTS = np.concatenate([TINY, ORDINARY, NEAR_ONE, SWITCH])


def relative_to_scale(value, reference, scale):
    return float(abs(mpmath.mpf(float(value)) - reference) / scale)


@pytest.mark.parametrize("name", TEXTBOOK)
def test_inami_lim_function_equals_textbook_form(name):
    # Near a zero of a function only the absolute error means anything: the slope sets the scale there.
    values = getattr(loop_functions, name)(ARGUMENTS)
    with mpmath.workdps(WORKING_DIGITS):
        for x, value in zip(ARGUMENTS, values, strict=True):
            exact = mpmath.mpf(float(x))
            reference = TEXTBOOK[name](exact)
            slope = mpmath.diff(TEXTBOOK[name], exact, h=exact * mpmath.mpf(10) ** -40)
            assert relative_to_scale(value, reference, abs(reference) + abs(exact * slope)) < 100 * EPSILON, x


@pytest.mark.parametrize("name", TEXTBOOK)
def test_inami_lim_function_at_the_w_mass(name):
    with mpmath.workdps(WORKING_DIGITS):
        limit = TEXTBOOK[name](1 + mpmath.mpf(10) ** -25)
    assert float(getattr(loop_functions, name)(1.0)) == pytest.approx(float(limit), rel=1e-15)


@pytest.mark.parametrize("name", TEXTBOOK)
def test_derivative_of_inami_lim_function(name):
    # what the fit's forward derivatives make of the same lines
    arguments = np.array([1e-6, 2.5e-4, 0.2, 0.3, 0.999, 1.0, 1.2, 4.1, 30.0])
    result = getattr(loop_functions, name)(seed(arguments[None, :])[0])
    tangents = tangents_of(result, (0,), len(arguments))[0]
    with mpmath.workdps(WORKING_DIGITS):
        for x, tangent in zip(arguments, tangents, strict=True):
            exact = mpmath.mpf(float(x)) + mpmath.mpf(10) ** -25
            slope = mpmath.diff(TEXTBOOK[name], exact, h=mpmath.mpf(10) ** -40)
            assert (
                relative_to_scale(tangent, slope, abs(slope) + abs(TEXTBOOK[name](exact) / exact)) < 1e-12
            ), x


def pairs():
    """Ordinary pairs, nearly equal ones anywhere, and pairs round the W mass."""
    rng = np.random.default_rng(20260601)
    x = 10.0 ** rng.uniform(-9, 3, 400)
    ratio = 1.0 + rng.choice([-0.9, 1.0], 400) * 10.0 ** rng.uniform(-15, 0, 400)
    near = 1.0 + rng.choice([-0.99, 0.99], (2, 200)) * 10.0 ** rng.uniform(-14, 0, (2, 200))
    mixed = np.stack([10.0 ** rng.uniform(-6, 2, 200), near[0]])
    apart = 10.0 ** rng.uniform(-9, 3, (2, 200))
    special = np.array(
        [[2.5e-4, 4.1], [1e-12, 4.1], [4.1, 4.2], [0.5, 1.5], [0.4999, 1.5001], [0.999, 0.5001]]
    ).T
    both = np.concatenate([np.stack([x, x * ratio]), near, mixed, apart, special], axis=1)
    return both[:, both[0] != both[1]]


def test_mixed_box_function_equals_textbook_form():
    x, y = pairs()
    values = loop_functions.box_function_mixed(x, y)
    with mpmath.workdps(WORKING_DIGITS):
        for a, b, value in zip(x, y, values, strict=True):
            reference = s0_mixed(mpmath.mpf(float(a)), mpmath.mpf(float(b)))
            assert relative_to_scale(value, reference, abs(reference)) < 300 * EPSILON, (a, b)


def test_mixed_box_function_of_equal_arguments():
    x = ARGUMENTS[ARGUMENTS > 1e-25]
    assert loop_functions.box_function_mixed(x, x) == pytest.approx(
        loop_functions.box_function(x), rel=100 * EPSILON
    )


def test_derivatives_of_mixed_box_function():
    x = np.array([2.5e-4, 4.1, 3.0, 3.0, 1.0, 0.9, 1.0, 1e-6])
    y = np.array([4.1, 2.5e-4, 3.0, 3.1, 1.0, 1.2, 4.0, 2e-6])
    result = loop_functions.box_function_mixed(*seed(np.stack([x, y])))
    tangents = tangents_of(result, (0, 1), len(x))
    with mpmath.workdps(WORKING_DIGITS):
        step, shift = mpmath.mpf(10) ** -40, mpmath.mpf(10) ** -25
        for k, (a, b) in enumerate(zip(x, y, strict=True)):
            # two small and different shifts keep the textbook form off its removable points
            a_exact, b_exact = mpmath.mpf(float(a)) + shift, mpmath.mpf(float(b)) + 3 * shift
            by_x = mpmath.diff(lambda t, b=b_exact: s0_mixed(t, b), a_exact, h=step)
            by_y = mpmath.diff(lambda t, a=a_exact: s0_mixed(a, t), b_exact, h=step)
            assert float(tangents[0, k]) == pytest.approx(float(by_x), rel=1e-12), (a, b)
            assert float(tangents[1, k]) == pytest.approx(float(by_y), rel=1e-12), (a, b)


@pytest.mark.parametrize("scale", [4.186, 10.0, 91.0, 162.6, 500.0, 2000.0])
def test_running_coupling_solves_the_four_loop_equation(scale):
    beta = [mpmath.mpf(b) for b in scale_evolution.beta_coefficients(5)]
    with mpmath.workdps(30):
        # the same equation separated: the distance in ln(scale^2) is an integral over the coupling
        start, stop = (
            mpmath.mpf("0.1180") / mpmath.pi,
            mpmath.mpf(float(scale_evolution.strong_coupling(scale, 0.1180, 91.1879))) / mpmath.pi,
        )
        distance = mpmath.quad(
            lambda a: -1 / (a**2 * (beta[0] + a * (beta[1] + a * (beta[2] + a * beta[3])))), [start, stop]
        )
        wanted = 2 * mpmath.log(mpmath.mpf(scale) / mpmath.mpf("91.1879"))
    # d(distance) = d(coupling)/beta; the relative error of the coupling stays below 1e-10 from m_b upward
    assert float(abs(distance - wanted)) < 1e-10 * float(1 / (stop * beta[0]))


def test_zeta_values():
    assert math.isclose(scale_evolution.ZETA_3, float(mpmath.zeta(3)), rel_tol=1e-15)
    assert math.isclose(scale_evolution.ZETA_2, float(mpmath.zeta(2)), rel_tol=1e-15)
