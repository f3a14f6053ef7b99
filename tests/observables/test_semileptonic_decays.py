"""K -> pi l nu phase space against adaptive integration at high precision; products of D decays."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from observables import catalogue

MODES = {
    "K0_pi_e": ("mass_K0", "mass_pi", "mass_e"),
    "K0_pi_mu": ("mass_K0", "mass_pi", "mass_mu"),
    "K_pi0_e": ("mass_K", "mass_pi0", "mass_e"),
    "K_pi0_mu": ("mass_K", "mass_pi0", "mass_mu"),
}


def value(name):
    node = catalogue[name]
    return mpmath.mpf(node.value if node.kind == "constant" else node.start)


def integral(mode, vector, scalar):
    """The phase-space integral as printed, by mpmath's adaptive quadrature; shapes in x = t/m_pi+^2."""
    kaon, pion, lepton = (value(name) for name in MODES[mode])
    splitting = kaon**2 - pion**2

    def integrand(t):
        # rounding can push lam below zero at the very end of the range
        lam = mpmath.fabs((t - (kaon + pion) ** 2) * (t - (kaon - pion) ** 2))
        x = t / value("mass_pi") ** 2
        kinematics = mpmath.sqrt(lam) * (1 + lepton**2 / (2 * t)) * (1 - lepton**2 / t) ** 2
        second = 3 * lepton**2 * splitting**2 / (2 * t + lepton**2) * scalar(x) ** 2
        return kinematics / kaon**8 * (lam * vector(x) ** 2 + second)

    end = (kaon - pion) ** 2
    breaks = [lepton**2, *(lepton**2 * (end / lepton**2) ** mpmath.mpf(k / 6) for k in range(1, 6)), end]
    return mpmath.quad(integrand, breaks)


def dispersive(slope, p2, p3):
    def shape(x):
        second = (slope**2 + p2) * x**2 / 2
        return 1 + slope * x + second + (slope**3 + 3 * p2 * slope + p3) * x**3 / 6

    return shape


@pytest.mark.parametrize("mode", MODES)
@pytest.mark.parametrize("parameters", [(0.02555, 0.1992), (0.0, 0.0), (-0.02, 0.4)])
def test_dispersive_integrals(mode, parameters):
    slope, log_c = parameters
    name = f"phase_space_{mode}_nu"
    found = catalogue.compute((name,), {"form_factor_slope_K_pi": slope, "form_factor_log_C_K_pi": log_c})[
        name
    ]
    with mpmath.workdps(20):
        pion = value("mass_pi") ** 2
        scalar_slope = pion / (value("mass_K0") ** 2 - pion) * (log_c - value("dispersive_G0_K_pi"))
        vector = dispersive(
            mpmath.mpf(slope), value("dispersive_p2_vector_K_pi"), value("dispersive_p3_vector_K_pi")
        )
        scalar = dispersive(
            scalar_slope, value("dispersive_p2_scalar_K_pi"), value("dispersive_p3_scalar_K_pi")
        )
        expected = float(integral(mode, vector, scalar))
    assert found == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("mode", MODES)
def test_quadratic_integrals(mode):
    linear, curvature, slope = 0.03, 0.002, 0.015
    name = f"phase_space_{mode}_nu_quadratic"
    found = catalogue.compute(
        (name,),
        {
            "form_factor_linear_K_pi": linear,
            "form_factor_curvature_K_pi": curvature,
            "form_factor_scalar_linear_K_pi": slope,
        },
    )[name]
    with mpmath.workdps(20):
        expected = float(
            integral(mode, lambda x: 1 + linear * x + curvature * x**2 / 2, lambda x: 1 + slope * x)
        )
    assert found == pytest.approx(expected, rel=1e-12)


def test_series_is_close_to_the_exponential_it_expands():
    """The cubic expansion against exp of the same first three orders: the fourth order is below 3e-4 of I."""
    with mpmath.workdps(20):
        slope = value("form_factor_slope_K_pi")
        p2, p3 = value("dispersive_p2_vector_K_pi"), value("dispersive_p3_vector_K_pi")
        cubic = integral("K0_pi_e", dispersive(slope, p2, p3), lambda x: 1)
        exponential = integral(
            "K0_pi_e", lambda x: mpmath.exp(slope * x + p2 * x**2 / 2 + p3 * x**3 / 6), lambda x: 1
        )
    assert abs(float(exponential / cubic) - 1) < 3e-4


@given(st.floats(-0.05, 0.1), st.floats(-0.5, 0.8))
@settings(max_examples=30)
def test_integrals_grow_with_the_form_factors(slope, log_c):
    names = tuple(f"phase_space_{mode}_nu" for mode in MODES)
    point = {"form_factor_slope_K_pi": slope, "form_factor_log_C_K_pi": log_c}
    here = catalogue.compute(names, point)
    steeper = catalogue.compute(names, point | {"form_factor_log_C_K_pi": log_c + 0.1})
    for name in names:
        assert 0 < here[name] < steeper[name]
    assert here["phase_space_K0_pi_mu_nu"] < here["phase_space_K0_pi_e_nu"]


def test_masses_can_be_arrays():
    """A mass that is promoted to a parameter goes the way without the cache and gives the same."""
    name = "phase_space_K0_pi_mu_nu"
    point = {"form_factor_slope_K_pi": 0.0255, "form_factor_log_C_K_pi": 0.2}
    mass = catalogue["mass_K0"].value * np.array([[1.0, 1.001], [0.999, 1.0]])
    found = catalogue.compute((name,), point | {"mass_K0": mass})[name]
    alone = catalogue.compute((name,), point)[name]
    assert found.shape == (2, 2)
    np.testing.assert_allclose(found[0, 0], alone, rtol=1e-14)
    assert found[1, 0] < found[0, 0] < found[0, 1]


@pytest.mark.parametrize(
    ("name", "kaon", "integral_name", "clebsch", "corrections"),
    [
        ("branching_KL_pi_e_nu", "KL", "K0_pi_e", 1.0, ("radiative_K0_pi_e_nu", 0)),
        ("branching_KL_pi_mu_nu", "KL", "K0_pi_mu", 1.0, ("radiative_K0_pi_mu_nu", 0)),
        ("branching_KS_pi_e_nu", "KS", "K0_pi_e", 1.0, ("radiative_K0_pi_e_nu", 0)),
        ("branching_K_pi0_e_nu", "K", "K_pi0_e", 0.5, ("radiative_K_pi0_e_nu", 2)),
        ("branching_K_pi0_mu_nu", "K", "K_pi0_mu", 0.5, ("radiative_K_pi0_mu_nu", 2)),
    ],
)
@pytest.mark.parametrize("form", ["", "_quadratic"])
def test_branching_fractions(name, kaon, integral_name, clebsch, corrections, form):
    name, integral_name = name + form, f"phase_space_{integral_name}_nu{form}"
    starts = {p: catalogue[p].start for p in catalogue.parameters_of(name) if not p.startswith("wolf")}
    overrides = {"magnitude_V_us": 0.22}
    found = catalogue.compute((name, integral_name), starts, overrides=overrides)
    mass = catalogue["mass_K" if kaon == "K" else "mass_K0"].value
    radiative, isospin = corrections
    expected = (
        clebsch
        * catalogue["fermi_constant"].value ** 2
        * mass**5
        / (192 * np.pi**3)
        / catalogue["reduced_planck_constant"].value
        * catalogue[f"lifetime_{kaon}"].start
        * catalogue["short_distance_factor_semileptonic"].start
        * (0.22 * catalogue["form_factor_K_pi"].start) ** 2
        * found[integral_name]
        * (1 + catalogue[radiative].start + isospin * catalogue["isospin_breaking_K_pi"].start)
    )
    assert found[name] == pytest.approx(expected, rel=1e-13)


def test_charm_products_carry_the_electroweak_factor():
    found = catalogue.compute(
        ("product_D_K", "product_D_pi", "electroweak_factor_charm"),
        {"form_factor_D_K": 0.74, "form_factor_D_pi": 0.63, "long_distance_em_D": 0.01},
        overrides={"magnitude_V_cs": 0.97, "magnitude_V_cd": 0.22},
    )
    factor = found["electroweak_factor_charm"] * 1.01
    assert found["product_D_K"] == pytest.approx(factor * 0.74 * 0.97, rel=1e-14)
    assert found["product_D_pi"] == pytest.approx(factor * 0.63 * 0.22, rel=1e-14)
