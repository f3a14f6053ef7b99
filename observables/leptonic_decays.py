"""Leptonic decays of pseudoscalar mesons, P -> l nu, and their crossed partners tau -> P nu.

Decay constants are those of the charged mesons in the normalisation <0|A_mu|P(p)> = i f_P p_mu (f_pi about
0.130 GeV). Two routes lead from kaons to |V_us|, and nothing here ties one to the other: `width_K_mu_nu` with
`decay_constant_K`, and `ratio_K_pi_mu_nu` with `decay_constant_ratio_K_pi`. Lattice values of f_K that set
the scale with f_pi are that same ratio times f_pi, so use one route or the other, not both.

What is in which correction:

- pi and K: `radiative_pi_mu_nu` and `radiative_K_mu_nu` are the complete electroweak and electromagnetic
  corrections of the photon-inclusive widths, short distances included.
- D and D_s: the rate carries `electroweak_factor_charm` squared and a long-distance part of
  (1 + 0.7 `long_distance_em_D`) squared; that parameter's size is the relative shift of the semileptonic
  amplitude, of which the leptonic one is taken as 0.7 (1 % against 0.7 %).
- B and B_c: no electroweak factor (the convention of the lattice averages; it would add 1.3 %).
- tau: short-distance factor S_EW times (1 + a correction per mode).

Formulas: J. Rosner, S. Stone, R. Van de Water, "Leptonic Decays of Charged Pseudoscalar Mesons", review of
the Particle Data Group; W. Marciano, A. Sirlin, Phys. Rev. Lett. 71, 3629.
"""

from __future__ import annotations

import math

import numpy as np

from observables.catalogue import Real, parameter, quantity

REVIEW = (
    'J. Rosner, S. Stone, R. Van de Water, "Leptonic Decays of Charged Pseudoscalar Mesons", review of the '
    "Particle Data Group, arXiv:1509.02220"
)
LATTICE = "FLAG Review 2024, Y. Aoki et al., arXiv:2411.04268"
MARCIANO_SIRLIN = "W. Marciano, A. Sirlin, Phys. Rev. Lett. 71, 3629"
CIRIGLIANO_NEUFELD = "V. Cirigliano, H. Neufeld, Phys. Lett. B 700, 7, arXiv:1102.0563"
CIRIGLIANO_ROSELL = "V. Cirigliano, I. Rosell, Phys. Rev. Lett. 99, 231801, arXiv:0707.3439"
TAU_CORRECTIONS = "M. Arroyo-Urena et al., Phys. Rev. D 104, L091502, arXiv:2107.04603; arXiv:2112.01859"
SIRLIN = "A. Sirlin, Nucl. Phys. B 196, 83"

#: Long-distance electromagnetic shift of a charmed leptonic amplitude per shift of a semileptonic one.
LEPTONIC_SHARE_OF_LONG_DISTANCE = 0.7

# --- parameters -------------------------------------------------------------------------------------------

_DECAY_CONSTANTS = (
    # name, start, upper bound and step in GeV, title, latex, source of the start value
    ("decay_constant_pi", 0.1302, 1.0, 0.0008, "Decay constant of the charged pion", r"f_{\pi^\pm}", LATTICE),
    ("decay_constant_K", 0.1557, 1.0, 0.0003, "Decay constant of the charged kaon", r"f_{K^\pm}", LATTICE),
    ("decay_constant_D", 0.2120, 1.0, 0.0007, "Decay constant of the D+", r"f_D", LATTICE),
    ("decay_constant_Ds", 0.2499, 1.0, 0.0005, "Decay constant of the D_s+", r"f_{D_s}", LATTICE),
    ("decay_constant_B", 0.1900, 1.0, 0.0013, "Decay constant of the B+ and B0", r"f_B", LATTICE),
    ("decay_constant_Bs", 0.2303, 1.0, 0.0013, "Decay constant of the B_s", r"f_{B_s}", LATTICE),
    (
        "decay_constant_Bc",
        0.434,
        2.0,
        0.015,
        "Decay constant of the B_c+",
        r"f_{B_c}",
        "B. Colquhoun et al. (HPQCD), Phys. Rev. D 91, 114509, arXiv:1503.05762; value from memory",
    ),
)

for _name, _start, _upper, _scale, _title, _latex, _source in _DECAY_CONSTANTS:
    parameter(
        _name,
        unit="GeV",
        start=_start,
        lower=0.0,
        upper=_upper,
        scale=_scale,
        title=_title,
        latex=_latex,
        source=_source,
    )

parameter(
    "decay_constant_ratio_K_pi",
    unit="1",
    start=1.1934,
    lower=0.0,
    upper=5.0,
    scale=0.0019,
    title="Quotient of the decay constants of charged kaon and pion",
    latex=r"f_{K^\pm}/f_{\pi^\pm}",
    source=LATTICE,
)

_CORRECTIONS = (
    # name, start, step, title, latex, source of the start value
    (
        "radiative_pi_mu_nu",
        0.0176,
        0.0021,
        "Radiative correction of pi -> mu nu, electroweak and electromagnetic",
        r"\delta_\pi",
        MARCIANO_SIRLIN + "; value from memory",
    ),
    (
        "radiative_K_mu_nu",
        0.0107,
        0.0021,
        "Radiative correction of K -> mu nu, electroweak and electromagnetic",
        r"\delta_K",
        MARCIANO_SIRLIN + "; value from memory",
    ),
    (
        "radiative_K_pi_mu_nu",
        -0.0070,
        0.0018,
        "Electromagnetic correction of the quotient of K -> mu nu and pi -> mu nu",
        r"\delta_{K\pi}",
        CIRIGLIANO_NEUFELD + "; value from memory",
    ),
    (
        "radiative_e_mu_pi",
        1.2352e-4 / 1.283346e-4 - 1.0,
        8.0e-5,
        "Radiative correction of the quotient of pi -> e nu and pi -> mu nu",
        r"\delta_{e/\mu}^\pi",
        CIRIGLIANO_ROSELL + ", from R = 1.2352(1)e-4",
    ),
    (
        "radiative_e_mu_K",
        2.477e-5 / 2.568963e-5 - 1.0,
        4.0e-4,
        "Radiative correction of the quotient of K -> e nu and K -> mu nu",
        r"\delta_{e/\mu}^K",
        CIRIGLIANO_ROSELL + ", from R = 2.477(1)e-5",
    ),
    (
        "radiative_tau_pi_nu",
        -0.0024,
        0.0056,
        "Radiative correction of tau -> pi nu beyond the short-distance factor",
        r"\delta_{\tau\pi}",
        TAU_CORRECTIONS,
    ),
    (
        "radiative_tau_K_nu",
        -0.0015,
        0.0057,
        "Radiative correction of tau -> K nu beyond the short-distance factor",
        r"\delta_{\tau K}",
        TAU_CORRECTIONS,
    ),
    (
        "long_distance_em_D",
        0.0,
        0.01,
        "Unknown long-distance electromagnetic shift of semileptonic charm amplitudes",
        r"\delta_{\rm em}^D",
        LATTICE + ", section on D mesons: missing QED corrections, 1 % semileptonic, 0.7 % leptonic",
    ),
)

for _name, _start, _scale, _title, _latex, _source in _CORRECTIONS:
    parameter(
        _name,
        unit="1",
        start=_start,
        lower=-0.5,
        upper=0.5,
        scale=_scale,
        title=_title,
        latex=_latex,
        source=_source,
        fixed=True,
    )

parameter(
    "short_distance_factor_semileptonic",
    unit="1",
    start=1.0232,
    lower=0.9,
    upper=1.1,
    scale=0.0003,
    title="Short-distance electroweak factor of the rates of K -> pi l nu and tau -> P nu",
    latex=r"S_{EW}",
    source="W. Marciano, A. Sirlin, Phys. Rev. Lett. 56, 22; value from memory",
    fixed=True,
)


#: Mesons as they are written in titles.
_WRITTEN = {"pi": "pi", "K": "K", "D": "D+", "Ds": "D_s+", "Bu": "B+", "Bc": "B_c+"}

# --- pieces made of constants -----------------------------------------------------------------------------


def _rate_unit(
    fermi_constant: Real, reduced_planck_constant: Real, mass_meson: Real, mass_lepton: Real
) -> Real:
    """Rate of P -> l nu for f |V| = 1 GeV: G_F^2/(8 pi hbar) M m^2 (1 - m^2/M^2)^2, in 1/s."""
    return (
        fermi_constant**2
        / (8.0 * math.pi * reduced_planck_constant)
        * mass_meson
        * mass_lepton**2
        * (1.0 - (mass_lepton / mass_meson) ** 2) ** 2
    )


def _tau_rate_unit(
    fermi_constant: Real, reduced_planck_constant: Real, mass_meson: Real, mass_tau: Real
) -> Real:
    """Rate of tau -> P nu for f |V| = 1 GeV: G_F^2/(16 pi hbar) m_tau^3 (1 - M^2/m_tau^2)^2, in 1/s."""
    return (
        fermi_constant**2
        / (16.0 * math.pi * reduced_planck_constant)
        * mass_tau**3
        * (1.0 - (mass_meson / mass_tau) ** 2) ** 2
    )


for _meson, _lepton in (
    ("pi", "mu"),
    ("K", "mu"),
    ("D", "mu"),
    ("D", "tau"),
    ("Ds", "mu"),
    ("Ds", "tau"),
    ("Bu", "mu"),
    ("Bu", "tau"),
    ("Bc", "tau"),
):
    quantity(
        unit="1/s",
        name=f"rate_unit_{_meson}_{_lepton}_nu",
        ingredients={"mass_meson": f"mass_{_meson}", "mass_lepton": f"mass_{_lepton}"},
        title=f"Rate of {_WRITTEN[_meson]} -> {_lepton} nu for f |V| = 1 GeV",
        latex=r"G_F^2 M m^2 (1-m^2/M^2)^2/8\pi\hbar",
        source=REVIEW,
    )(_rate_unit)

for _meson in ("pi", "K"):
    quantity(
        unit="1/s",
        name=f"rate_unit_tau_{_meson}_nu",
        ingredients={"mass_meson": f"mass_{_meson}"},
        title=f"Rate of tau -> {_meson} nu for f |V| = 1 GeV",
        latex=r"G_F^2 m_\tau^3 (1-M^2/m_\tau^2)^2/16\pi\hbar",
        source=MARCIANO_SIRLIN,
    )(_tau_rate_unit)


@quantity(
    unit="1",
    title="Short-distance electroweak factor of charm amplitudes",
    latex=r"\eta_{EW}(m_D)",
    source=SIRLIN,
)
def electroweak_factor_charm(fine_structure_constant: Real, mass_Z: Real, mass_D: Real) -> Real:
    """1 + (alpha/pi) ln(m_Z/m_D) = 1.009 on the amplitude."""
    return 1.0 + fine_structure_constant / math.pi * np.log(mass_Z / mass_D)


@quantity(
    unit="1",
    title="Long-distance electromagnetic factor of leptonic charm amplitudes",
    latex=r"1+0.7\,\delta_{\rm em}^D",
    source=LATTICE,
)
def long_distance_factor_D_leptonic(long_distance_em_D: Real) -> Real:
    """1 + 0.7 long_distance_em_D on the amplitude."""
    return 1.0 + LEPTONIC_SHARE_OF_LONG_DISTANCE * long_distance_em_D


# --- pions and kaons --------------------------------------------------------------------------------------


@quantity(
    unit="1/s", title="Rate of pi -> mu nu (pi_mu2)", latex=r"\Gamma(\pi\to\mu\nu)", source=MARCIANO_SIRLIN
)
def width_pi_mu_nu(
    rate_unit_pi_mu_nu: Real, decay_constant_pi: Real, magnitude_V_ud: Real, radiative_pi_mu_nu: Real
) -> Real:
    """Photon-inclusive rate in 1/s: lowest order times (1 + delta_pi)."""
    coupling = decay_constant_pi * magnitude_V_ud
    return rate_unit_pi_mu_nu * (coupling * coupling) * (1.0 + radiative_pi_mu_nu)


@quantity(unit="1/s", title="Rate of K -> mu nu (K_mu2)", latex=r"\Gamma(K\to\mu\nu)", source=MARCIANO_SIRLIN)
def width_K_mu_nu(
    rate_unit_K_mu_nu: Real, decay_constant_K: Real, magnitude_V_us: Real, radiative_K_mu_nu: Real
) -> Real:
    """Photon-inclusive rate in 1/s: lowest order times (1 + delta_K)."""
    coupling = decay_constant_K * magnitude_V_us
    return rate_unit_K_mu_nu * (coupling * coupling) * (1.0 + radiative_K_mu_nu)


@quantity(
    unit="1",
    title="Quotient of the rates of K -> mu nu and pi -> mu nu (K_mu2 over pi_mu2)",
    latex=r"\Gamma(K\to\mu\nu)/\Gamma(\pi\to\mu\nu)",
    source="W. Marciano, Phys. Rev. Lett. 93, 231803; " + CIRIGLIANO_NEUFELD,
)
def ratio_K_pi_mu_nu(
    rate_unit_K_mu_nu: Real,
    rate_unit_pi_mu_nu: Real,
    decay_constant_ratio_K_pi: Real,
    magnitude_V_us: Real,
    magnitude_V_ud: Real,
    radiative_K_pi_mu_nu: Real,
) -> Real:
    """Gamma(K -> mu nu [gamma]) / Gamma(pi -> mu nu [gamma]): photon-inclusive rates, kaon over pion.

    `decay_constant_ratio_K_pi` is f_K+/f_pi+ of charged mesons, so the correction is electromagnetic only.
    """
    coupling = decay_constant_ratio_K_pi * magnitude_V_us / magnitude_V_ud
    phase_space = rate_unit_K_mu_nu / rate_unit_pi_mu_nu
    return phase_space * (coupling * coupling) * (1.0 + radiative_K_pi_mu_nu)


def _electron_over_muon(mass_meson: Real, mass_e: Real, mass_mu: Real, correction: Real) -> Real:
    """Gamma(P -> e nu)/Gamma(P -> mu nu) = (m_e/m_mu)^2 [(M^2-m_e^2)/(M^2-m_mu^2)]^2 (1 + correction)."""
    square = mass_meson**2
    lowest_order = (mass_e / mass_mu * (square - mass_e**2) / (square - mass_mu**2)) ** 2
    return lowest_order * (1.0 + correction)


for _meson, _latex in (("pi", r"\pi"), ("K", "K")):
    quantity(
        unit="1",
        name=f"ratio_e_mu_{_meson}",
        ingredients={"mass_meson": f"mass_{_meson}", "correction": f"radiative_e_mu_{_meson}"},
        title=f"Quotient of the rates of {_meson} -> e nu and {_meson} -> mu nu",
        latex=rf"\Gamma({_latex}\to e\nu)/\Gamma({_latex}\to\mu\nu)",
        source=CIRIGLIANO_ROSELL,
    )(_electron_over_muon)


# --- tau --------------------------------------------------------------------------------------------------


def _tau_branching(
    lifetime_tau: Real,
    rate_unit: Real,
    decay_constant: Real,
    magnitude: Real,
    short_distance_factor_semileptonic: Real,
    correction: Real,
) -> Real:
    """Photon-inclusive branching fraction of tau -> P nu: lowest order times S_EW (1 + correction)."""
    coupling = decay_constant * magnitude
    corrections = short_distance_factor_semileptonic * (1.0 + correction)
    return (lifetime_tau * rate_unit) * (coupling * coupling) * corrections


for _meson, _element, _latex in (("pi", "V_ud", r"\pi"), ("K", "V_us", "K")):
    quantity(
        unit="1",
        name=f"branching_tau_{_meson}_nu",
        ingredients={
            "rate_unit": f"rate_unit_tau_{_meson}_nu",
            "decay_constant": f"decay_constant_{_meson}",
            "magnitude": f"magnitude_{_element}",
            "correction": f"radiative_tau_{_meson}_nu",
        },
        title=f"Branching fraction of tau -> {_meson} nu",
        latex=rf"B(\tau\to {_latex}\nu)",
        source=TAU_CORRECTIONS,
    )(_tau_branching)


# --- charm ------------------------------------------------------------------------------------------------


def _charm_branching(
    lifetime: Real,
    rate_unit: Real,
    decay_constant: Real,
    magnitude: Real,
    electroweak_factor_charm: Real,
    long_distance_factor_D_leptonic: Real,
) -> Real:
    """Branching fraction: lifetime x lowest order x (eta_EW (1 + 0.7 delta_em))^2."""
    amplitude = decay_constant * magnitude * (electroweak_factor_charm * long_distance_factor_D_leptonic)
    return (lifetime * rate_unit) * (amplitude * amplitude)


for _meson, _element, _latex in (("D", "V_cd", "D^+"), ("Ds", "V_cs", "D_s^+")):
    for _lepton in ("mu", "tau"):
        quantity(
            unit="1",
            name=f"branching_{_meson}_{_lepton}_nu",
            ingredients={
                "lifetime": f"lifetime_{_meson}",
                "rate_unit": f"rate_unit_{_meson}_{_lepton}_nu",
                "decay_constant": f"decay_constant_{_meson}",
                "magnitude": f"magnitude_{_element}",
            },
            title=f"Branching fraction of {_WRITTEN[_meson]} -> {_lepton} nu",
            latex=rf"B({_latex}\to\{_lepton}\nu)",
            source=REVIEW + "; " + LATTICE,
        )(_charm_branching)


# --- beauty -----------------------------------------------------------------------------------------------


def _beauty_branching(lifetime: Real, rate_unit: Real, decay_constant: Real, magnitude: Real) -> Real:
    """Branching fraction: lifetime x lowest order, without an electroweak factor."""
    coupling = decay_constant * magnitude
    return (lifetime * rate_unit) * (coupling * coupling)


for _meson, _decay_constant, _element, _latex, _leptons in (
    ("Bu", "decay_constant_B", "V_ub", "B^+", ("tau", "mu")),
    ("Bc", "decay_constant_Bc", "V_cb", "B_c^+", ("tau",)),
):
    for _lepton in _leptons:
        quantity(
            unit="1",
            name=f"branching_{_meson}_{_lepton}_nu",
            ingredients={
                "lifetime": f"lifetime_{_meson}",
                "rate_unit": f"rate_unit_{_meson}_{_lepton}_nu",
                "decay_constant": _decay_constant,
                "magnitude": f"magnitude_{_element}",
            },
            title=f"Branching fraction of {_WRITTEN[_meson]} -> {_lepton} nu",
            latex=rf"B({_latex}\to\{_lepton}\nu)",
            source=REVIEW + "; " + LATTICE,
        )(_beauty_branching)
