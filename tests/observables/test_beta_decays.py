"""Superallowed beta decay: the scale at high precision and the way back to |V_ud|."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from observables import catalogue


def test_scale_at_thirty_digits():
    """K/(2 G_F^2) = pi^3 hbar ln 2/(G_F^2 m_e^5), from the constants of the catalogue."""
    with mpmath.workdps(30):
        hbar, fermi, electron = (
            mpmath.mpf(catalogue[name].value)
            for name in ("reduced_planck_constant", "fermi_constant", "mass_e")
        )
        expected = mpmath.pi**3 * hbar * mpmath.log(2) / (fermi**2 * electron**5)
    found = catalogue.compute(("superallowed_scale",), {})["superallowed_scale"]
    assert found == pytest.approx(float(expected), rel=1e-14)


def test_inverts_to_the_element_it_came_from():
    magnitude = np.linspace(0.9, 1.0, 7)
    found = catalogue.compute(
        ("superallowed_Ft", "superallowed_scale"),
        {"inner_radiative_correction": 0.02467},
        overrides={"magnitude_V_ud": magnitude},
    )
    back = np.sqrt(found["superallowed_scale"] / (found["superallowed_Ft"] * 1.02467))
    np.testing.assert_allclose(back, magnitude, rtol=1e-14)


def test_leaves():
    assert "inner_radiative_correction" in catalogue.parameters_of("superallowed_Ft")
    assert catalogue["superallowed_Ft"].unit == "s"
