from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from observables import catalogue
from observables.errors import InputError
from observables.scale_evolution import (
    beta_coefficients,
    coupling_above_threshold,
    coupling_below_threshold,
    pole_mass_ratio,
    strong_coupling,
    top_mass_msbar_from_pole,
    top_mass_pole_from_msbar,
)

MASS_Z = 91.1879


@given(st.floats(5.0, 2000.0), st.floats(0.10, 0.13), st.integers(1, 4))
def test_there_and_back(scale, coupling, loops):
    away = strong_coupling(scale, coupling, MASS_Z, n_loops=loops)
    back = strong_coupling(MASS_Z, away, scale, n_loops=loops)
    assert back == pytest.approx(coupling, rel=1e-8)


@given(st.floats(20.0, 2000.0), st.floats(0.10, 0.13))
def test_one_loop_is_the_closed_form(scale, coupling):
    slope = beta_coefficients(5)[0] / math.pi * 2 * math.log(scale / MASS_Z)
    assert strong_coupling(scale, coupling, MASS_Z, n_loops=1) == pytest.approx(
        coupling / (1 + coupling * slope), rel=1e-13
    )


def test_group_property_of_running():
    direct = strong_coupling(500.0, 0.118, MASS_Z)
    stepwise = strong_coupling(500.0, strong_coupling(163.0, 0.118, MASS_Z), 163.0)
    assert stepwise == pytest.approx(direct, rel=1e-11)


def test_falls_with_the_scale_and_stops_at_the_landau_pole():
    scales = np.geomspace(2.0, 1e4, 50)
    assert np.all(np.diff(strong_coupling(scales, 0.118, MASS_Z)) < 0)
    assert np.isnan(strong_coupling(0.05, 0.118, MASS_Z))
    assert np.isnan(strong_coupling(100.0, -0.1, MASS_Z))


def test_shapes_broadcast_and_points_do_not_depend_on_the_batch():
    scales, couplings = np.geomspace(10, 1000, 7)[:, None], np.linspace(0.11, 0.12, 3)
    table = strong_coupling(scales, couplings, MASS_Z)
    assert table.shape == (7, 3)
    for i in range(7):
        for j in range(3):
            assert strong_coupling(scales[i], couplings[j : j + 1], MASS_Z)[0] == table[i, j]


@given(st.floats(0.05, 0.4), st.integers(3, 5))
def test_threshold_there_and_back(coupling, light):
    above = coupling_above_threshold(coupling, light)
    assert coupling_below_threshold(above, light) == pytest.approx(coupling, rel=1e-13)
    assert above < coupling


@given(st.floats(150.0, 180.0), st.floats(0.11, 0.125), st.integers(0, 3))
def test_top_mass_there_and_back(pole, coupling, loops):
    running = top_mass_msbar_from_pole(pole, coupling, MASS_Z, n_loops=loops)
    assert top_mass_pole_from_msbar(running, coupling, MASS_Z, n_loops=loops) == pytest.approx(
        pole, rel=1e-13
    )
    assert running <= pole


def test_catalogue_quantity_is_the_function():
    mass = np.array([160.0, 163.0])
    coupling, mass_z = catalogue["strong_coupling_mZ"].value, catalogue["mass_Z"].value
    found = catalogue.compute(["top_mass_pole"], {"top_mass_msbar": mass})["top_mass_pole"]
    np.testing.assert_allclose(found, top_mass_pole_from_msbar(mass, coupling, mass_z), rtol=1e-14)


@pytest.mark.parametrize("loops", [-1, 5, 2.5])
def test_unknown_orders_are_refused(loops):
    with pytest.raises(InputError, match="n_loops"):
        strong_coupling(100.0, 0.118, MASS_Z, n_loops=loops)
    with pytest.raises(InputError, match="n_loops"):
        pole_mass_ratio(0.1, n_loops=loops)
