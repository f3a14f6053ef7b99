from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from observables import catalogue

START = {name: catalogue[name].start for name in catalogue.names("parameter")}
NAMES = ["sine_2beta_ccs", "cosine_2beta_ccs", "phase_phi_s", "sine_2beta_plus_gamma", "isospin_alpha"]
plane = {
    "wolfenstein_rhobar": st.floats(-0.6, 0.8),
    "wolfenstein_etabar": st.floats(-0.7, 0.7).filter(lambda eta: abs(eta) > 1e-3),
}
shifts = {"penguin_shift_2beta": st.floats(-3, 3), "penguin_shift_phi_s": st.floats(-3, 3)}
angles = st.floats(-180.0, 180.0, exclude_min=True)


def compute(names, values=None, overrides=None):
    return catalogue.compute(names, {**START, **(values or {})}, overrides=overrides)


@given(st.fixed_dictionaries(plane))
def test_standard_model_relations(values):
    found = compute([*NAMES, "angle_alpha", "angle_beta", "angle_beta_s", "angle_gamma"], values)
    beta, gamma = math.radians(found["angle_beta"]), math.radians(found["angle_gamma"])
    assert found["sine_2beta_ccs"] == pytest.approx(math.sin(2 * beta), abs=1e-12)
    assert found["cosine_2beta_ccs"] == pytest.approx(math.cos(2 * beta), abs=1e-12)
    assert found["phase_phi_s"] == pytest.approx(-2 * math.radians(found["angle_beta_s"]), abs=1e-12)
    assert found["sine_2beta_plus_gamma"] == pytest.approx(math.sin(2 * beta + gamma), abs=1e-12)
    # the isospin analysis cannot tell alpha from alpha + 180 deg
    assert math.sin(math.radians(found["isospin_alpha"] - found["angle_alpha"])) == pytest.approx(
        0, abs=1e-12
    )


@given(st.fixed_dictionaries({**plane, **shifts}))
def test_cp_operation(values):
    odd = [name for name in ("wolfenstein_etabar", *shifts) if name in values]
    assert all(catalogue[name].cp_odd for name in odd)
    mirrored = {name: -value if name in odd else value for name, value in values.items()}
    here, there = compute(NAMES, values), compute(NAMES, mirrored)
    for name in ("sine_2beta_ccs", "phase_phi_s", "sine_2beta_plus_gamma"):
        assert there[name] == pytest.approx(-here[name], abs=1e-12)
    assert there["cosine_2beta_ccs"] == pytest.approx(here["cosine_2beta_ccs"], abs=1e-12)
    assert (there["isospin_alpha"] + here["isospin_alpha"]) % 180 == pytest.approx(0, abs=1e-10) or (
        there["isospin_alpha"] + here["isospin_alpha"]
    ) % 180 == pytest.approx(180, abs=1e-10)


def test_penguin_shifts_are_held_at_zero_and_in_degrees():
    for name in shifts:
        node = catalogue[name]
        assert node.fixed
        assert node.start == 0.0
        assert node.unit == "deg"
    plain = compute(["mixing_phase_Bd", *NAMES])
    moved = compute(NAMES, {"penguin_shift_2beta": 1.5, "penguin_shift_phi_s": -2.0})
    assert moved["sine_2beta_ccs"] == pytest.approx(
        math.sin(math.radians(plain["mixing_phase_Bd"] + 1.5)), abs=1e-14
    )
    assert moved["phase_phi_s"] == pytest.approx(plain["phase_phi_s"] - math.radians(2.0), abs=1e-14)
    # tree decays and the isospin analysis know nothing of these penguins
    for name in ("sine_2beta_plus_gamma", "isospin_alpha"):
        assert moved[name] == plain[name]


@given(angles, angles)
def test_isospin_alpha_lies_on_the_physical_branch(phase, gamma):
    found = compute(["isospin_alpha"], overrides={"mixing_phase_Bd": phase, "angle_gamma": gamma})[
        "isospin_alpha"
    ]
    assert 0.0 <= found <= 180.0
    twice = math.radians(2 * found + 2 * gamma + phase)
    assert math.sin(twice) == pytest.approx(0, abs=1e-9)
    assert math.cos(twice) == pytest.approx(1, abs=1e-9)


def test_units_periods_and_signs_are_declared():
    assert (catalogue["phase_phi_s"].unit, catalogue["phase_phi_s"].period) == ("rad", 2 * math.pi)
    assert (catalogue["isospin_alpha"].unit, catalogue["isospin_alpha"].period) == ("deg", 180.0)
    found = compute(NAMES)
    assert found["sine_2beta_ccs"] > 0
    assert found["cosine_2beta_ccs"] > 0
    assert found["phase_phi_s"] < 0
    assert 0 < found["isospin_alpha"] < 180


def test_any_batch_shape():
    values = {"wolfenstein_etabar": np.linspace(-0.5, 0.5, 6).reshape(2, 3)}
    for value in compute(NAMES, values).values():
        assert value.shape == (2, 3)
