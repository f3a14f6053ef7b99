"""Leptonic decays: independent arithmetic at 30 digits, limits, and what each prediction rests on."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from observables import catalogue

ELEMENTS = {"pi": "V_ud", "K": "V_us", "D": "V_cd", "Ds": "V_cs", "Bu": "V_ub", "Bc": "V_cb"}
DECAY_CONSTANTS = {name: f"decay_constant_{'B' if name == 'Bu' else name}" for name in ELEMENTS}
MODES = [
    ("D", "mu"),
    ("D", "tau"),
    ("Ds", "mu"),
    ("Ds", "tau"),
    ("Bu", "mu"),
    ("Bu", "tau"),
    ("Bc", "tau"),
]


def number(name):
    """Value of a constant, start value of a parameter, as an mpmath number."""
    node = catalogue[name]
    return mpmath.mpf(node.value if node.kind == "constant" else node.start)


def width(meson, lepton, magnitude):
    """Lowest-order width over hbar, written out from |amplitude|^2 and two-body phase space.

    |A|^2 = 2 G_F^2 f^2 |V|^2 m^2 (M^2 - m^2), summed over spins; Gamma = p |A|^2/(8 pi M^2).
    """
    heavy, light = number(f"mass_{meson}"), number(f"mass_{lepton}")
    momentum = (heavy**2 - light**2) / (2 * heavy)
    coupling = number("fermi_constant") * number(DECAY_CONSTANTS[meson]) * magnitude
    square = 2 * coupling**2 * light**2 * (heavy**2 - light**2)
    return momentum * square / (8 * mpmath.pi * heavy**2) / number("reduced_planck_constant")


def compute(name, magnitude, meson, **values):
    start = {p: catalogue[p].start for p in catalogue.parameters_of(name)}
    overrides = {f"magnitude_{ELEMENTS[meson]}": magnitude}
    given = {p: v for p, v in (start | values).items() if not p.startswith("wolfenstein")}
    return catalogue.compute((name,), given, overrides=overrides)[name]


@pytest.mark.parametrize(("meson", "lepton"), MODES)
def test_branching_fractions_from_amplitude_and_phase_space(meson, lepton):
    magnitude = 0.3
    expected = width(meson, lepton, mpmath.mpf(magnitude)) * number(f"lifetime_{meson}")
    if meson in ("D", "Ds"):
        factor = 1 + number("fine_structure_constant") / mpmath.pi * mpmath.log(
            number("mass_Z") / number("mass_D")
        )
        expected *= factor**2
    found = compute(f"branching_{meson}_{lepton}_nu", magnitude, meson)
    assert found == pytest.approx(float(expected), rel=1e-13)


@pytest.mark.parametrize("meson", ["pi", "K"])
def test_widths_of_light_mesons(meson):
    expected = width(meson, "mu", mpmath.mpf(0.3)) * (1 + number(f"radiative_{meson}_mu_nu"))
    assert compute(f"width_{meson}_mu_nu", 0.3, meson) == pytest.approx(float(expected), rel=1e-13)


@pytest.mark.parametrize("meson", ["pi", "K"])
def test_tau_is_the_crossed_amplitude(meson):
    """|A|^2 = G_F^2 f^2 |V|^2 m_tau^2 (m_tau^2 - M^2), averaged over spins; Gamma = p |A|^2/(8 pi
    m_tau^2)."""
    tau, heavy = number("mass_tau"), number(f"mass_{meson}")
    momentum = (tau**2 - heavy**2) / (2 * tau)
    coupling = (number("fermi_constant") * number(DECAY_CONSTANTS[meson]) * mpmath.mpf(0.3)) ** 2
    square = coupling * tau**2 * (tau**2 - heavy**2)
    expected = momentum * square / (8 * mpmath.pi * tau**2) / number("reduced_planck_constant")
    expected *= number("lifetime_tau") * number("short_distance_factor_semileptonic")
    expected *= 1 + number(f"radiative_tau_{meson}_nu")
    assert compute(f"branching_tau_{meson}_nu", 0.3, meson) == pytest.approx(float(expected), rel=1e-13)


def test_ratio_is_the_ratio_of_widths_without_corrections():
    values = {
        "decay_constant_pi": 0.13,
        "decay_constant_K": 0.13 * 1.2,
        "decay_constant_ratio_K_pi": 1.2,
        "radiative_pi_mu_nu": 0.0,
        "radiative_K_mu_nu": 0.0,
        "radiative_K_pi_mu_nu": 0.0,
    }
    overrides = {"magnitude_V_us": 0.22, "magnitude_V_ud": 0.97}
    found = catalogue.compute(
        ("ratio_K_pi_mu_nu", "width_K_mu_nu", "width_pi_mu_nu"), values, overrides=overrides
    )
    expected = found["width_K_mu_nu"] / found["width_pi_mu_nu"]
    assert found["ratio_K_pi_mu_nu"] == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize("meson", ["pi", "K"])
def test_electron_over_muon_is_the_ratio_of_widths(meson):
    expected = width(meson, "e", mpmath.mpf(1)) / width(meson, "mu", mpmath.mpf(1))
    found = catalogue.compute((f"ratio_e_mu_{meson}",), {f"radiative_e_mu_{meson}": 0.0})
    assert found[f"ratio_e_mu_{meson}"] == pytest.approx(float(expected), rel=1e-13)


def test_helicity_suppression_and_threshold():
    """A massless lepton and a lepton as heavy as the meson both close the decay."""
    for value in (0.0, catalogue["mass_Bu"].value):
        found = catalogue.compute(("rate_unit_Bu_tau_nu",), {"mass_tau": value})
        assert found["rate_unit_Bu_tau_nu"] == pytest.approx(0.0, abs=1e-12)


def test_long_distance_share():
    """0.7 % on the leptonic amplitude where the semileptonic one moves by 1 %."""
    moved = compute("branching_D_mu_nu", 0.22, "D", long_distance_em_D=0.01)
    assert moved / compute("branching_D_mu_nu", 0.22, "D") == pytest.approx(1.007**2, rel=1e-14)


@pytest.mark.parametrize(
    ("name", "parameters"),
    [
        ("width_pi_mu_nu", {"decay_constant_pi", "radiative_pi_mu_nu"}),
        ("width_K_mu_nu", {"decay_constant_K", "radiative_K_mu_nu"}),
        ("ratio_K_pi_mu_nu", {"decay_constant_ratio_K_pi", "radiative_K_pi_mu_nu"}),
        ("branching_Ds_tau_nu", {"decay_constant_Ds", "lifetime_Ds", "long_distance_em_D"}),
        ("branching_Bu_tau_nu", {"decay_constant_B", "lifetime_Bu"}),
        ("branching_Bc_tau_nu", {"decay_constant_Bc", "lifetime_Bc"}),
    ],
)
def test_what_a_prediction_rests_on(name, parameters):
    wolfenstein = {p for p in catalogue.parameters_of(name) if p.startswith("wolfenstein")}
    assert set(catalogue.parameters_of(name)) - wolfenstein == parameters
    assert "wolfenstein_lambda" in wolfenstein


def test_lifetimes_and_corrections_are_held_unless_measured():
    names = [n for n in catalogue.names("parameter") if n.startswith(("lifetime_", "radiative_"))]
    assert len(names) > 15
    assert all(catalogue[name].fixed for name in names)
    assert not catalogue["decay_constant_B"].fixed


def test_batch():
    f = np.linspace(0.15, 0.25, 11)
    found = compute("branching_Bu_tau_nu", 3.8e-3, "Bu", decay_constant_B=f)
    assert found.shape == (11,)
    np.testing.assert_allclose(found / found[0], (f / f[0]) ** 2, rtol=1e-13)
