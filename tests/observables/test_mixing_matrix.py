"""The mixing matrix: against rotation matrices, and against its own identities."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from observables import catalogue

UP, DOWN = ("u", "c", "t"), ("d", "s", "b")
ELEMENTS = tuple(f"V_{up}{down}" for up in UP for down in DOWN)
ANGLES = (
    "angle_alpha",
    "angle_beta",
    "angle_gamma",
    "angle_beta_s",
    "angle_beta_K",
    "kobayashi_maskawa_phase",
)
ROTATIONS = ("sine_theta12", "sine_theta13", "sine_theta23")
INVARIANTS = (
    *(f"magnitude_{element}" for element in ELEMENTS),
    *(f"unitarity_sum_row_{up}" for up in UP),
    *(f"unitarity_sum_column_{down}" for down in DOWN),
    *ANGLES,
    *ROTATIONS,
    "jarlskog",
    "side_Rb",
    "side_Rt",
)

points = st.fixed_dictionaries(
    {
        "wolfenstein_lambda": st.floats(0.05, 0.6),
        "wolfenstein_A": st.floats(0.1, 1.4),
        "wolfenstein_rhobar": st.floats(-1.2, 1.2),
        "wolfenstein_etabar": st.floats(-1.2, 1.2).filter(lambda x: abs(x) > 1e-3),
    }
)


def matrix(point):
    """The nine elements as an array whose last two axes are the matrix."""
    values = catalogue.compute(ELEMENTS, point)
    return np.stack([values[name] for name in ELEMENTS], axis=-1).reshape(*np.shape(values["V_ud"]), 3, 3)


def product_of_rotations(theta12, theta13, theta23, delta):
    """The standard parametrisation as a product of three rotations."""
    c12, c13, c23 = np.cos([theta12, theta13, theta23])
    s12, s13, s23 = np.sin([theta12, theta13, theta23])
    first = np.array([[1, 0, 0], [0, c23, s23], [0, -s23, c23]])
    middle = np.array([[c13, 0, s13 * np.exp(-1j * delta)], [0, 1, 0], [-s13 * np.exp(1j * delta), 0, c13]])
    last = np.array([[c12, s12, 0], [-s12, c12, 0], [0, 0, 1]])
    return first @ middle @ last


def inside(point):
    """Whether the point gives a matrix at all."""
    return np.isfinite(matrix(point)).all()


@given(points)
def test_unitary(point):
    v = matrix(point)
    if inside(point):
        assert np.abs(v @ v.conj().T - np.eye(3)).max() < 1e-14
        assert np.abs(v.conj().T @ v - np.eye(3)).max() < 1e-14


@given(points)
def test_equals_product_of_rotations_with_its_own_invariants(point):
    """The rephasing-invariant angles and phase rebuild the very matrix of the standard parametrisation."""
    if not inside(point):
        return
    found = catalogue.compute((*ROTATIONS, "kobayashi_maskawa_phase"), point)
    angles = [np.arcsin(found[name]) for name in ROTATIONS]
    delta = np.radians(found["kobayashi_maskawa_phase"])
    rebuilt = product_of_rotations(angles[0], angles[1], angles[2], delta)
    # arcsin near one loses half of the digits; everywhere else the agreement is at rounding level
    assert np.abs(rebuilt - matrix(point)).max() < 1e-12 / min(np.cos(angles))


@given(points)
def test_apex_is_the_invariant_quotient(point):
    """rho-bar + i eta-bar = -V_ud V_ub^*/(V_cd V_cb^*), to all orders: Buras, Lautenbacher, Ostermaier
    (1994)."""
    if not inside(point):
        return
    v = matrix(point)
    quotient = -v[0, 0] * v[0, 2].conj() / (v[1, 0] * v[1, 2].conj())
    apex = point["wolfenstein_rhobar"] + 1j * point["wolfenstein_etabar"]
    assert abs(quotient - apex) < 1e-11 / abs(v[1, 0] * v[1, 2])
    sides = catalogue.compute(("side_Rb", "side_Rt"), point)
    assert sides["side_Rb"] == pytest.approx(abs(apex), rel=1e-9)
    assert sides["side_Rt"] == pytest.approx(abs(1 - apex), rel=1e-9)


@given(points)
def test_angles_of_the_triangle(point):
    """The triangle with corners 0, 1 and the apex has these angles; they add to a half turn, signed."""
    if not inside(point):
        return
    rho, eta = point["wolfenstein_rhobar"], point["wolfenstein_etabar"]
    found = catalogue.compute(("angle_alpha", "angle_beta", "angle_gamma"), point)
    assert found["angle_gamma"] == pytest.approx(np.degrees(np.arctan2(eta, rho)), abs=1e-6)
    assert found["angle_beta"] == pytest.approx(np.degrees(np.arctan2(eta, 1 - rho)), abs=1e-6)
    assert sum(found.values()) == pytest.approx(np.copysign(180.0, eta), abs=1e-9)


@given(points)
def test_jarlskog_is_the_area_of_every_triangle(point):
    """Every quartet has the same imaginary part up to sign: C. Jarlskog, Phys. Rev. Lett. 55, 1039."""
    if not inside(point):
        return
    v = matrix(point)
    found = catalogue.compute(("jarlskog",), point)["jarlskog"]
    for i in range(3):
        for a in range(3):
            j, b = (i + 1) % 3, (a + 1) % 3
            quartet = v[i, a] * v[j, b] * (v[i, b] * v[j, a]).conj()
            assert abs(quartet.imag) == pytest.approx(abs(found), abs=1e-15)
    assert np.sign(found) == np.sign(point["wolfenstein_etabar"])


@given(points, st.lists(st.floats(-np.pi, np.pi), min_size=6, max_size=6))
def test_rephasing_moves_no_invariant(point, phases):
    if not inside(point):
        return
    v = matrix(point)
    turned = v * np.exp(1j * np.array(phases[:3]))[:, None] * np.exp(1j * np.array(phases[3:]))[None, :]
    before = catalogue.compute(INVARIANTS, point)
    overrides = {f"V_{up}{down}": turned[i, j] for i, up in enumerate(UP) for j, down in enumerate(DOWN)}
    after = catalogue.compute(INVARIANTS, {}, overrides=overrides)
    for name in INVARIANTS:
        difference = after[name] - before[name]
        if catalogue[name].period:
            difference = (difference + 180.0) % 360.0 - 180.0
            # the phase of a product of size s is known to (rounding)/s
            assert abs(difference) < 1e-12 / abs(v[0, 2] * v[0, 1] * v[1, 2] * v[2, 0]), name
        else:
            assert difference == pytest.approx(0.0, abs=1e-12 * max(1.0, abs(before[name]))), name


@given(points)
@settings(max_examples=50)
def test_parity_under_cp(point):
    if not inside(point):
        return
    mirrored = point | {"wolfenstein_etabar": -point["wolfenstein_etabar"]}
    here, there = catalogue.compute(INVARIANTS, point), catalogue.compute(INVARIANTS, mirrored)
    for name in INVARIANTS:
        sign = -1.0 if catalogue[name].cp == "odd" else 1.0
        assert there[name] == sign * here[name], name
    assert (matrix(mirrored) == matrix(point).conj()).all()


def test_nothing_is_lost_where_v_ub_vanishes():
    point = {
        "wolfenstein_lambda": 0.225,
        "wolfenstein_A": 0.82,
        "wolfenstein_rhobar": 0.0,
        "wolfenstein_etabar": 0.0,
    }
    found = catalogue.compute((*ELEMENTS, *INVARIANTS), point)
    assert all(np.isfinite(value) for value in found.values())
    assert found["jarlskog"] == 0.0


@pytest.mark.parametrize("rho", [-0.4, 0.3, 1.4])
def test_phases_stay_in_the_half_open_turn(rho):
    """At eta-bar = +0 and -0 the phases are 0 or +180, never -180."""
    point = {"wolfenstein_lambda": 0.225, "wolfenstein_A": 0.82, "wolfenstein_rhobar": rho}
    for eta in (0.0, -0.0, 1e-300, -1e-300):
        found = catalogue.compute(ANGLES, point | {"wolfenstein_etabar": eta})
        for name, value in found.items():
            assert -180.0 < value <= 180.0, name


def test_outside_the_domain_is_nan():
    point = {
        "wolfenstein_lambda": np.array([0.9, 0.2, 1.2]),
        "wolfenstein_A": np.array([1.9, 0.8, 0.1]),
        "wolfenstein_rhobar": 0.1,
        "wolfenstein_etabar": 0.3,
    }
    v = matrix(point)
    assert np.isnan(v[0]).any()
    assert np.isfinite(v[1]).all()
    assert np.isnan(v[2]).any()


def test_batches_equal_single_points():
    generator = np.random.default_rng(20261)
    shape = (3, 5)
    point = {
        "wolfenstein_lambda": generator.uniform(0.1, 0.3, shape),
        "wolfenstein_A": generator.uniform(0.5, 1.0, shape),
        "wolfenstein_rhobar": generator.uniform(-0.5, 0.5, shape),
        "wolfenstein_etabar": generator.uniform(-0.5, 0.5, shape),
    }
    together = catalogue.compute((*ELEMENTS, *INVARIANTS), point)
    for index in np.ndindex(*shape):
        alone = catalogue.compute(
            (*ELEMENTS, *INVARIANTS), {name: value[index] for name, value in point.items()}
        )
        for name, value in alone.items():
            assert together[name][index] == pytest.approx(value, rel=1e-13, abs=1e-15), name
