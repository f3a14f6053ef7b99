"""GIM cancellation: a down-strange neutral amplitude vanishes for degenerate up-type quarks.

The mechanism: S. L. Glashow, J. Iliopoulos, L. Maiani, Phys. Rev. D 2, 1285 (1970). With unitarity,
lambda_u + lambda_c + lambda_t = 0, the box amplitude is the sum over both internal quarks of
lambda_i lambda_j S0(x_i, x_j), and a penguin amplitude the sum over one of lambda_i F(x_i); the terms that S0
leaves out cancel in these sums.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from observables import catalogue, loop_functions

START = {name: catalogue[name].start for name in catalogue.names("parameter")}
masses = st.floats(1e-6, 30.0)


def random_lambdas(seed):
    """Products V_id V_is^* of a random unitary matrix."""
    rng = np.random.default_rng(seed)
    v, _ = np.linalg.qr(rng.normal(size=(3, 3)) + 1j * rng.normal(size=(3, 3)))
    return v[:, 0] * v[:, 1].conj()


def box_amplitude(lam, x):
    """Full sum over the two internal quarks, three flavours each."""
    pairs = [(i, j) for i in range(3) for j in range(3)]
    return sum(lam[i] * lam[j] * loop_functions.box_function_mixed(x[i], x[j]) for i, j in pairs)


@given(st.integers(0, 10**6), masses)
def test_box_amplitude_vanishes_for_degenerate_quarks(seed, x):
    lam = random_lambdas(seed)
    size = float(np.sum(np.abs(lam))) ** 2 * abs(float(loop_functions.box_function(x)))
    assert abs(box_amplitude(lam, [x, x, x])) <= 1e-14 * size
    # and not otherwise
    if abs(lam[2]) > 1e-2:
        assert abs(box_amplitude(lam, [x, x, 3 * x])) > 1e-9 * size


@given(st.integers(0, 10**6), masses)
def test_box_suppression_is_quadratic_in_the_splitting(seed, x):
    # the divided differences keep their digits for nearly equal masses, else this would drown in rounding
    lam = random_lambdas(seed)
    size = float(np.sum(np.abs(lam))) ** 2 * abs(float(loop_functions.box_function(x)))
    for splitting in (1e-2, 1e-3, 1e-4):
        amplitude = abs(box_amplitude(lam, [x, x * (1 + splitting), x * (1 - splitting)]))
        assert amplitude <= 10 * splitting**2 * size + 1e-13 * size


@given(st.integers(0, 10**6), masses, masses)
def test_charm_and_top_alone_say_the_same_with_a_massless_up_quark(seed, x_c, x_t):
    lam = random_lambdas(seed)
    s_c, s_t = loop_functions.box_function(x_c), loop_functions.box_function(x_t)
    s_ct = loop_functions.box_function_mixed(x_c, x_t)
    charm_top = lam[1] ** 2 * s_c + lam[2] ** 2 * s_t + 2 * lam[1] * lam[2] * s_ct
    up_top = lam[0] ** 2 * s_c + lam[2] ** 2 * (s_t + s_c - 2 * s_ct) + 2 * lam[0] * lam[2] * (s_c - s_ct)
    size = abs(s_c) + abs(s_t) + abs(s_ct)
    assert abs(up_top - charm_top) <= 1e-13 * size
    assert abs(box_amplitude(lam, [0.0, x_c, x_t]) - charm_top) <= 1e-13 * size
    # all three degenerate and massless: nothing is left
    assert box_amplitude(lam, [0.0, 0.0, 0.0]) == 0.0


@given(st.integers(0, 10**6), masses)
@pytest.mark.parametrize("name", ["neutrino_function", "charged_lepton_function", "z_photon_function"])
def test_penguin_amplitude_vanishes_for_degenerate_quarks(name, seed, x):
    lam = random_lambdas(seed)
    value = getattr(loop_functions, name)(x)
    assert abs(np.sum(lam * value)) <= 1e-14 * abs(value)


def test_catalogue_epsilon_vanishes_with_charm_as_heavy_as_top():
    # Without strong interactions and with m_c = m_t, what is left is proportional to lambda_u^2 and so real.
    same = {name: 1.0 for name in START if name.startswith("short_distance_factor_")}
    degenerate = {**START, **same, "charm_mass_msbar": START["top_mass_msbar"]}
    ordinary = {**START, **same}
    for name in ("epsilon_K", "epsilon_K_charm_top"):
        left = catalogue.compute([name], degenerate)[name]
        assert abs(left) < 1e-9 * abs(catalogue.compute([name], ordinary)[name])


def test_catalogue_mixing_amplitude_needs_unitarity():
    # the charm-top form of M12 with degenerate quarks is lambda_u^2 S0(x): what a massless up quark leaves
    same = {name: 1.0 for name in START if name.startswith("short_distance_factor_")}
    degenerate = {**START, **same, "charm_mass_msbar": START["top_mass_msbar"]}
    names = ["M12_K_charm_top", "mixing_strength_K", "box_function_top", "kaon_product_up"]
    found = catalogue.compute(names, degenerate)
    expected = found["mixing_strength_K"] * found["box_function_top"] * found["kaon_product_up"] ** 2
    assert found["M12_K_charm_top"].real == pytest.approx(expected, rel=1e-12)
    assert abs(found["M12_K_charm_top"].imag) < 1e-12 * expected
