"""Semileptonic decays: K -> pi l nu, and D -> K, pi l nu at zero momentum transfer.

Kaons (V. Cirigliano et al., Rev. Mod. Phys. 84, 399, section III):

    Gamma(K -> pi l nu [gamma]) = C^2 G_F^2 M_K^5/(192 pi^3) S_EW |V_us|^2 f_+(0)^2 I
                                  x (1 + delta_EM + delta_SU2)

with C^2 = 1 for K_L and K_S (sum over both charge states) and 1/2 for K+; f_+(0) is that of K0 -> pi- for all
modes; delta_SU2 = 2 `isospin_breaking_K_pi` applies to K+ only. The phase-space integrals I stand in
`kaon_phase_space.py`; quantities whose names end in `_quadratic` use its quadratic form factors.

Charm: `product_D_K` and `product_D_pi` are f_+(0) |V| *times the electroweak factor* 1.009, because the
measured products of the Heavy Flavor Averaging Group contain it, and times (1 + `long_distance_em_D`).
"""

from __future__ import annotations

import math

from observables.catalogue import Real, parameter, quantity
from observables.kaon_phase_space import KAON_REVIEW, LEPTONS

ELECTROMAGNETIC = (
    "C.-Y. Seng, D. Galviz, M. Gorchtein, U.-G. Meissner, JHEP 07 (2022) 071, arXiv:2203.05217; "
    "value from memory"
)
LATTICE = "FLAG Review 2024, Y. Aoki et al., arXiv:2411.04268"

# --- parameters -------------------------------------------------------------------------------------------

_FORM_FACTORS = (
    # name, start, step, title, latex
    ("form_factor_K_pi", 0.9698, 0.0017, "f_+(0) of K0 -> pi-", r"f_+^{K\pi}(0)"),
    ("form_factor_D_K", 0.7430, 0.0027, "f_+(0) of D -> K", r"f_+^{DK}(0)"),
    ("form_factor_D_pi", 0.6296, 0.0050, "f_+(0) of D -> pi", r"f_+^{D\pi}(0)"),
)

for _name, _start, _scale, _title, _latex in _FORM_FACTORS:
    parameter(
        _name,
        unit="1",
        start=_start,
        lower=0.0,
        upper=2.0,
        scale=_scale,
        title=_title,
        latex=_latex,
        source=LATTICE,
    )

_CORRECTIONS = (
    # name, start, step, title, latex, source of the start value
    (
        "radiative_K0_pi_e_nu",
        0.0116,
        0.0003,
        "Electromagnetic correction of the rate of K0 -> pi e nu",
        r"\delta_{EM}^{K^0e}",
        ELECTROMAGNETIC,
    ),
    (
        "radiative_K0_pi_mu_nu",
        0.0154,
        0.0004,
        "Electromagnetic correction of the rate of K0 -> pi mu nu",
        r"\delta_{EM}^{K^0\mu}",
        ELECTROMAGNETIC,
    ),
    (
        "radiative_K_pi0_e_nu",
        0.0021,
        0.0005,
        "Electromagnetic correction of the rate of K+ -> pi0 e nu",
        r"\delta_{EM}^{K^+e}",
        ELECTROMAGNETIC,
    ),
    (
        "radiative_K_pi0_mu_nu",
        0.0005,
        0.0005,
        "Electromagnetic correction of the rate of K+ -> pi0 mu nu",
        r"\delta_{EM}^{K^+\mu}",
        ELECTROMAGNETIC,
    ),
    (
        "isospin_breaking_K_pi",
        0.0252,
        0.0011,
        "Isospin breaking of the K+ -> pi0 amplitude at zero momentum transfer",
        r"\Delta_{SU(2)}",
        "M. Moulson, E. Passemar, CKM 2021 conference; value from memory",
    ),
)

for _name, _start, _scale, _title, _latex, _source in _CORRECTIONS:
    parameter(
        _name,
        unit="1",
        start=_start,
        lower=-0.2,
        upper=0.2,
        scale=_scale,
        title=_title,
        latex=_latex,
        source=_source,
        fixed=True,
    )

# --- kaon branching fractions -----------------------------------------------------------------------------


@quantity(
    unit="1",
    title="f_+(0) |V_us| of K0 -> pi-",
    latex=r"f_+^{K\pi}(0)|V_{us}|",
    source=KAON_REVIEW,
)
def product_K_pi(form_factor_K_pi: Real, magnitude_V_us: Real) -> Real:
    """Form factor at zero momentum transfer times |V_us|."""
    return form_factor_K_pi * magnitude_V_us


@quantity(unit="1/s", title="Rate unit of K0 -> pi l nu", latex=r"G_F^2M^5/192\pi^3\hbar", source=KAON_REVIEW)
def rate_unit_K0_pi_l_nu(fermi_constant: Real, reduced_planck_constant: Real, mass_K0: Real) -> Real:
    """G_F^2 M^5/(192 pi^3 hbar), in 1/s: both charge states together."""
    return fermi_constant**2 * mass_K0**5 / (192.0 * math.pi**3 * reduced_planck_constant)


@quantity(
    unit="1/s", title="Rate unit of K+ -> pi0 l nu", latex=r"G_F^2M^5/384\pi^3\hbar", source=KAON_REVIEW
)
def rate_unit_K_pi0_l_nu(fermi_constant: Real, reduced_planck_constant: Real, mass_K: Real) -> Real:
    """G_F^2 M^5/(384 pi^3 hbar), in 1/s: the pi0 costs a factor of two."""
    return fermi_constant**2 * mass_K**5 / (384.0 * math.pi**3 * reduced_planck_constant)


def _neutral_branching(
    lifetime: Real,
    rate_unit_K0_pi_l_nu: Real,
    short_distance_factor_semileptonic: Real,
    product_K_pi: Real,
    integral: Real,
    radiative: Real,
) -> Real:
    """Branching fraction of a neutral kaon, photons included, both charge states together."""
    factor = lifetime * rate_unit_K0_pi_l_nu * short_distance_factor_semileptonic * (1.0 + radiative)
    return factor * (product_K_pi * product_K_pi) * integral


def _charged_branching(
    lifetime: Real,
    rate_unit_K_pi0_l_nu: Real,
    short_distance_factor_semileptonic: Real,
    product_K_pi: Real,
    integral: Real,
    radiative: Real,
    isospin_breaking_K_pi: Real,
) -> Real:
    """Branching fraction of a charged kaon, photons included."""
    corrections = 1.0 + radiative + 2.0 * isospin_breaking_K_pi
    factor = lifetime * rate_unit_K_pi0_l_nu * short_distance_factor_semileptonic * corrections
    return factor * (product_K_pi * product_K_pi) * integral


for _suffix, _form in (("", "dispersive"), ("_quadratic", "quadratic")):
    for _lepton, _lepton_latex in LEPTONS.items():
        for _kaon, _written in (("KL", "K_L"), ("KS", "K_S")):
            quantity(
                unit="1",
                name=f"branching_{_kaon}_pi_{_lepton}_nu{_suffix}",
                ingredients={
                    "lifetime": f"lifetime_{_kaon}",
                    "integral": f"phase_space_K0_pi_{_lepton}_nu{_suffix}",
                    "radiative": f"radiative_K0_pi_{_lepton}_nu",
                },
                title=f"Branching fraction of {_written} -> pi {_lepton} nu (K_l3), {_form} form factors",
                latex=rf"B({_written}\to\pi {_lepton_latex}\nu)",
                source=KAON_REVIEW,
            )(_neutral_branching)
        quantity(
            unit="1",
            name=f"branching_K_pi0_{_lepton}_nu{_suffix}",
            ingredients={
                "lifetime": "lifetime_K",
                "integral": f"phase_space_K_pi0_{_lepton}_nu{_suffix}",
                "radiative": f"radiative_K_pi0_{_lepton}_nu",
            },
            title=f"Branching fraction of K+ -> pi0 {_lepton} nu (K_l3), {_form} form factors",
            latex=rf"B(K^+\to\pi^0 {_lepton_latex}\nu)",
            source=KAON_REVIEW,
        )(_charged_branching)


# --- charm at zero momentum transfer ----------------------------------------------------------------------


@quantity(
    unit="1",
    title="Electroweak and long-distance factor of semileptonic charm amplitudes",
    latex=r"\eta_{EW}(1+\delta_{\rm em}^D)",
    source="A. Sirlin, Nucl. Phys. B 196, 83; " + LATTICE,
)
def amplitude_factor_D_semileptonic(electroweak_factor_charm: Real, long_distance_em_D: Real) -> Real:
    """eta_EW (1 + long_distance_em_D)."""
    return electroweak_factor_charm * (1.0 + long_distance_em_D)


def _charm_product(amplitude_factor_D_semileptonic: Real, form_factor: Real, magnitude: Real) -> Real:
    """f_+(0) |V| as experiments quote it: electroweak factor (1.009) and long-distance shift included."""
    return amplitude_factor_D_semileptonic * (form_factor * magnitude)


for _meson, _element, _latex in (("K", "V_cs", "K"), ("pi", "V_cd", r"\pi")):
    quantity(
        unit="1",
        name=f"product_D_{_meson}",
        ingredients={"form_factor": f"form_factor_D_{_meson}", "magnitude": f"magnitude_{_element}"},
        title=f"f_+(0) |{_element}| of D -> {_meson} l nu, electroweak factor included",
        latex=rf"\eta_{{EW}}f_+^{{D{_latex}}}(0)|V_{{{_element[2:]}}}|",
        source="Heavy Flavor Averaging Group, S. Banerjee et al., arXiv:2411.18639; " + LATTICE,
    )(_charm_product)
