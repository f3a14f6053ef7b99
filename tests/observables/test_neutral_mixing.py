from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from observables import catalogue
from observables.catalogue import Complex, Quantity
from observables.hypothesis import Hypothesis

MIXING = [
    name
    for name in catalogue.names("quantity")
    if isinstance(node := catalogue[name], Quantity)
    and node.function.__module__ in ("observables.neutral_mixing", "observables.kaon_mixing")
]
ELEMENTS = [f"V_{up}{down}" for up in "uct" for down in "dsb"]
START = {name: catalogue[name].start for name in catalogue.names("parameter")}

# anywhere in the plane of the triangle's apex, CP-conserving line included
points = st.fixed_dictionaries(
    {
        "wolfenstein_lambda": st.floats(0.15, 0.35),
        "wolfenstein_A": st.floats(0.5, 1.2),
        "wolfenstein_rhobar": st.floats(-0.6, 0.8),
        "wolfenstein_etabar": st.floats(-0.7, 0.7).filter(lambda eta: abs(eta) > 1e-3),
        "top_mass_msbar": st.floats(140, 190),
        "charm_mass_msbar": st.floats(1.0, 1.6),
        "bag_K": st.floats(0.5, 1.0),
        "mixing_matrix_element_Bs": st.floats(0.2, 0.3),
        "mixing_matrix_element_ratio": st.floats(1.0, 1.4),
    }
)


def compute(names, values=None, hypothesis="standard", overrides=None):
    return catalogue.compute(names, {**START, **(values or {})}, hypothesis, overrides)


def mixing_matrix(values):
    """Standard parametrisation with the exact Wolfenstein parameters, written apart from the catalogue's."""
    lam, a, rho, eta = (values[f"wolfenstein_{name}"] for name in ("lambda", "A", "rhobar", "etabar"))
    s12, s23 = lam, a * lam**2
    apex = complex(rho, eta)
    s13_phase = a * lam**3 * apex * math.sqrt(1 - a**2 * lam**4)
    s13_phase /= math.sqrt(1 - lam**2) * (1 - a**2 * lam**4 * apex)
    s13, delta = abs(s13_phase), np.angle(s13_phase)
    c12, c23, c13 = (math.sqrt(1 - s**2) for s in (s12, s23, s13))
    middle = np.array([[c13, 0, s13 * np.exp(-1j * delta)], [0, 1, 0], [-s13 * np.exp(1j * delta), 0, c13]])
    left = np.array([[1, 0, 0], [0, c23, s23], [0, -s23, c23]])
    right = np.array([[c12, s12, 0], [-s12, c12, 0], [0, 0, 1]])
    return left @ middle @ right


def box(x):
    return (4 * x - 11 * x**2 + x**3) / (4 * (1 - x) ** 2) - 3 * x**3 * math.log(x) / (2 * (1 - x) ** 3)


def box_mixed(x, y):
    def f(a):
        return 1 / 4 + 3 / (2 * (1 - a)) - 3 / (4 * (1 - a) ** 2)

    brackets = math.log(x) / (x - y) * f(x) + math.log(y) / (y - x) * f(y) - 3 / (4 * (1 - x) * (1 - y))
    return x * y * brackets


@given(points)
def test_against_the_textbook_in_the_standard_phase_convention(values):
    v = mixing_matrix(values)
    leaf = {**START, **{n: catalogue[n].value for n in catalogue.names("constant")}, **values}
    x_t = (leaf["top_mass_msbar"] / leaf["mass_W"]) ** 2
    x_c = (leaf["charm_mass_msbar"] / leaf["mass_W"]) ** 2
    common = leaf["fermi_constant"] ** 2 * leaf["mass_W"] ** 2 / (12 * math.pi**2)

    expected = {}
    element = leaf["mixing_matrix_element_Bs"]
    for meson, q, f in (("Bd", 0, element / leaf["mixing_matrix_element_ratio"]), ("Bs", 1, element)):
        m12 = common * leaf[f"mass_{meson}"] * f**2 * leaf["short_distance_factor_B"] * box(x_t)
        m12 *= (v[2, 2] * v[2, q].conj()) ** 2
        expected[f"mixing_frequency_{meson}"] = 2 * abs(m12) / leaf["reduced_planck_constant"] * 1e-12
        frame = v[1, 2] * v[1, q].conj()
        expected[f"mixing_phase_{meson}"] = math.degrees(np.angle(m12 * frame.conj() ** 2))
        expected[f"M12_{meson}"] = m12 * (frame.conj() / abs(frame)) ** 2

    lam = v[:, 0] * v[:, 1].conj()
    lam = lam * abs(lam[0]) / lam[0]
    kaon = common * leaf["decay_constant_K"] ** 2 * leaf["bag_K"] * leaf["mass_K0"]
    s_c, s_t, s_ct = box(x_c), box(x_t), box_mixed(x_c, x_t)
    up_top = leaf["short_distance_factor_top_top"] * (s_t + s_c - 2 * s_ct) * lam[2].conj() ** 2
    up_top += 2 * leaf["short_distance_factor_up_top"] * (s_c - s_ct) * (lam[0] * lam[2]).conj()
    charm_top = leaf["short_distance_factor_charm_charm"] * s_c * lam[1].conj() ** 2
    charm_top += leaf["short_distance_factor_top_top_charm_form"] * s_t * lam[2].conj() ** 2
    charm_top += 2 * leaf["short_distance_factor_charm_top"] * s_ct * (lam[1] * lam[2]).conj()
    size = leaf["long_distance_factor_epsilon_K"] / (math.sqrt(2) * leaf["mass_difference_K"])
    expected["epsilon_K"] = size * kaon * up_top.imag
    expected["epsilon_K_charm_top"] = size * kaon * charm_top.imag
    expected["M12_K"] = kaon * up_top

    found = compute(list(expected), values)
    for name, value in expected.items():
        period = catalogue[name].period
        difference = found[name] - value
        if period:
            difference = (difference + period / 2) % period - period / 2
        # the textbook box function of a light quark, in plain floats, is itself good to 1e-11 only
        assert abs(difference) <= 1e-10 * max(abs(value), 1e-3 * (period or 0)), name


def natural_size(name, value):
    """What rounding errors are relative to: epsilon_K is the small imaginary part of a complex number."""
    floor = 1e-3 if name.startswith("epsilon_K") else catalogue[name].period or 0.0
    return max(abs(value), floor)


@given(points, st.lists(st.floats(-math.pi, math.pi), min_size=6, max_size=6))
def test_rephasing_the_quark_fields_moves_nothing(values, phases):
    v = mixing_matrix(values)
    rotated = np.exp(1j * np.array(phases[:3]))[:, None] * v * np.exp(1j * np.array(phases[3:]))
    names = [*MIXING, "sine_2beta_ccs", "cosine_2beta_ccs", "phase_phi_s"]
    before = compute(names, values, overrides=dict(zip(ELEMENTS, v.ravel(), strict=True)))
    after = compute(names, values, overrides=dict(zip(ELEMENTS, rotated.ravel(), strict=True)))
    for name in names:
        difference = after[name] - before[name]
        if period := catalogue[name].period:
            difference = (difference + period / 2) % period - period / 2
        assert abs(difference) <= 1e-11 * natural_size(name, before[name]), name


@given(points)
def test_cp_operation(values):
    mirrored = {**values, "wolfenstein_etabar": -values["wolfenstein_etabar"]}
    here, there = compute(MIXING, values), compute(MIXING, mirrored)
    for name in MIXING:
        flips = {"even": here[name], "odd": -here[name], "conjugate": np.conjugate(here[name])}
        expected = flips[catalogue[name].cp]
        difference = there[name] - expected
        if period := catalogue[name].period:
            difference = (difference + period / 2) % period - period / 2
        assert abs(difference) <= 1e-11 * natural_size(name, expected), name


def test_signs_at_the_start_values():
    found = compute([*MIXING, "angle_beta", "angle_beta_s", "jarlskog"])
    assert found["epsilon_K"] > 0
    assert found["epsilon_K_charm_top"] > 0
    assert found["mixing_phase_Bd"] == pytest.approx(2 * found["angle_beta"], abs=1e-11)
    assert found["mixing_phase_Bs"] == pytest.approx(-2 * found["angle_beta_s"], abs=1e-11)
    scaled = found["jarlskog"] / found["kaon_product_up"]
    assert found["kaon_product_top"].imag == pytest.approx(scaled, rel=1e-12)
    assert found["kaon_product_charm"].imag == pytest.approx(-scaled, rel=1e-12)
    total = found["kaon_product_up"] + found["kaon_product_charm"] + found["kaon_product_top"]
    assert abs(total) < 1e-15  # unitarity


@given(points, st.floats(0.3, 2.0))
def test_both_forms_of_epsilon_agree_when_the_strong_interaction_is_switched_off(values, factor):
    # Equal factors everywhere: the forms differ by unitarity and the lambda_u^2 part, which is real, alone.
    same = {name: factor for name in START if name.startswith("short_distance_factor_")}
    found = compute(["epsilon_K", "epsilon_K_charm_top"], {**values, **same})
    assert found["epsilon_K_charm_top"] == pytest.approx(found["epsilon_K"], rel=1e-9)


def test_a_mixing_hypothesis_moves_what_it_must_and_nothing_else():
    new = Hypothesis("test-mixing", title="factors on the mixing amplitudes", source="invented")
    factor_d, factor_s, factor_k = 1.3 * np.exp(0.4j), 0.8 * np.exp(-0.2j), 1.2 * np.exp(0.3j)

    @new.replaces("M12_Bd")
    def m12_d(standard) -> Complex:
        return standard * factor_d

    @new.replaces("M12_Bs")
    def m12_s(standard) -> Complex:
        return standard * factor_s

    @new.replaces("M12_K_top")
    def m12_k(standard) -> Complex:
        return standard * factor_k

    names = [*MIXING, "phase_phi_s", "isospin_alpha", "angle_gamma", "sine_2beta_ccs"]
    before, after = compute(names), compute(names, hypothesis=new)
    assert after["mixing_frequency_Bd"] == pytest.approx(1.3 * before["mixing_frequency_Bd"], rel=1e-13)
    assert after["mixing_frequency_Bs"] == pytest.approx(0.8 * before["mixing_frequency_Bs"], rel=1e-13)
    assert after["mixing_phase_Bd"] == pytest.approx(before["mixing_phase_Bd"] + math.degrees(0.4), rel=1e-13)
    assert after["phase_phi_s"] == pytest.approx(before["phase_phi_s"] - 0.2, rel=1e-13)
    assert after["isospin_alpha"] == pytest.approx(before["isospin_alpha"] - math.degrees(0.2), rel=1e-13)
    expected = before["M12_K_up_top"] + factor_k * before["M12_K_top"]
    assert after["M12_K"] == pytest.approx(expected, rel=1e-13)
    ratio = before["epsilon_K"] / before["M12_K"].imag
    assert after["epsilon_K"] == pytest.approx(ratio * expected.imag, rel=1e-13)
    for name in (
        "box_amplitude_Bd",
        "box_amplitude_Bs",
        "M12_K_up_top",
        "epsilon_K_charm_top",
        "angle_gamma",
    ):
        assert after[name] == before[name], name


def test_batch_equals_single_points():
    rng = np.random.default_rng(5)
    values = {
        name: START[name] * rng.uniform(0.95, 1.05, (4, 3)) for name in START if catalogue[name].start != 0.0
    }
    batch = compute(MIXING, values)
    for index in np.ndindex(4, 3):
        single = compute(MIXING, {name: value[index] for name, value in values.items()})
        for name in MIXING:
            assert batch[name].shape == (4, 3)
            assert batch[name][index] == pytest.approx(single[name], rel=1e-13, abs=1e-30), name


def test_no_mixing_without_third_family_couplings():
    # V_cb = 0 has no frame: no number rather than a wrong one.
    assert np.isnan(compute(["mixing_frequency_Bd"], {"wolfenstein_A": 0.0})["mixing_frequency_Bd"])
    # at the origin of the plane V_ub vanishes, and nothing here minds
    origin = {"wolfenstein_rhobar": 0.0, "wolfenstein_etabar": 0.0}
    assert all(np.isfinite(value) for value in compute(MIXING, origin).values())
    assert compute(["epsilon_K"], origin)["epsilon_K"] == 0.0
