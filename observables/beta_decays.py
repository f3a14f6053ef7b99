"""Superallowed nuclear beta decay: the corrected Ft value."""

from __future__ import annotations

import math

from observables.catalogue import Real, parameter, quantity

SUPERALLOWED = "J. Hardy, I. Towner, Phys. Rev. C 102, 045501 (2020)"

parameter(
    "inner_radiative_correction",
    unit="1",
    start=0.02467,
    lower=0.0,
    upper=0.1,
    scale=0.00027,
    title="Nucleus-independent radiative correction of the vector current",
    latex=r"\Delta_R^V",
    source="C.-Y. Seng et al., Phys. Rev. Lett. 121, 241804, arXiv:1807.10197",
    fixed=True,
)


@quantity(
    unit="s",
    title="Corrected Ft value of a vector current of unit strength",
    latex=r"K/2G_F^2",
    source=SUPERALLOWED,
)
def superallowed_scale(fermi_constant: Real, reduced_planck_constant: Real, mass_e: Real) -> Real:
    """K/(2 G_F^2) = pi^3 hbar ln(2) / (G_F^2 m_e^5), in seconds."""
    return math.pi**3 * math.log(2.0) * reduced_planck_constant / (fermi_constant**2 * mass_e**5)


@quantity(
    unit="s",
    title="Corrected Ft value of superallowed 0+ to 0+ decays",
    latex=r"\mathcal{F}t",
    source=SUPERALLOWED,
)
def superallowed_Ft(superallowed_scale: Real, magnitude_V_ud: Real, inner_radiative_correction: Real) -> Real:
    """Ft = K / [2 G_F^2 |V_ud|^2 (1 + Delta_R^V)], in seconds.

    Transition-dependent corrections (delta'_R, delta_NS, delta_C) belong to the measured value.
    """
    return superallowed_scale / ((magnitude_V_ud * magnitude_V_ud) * (1.0 + inner_radiative_correction))
