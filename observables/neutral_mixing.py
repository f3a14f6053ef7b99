r"""Mixing of neutral mesons: off-diagonal mass-matrix elements, oscillation frequencies and epsilon_K.

Conventions
-----------
``M12 = <M| H |Mbar> / (2 m)`` with ``M = (d sbar), (bbar d), (bbar s)`` and phases of the states such that
the box prefactor is positive (CP|M> = -|Mbar>). Amplitudes are given in invariant frames, so that rephasing
the quark fields moves nothing:

- B_q: the frame where ``V_cb V_cq^*`` is real. There ``arg M12`` is ``2 beta`` for B_d and ``-2 beta_s`` for
  B_s.
- K: the frame where ``lambda_u = V_ud V_us^*`` is real and positive, in which Gamma12 is real (negative).

``box_amplitude_B*`` is the standard short-distance amplitude; ``M12_B*`` equals it unless a hypothesis on
mixing replaces it. In the kaon system only ``M12_K_top`` is short-distance enough to be replaced.

Not included: the electroweak two-loop shift of the top part (about -0.7 % of epsilon_K; J. Brod, S.
Kvedaraite, Z. Polonsky, arXiv:2108.00017).

Sources
-------
G. Buchalla, A. J. Buras, M. E. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996); J. Brod, M. Gorbahn, E. Stamou,
Phys. Rev. Lett. 125, 171803 (arXiv:1911.06822).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from observables import loop_functions
from observables.catalogue import Complex, Real, parameter, quantity

_BUCHALLA = "G. Buchalla, A. Buras, M. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996)"
_INAMI_LIM = "T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297 (1981)"
_UP_TOP = "J. Brod, M. Gorbahn, E. Stamou, Phys. Rev. Lett. 125, 171803 (arXiv:1911.06822)"

parameter(
    "mixing_matrix_element_Bs",
    unit="GeV",
    start=0.2561,
    lower=0.05,
    upper=1.0,
    scale=0.0057,
    title="B_s mixing matrix element: decay constant times root of the invariant bag parameter",
    latex=r"f_{B_s}\sqrt{\hat B_{B_s}}",
    source="FLAG Review 2024 (arXiv:2411.04268), 2+1+1 flavours",
)
parameter(
    "mixing_matrix_element_ratio",
    unit="1",
    start=1.216,
    lower=0.5,
    upper=3.0,
    scale=0.016,
    title="Ratio of the B_s and B_d mixing matrix elements",
    latex=r"\xi",
    source="FLAG Review 2024 (arXiv:2411.04268), 2+1+1 flavours",
)
parameter(
    "bag_K",
    unit="1",
    start=0.7533,
    lower=0.1,
    upper=2.0,
    scale=0.0091,
    title="Kaon bag parameter, renormalisation-group invariant",
    latex=r"\hat B_K",
    source="FLAG Review 2024 (arXiv:2411.04268), 2+1 flavours",
)
parameter(
    "top_mass_msbar",
    unit="GeV",
    start=163.0,
    lower=100.0,
    upper=250.0,
    scale=0.6,
    title="Top-quark MSbar mass at its own scale",
    latex=r"m_t(m_t)",
    source="PDG 2026 direct measurements 172.60(27) GeV (Q007TP), converted with three loops",
)
parameter(
    "charm_mass_msbar",
    unit="GeV",
    start=1.278,
    lower=0.5,
    upper=3.0,
    scale=0.013,
    title="Charm-quark MSbar mass at its own scale",
    latex=r"m_c(m_c)",
    source="FLAG Review 2021 (arXiv:2111.09849), 2+1+1 flavours; value from memory",
)
parameter(
    "short_distance_factor_B",
    unit="1",
    start=0.5510,
    lower=0.1,
    upper=2.0,
    scale=0.0022,
    title="Short-distance factor of B mixing (for the renormalisation-group invariant bag parameter)",
    latex=r"\hat\eta_B",
    source="A. Buras, M. Jamin, P. Weisz, Nucl. Phys. B 347, 491 (1990); value from memory",
)
parameter(
    "short_distance_factor_top_top",
    unit="1",
    start=0.550,
    lower=0.05,
    upper=2.0,
    scale=0.023,
    title="Short-distance factor of the top part of kaon mixing, up-top form",
    latex=r"\eta_{tt}",
    source=_UP_TOP + "; value from memory",
)
parameter(
    "short_distance_factor_up_top",
    unit="1",
    start=0.402,
    lower=0.05,
    upper=2.0,
    scale=0.005,
    title="Short-distance factor of the up-top part of kaon mixing",
    latex=r"\eta_{ut}",
    source=_UP_TOP + "; value from memory",
)
parameter(
    "long_distance_factor_epsilon_K",
    unit="1",
    start=0.94,
    lower=0.5,
    upper=1.5,
    scale=0.02,
    title="Factor of epsilon_K for its phase and for long-distance effects",
    latex=r"\kappa_\epsilon",
    source="A. Buras, D. Guadagnoli, G. Isidori, Phys. Lett. B 688, 309 (arXiv:1002.3612)",
)
parameter(
    "short_distance_factor_charm_charm",
    unit="1",
    start=1.87,
    lower=-5.0,
    upper=10.0,
    scale=0.76,
    title="Short-distance factor of the charm part of kaon mixing, charm-top form",
    latex=r"\eta_{cc}",
    source="J. Brod, M. Gorbahn, Phys. Rev. Lett. 108, 121801 (arXiv:1108.2036)",
)
parameter(
    "short_distance_factor_charm_top",
    unit="1",
    start=0.496,
    lower=-1.0,
    upper=3.0,
    scale=0.047,
    title="Short-distance factor of the charm-top part of kaon mixing",
    latex=r"\eta_{ct}",
    source="J. Brod, M. Gorbahn, Phys. Rev. D 82, 094026 (arXiv:1007.0684)",
)
parameter(
    "short_distance_factor_top_top_charm_form",
    unit="1",
    start=0.5765,
    lower=0.05,
    upper=2.0,
    scale=0.0065,
    title="Short-distance factor of the top part of kaon mixing, charm-top form",
    latex=r"\eta_{tt}^{(ct)}",
    source="A. Buras, M. Jamin, P. Weisz, Nucl. Phys. B 347, 491 (1990); value from memory",
)


# Loop functions of the running masses: shared by B and K, and folded when the masses are held fixed.


@quantity(unit="1", title="Box function of the top quark", latex=r"S_0(x_t)", source=_INAMI_LIM)
def box_function_top(top_mass_msbar: Any, mass_W: Any) -> Real:
    """Box function at ``x_t = (m_t(m_t)/M_W)^2``, dimensionless."""
    return loop_functions.box_function((top_mass_msbar / mass_W) ** 2)


@quantity(unit="1", title="Box function of the charm quark", latex=r"S_0(x_c)", source=_INAMI_LIM)
def box_function_charm(charm_mass_msbar: Any, mass_W: Any) -> Real:
    """Box function at ``x_c = (m_c(m_c)/M_W)^2``, dimensionless."""
    return loop_functions.box_function((charm_mass_msbar / mass_W) ** 2)


@quantity(unit="1", title="Box function of charm and top", latex=r"S_0(x_c, x_t)", source=_BUCHALLA)
def box_function_charm_top(charm_mass_msbar: Any, top_mass_msbar: Any, mass_W: Any) -> Real:
    """Box function with one charm and one top quark in the loop, dimensionless."""
    return loop_functions.box_function_mixed((charm_mass_msbar / mass_W) ** 2, (top_mass_msbar / mass_W) ** 2)


@quantity(
    unit="GeV^-2", title="Prefactor of the box amplitudes", latex=r"G_F^2 M_W^2/12\pi^2", source=_BUCHALLA
)
def mixing_prefactor(fermi_constant: Any, mass_W: Any) -> Real:
    """Common factor ``G_F^2 M_W^2 / (12 pi^2)`` of the mixing amplitudes, GeV^-2."""
    return (fermi_constant * mass_W) ** 2 / (12 * math.pi**2)


# B_d and B_s


@quantity(
    unit="GeV",
    title="B_d mixing matrix element: decay constant times root of the bag parameter",
    latex=r"f_{B_d}\sqrt{\hat B_{B_d}}",
    source="FLAG Review 2024 (arXiv:2411.04268), definition of the ratio xi",
)
def mixing_matrix_element_Bd(mixing_matrix_element_Bs: Any, mixing_matrix_element_ratio: Any) -> Real:
    """Matrix element of B_d, GeV: that of B_s divided by the ratio, the pair that correlates least."""
    return mixing_matrix_element_Bs / mixing_matrix_element_ratio


def _box_amplitude_B(strength: Any, V_tb: Any, V_tq: Any, V_cb: Any, V_cq: Any) -> Any:
    """``strength * (V_tb V_tq^*)^2`` in the frame where ``V_cb V_cq^*`` is real."""
    reference = V_cb * np.conjugate(V_cq)
    product = V_tb * np.conjugate(V_tq * reference)
    # The strength comes last: until then the derivatives are those of the matrix elements alone.
    return (product * product) / (reference.real**2 + reference.imag**2) * strength


@quantity(
    unit="GeV",
    title="Strength of the B_d box amplitude, without matrix elements",
    latex=r"M_{12}^d/(V_{tb}V_{td}^*)^2",
    source=_BUCHALLA,
)
def box_strength_Bd(
    mixing_prefactor: Any,
    mass_Bd: Any,
    mixing_matrix_element_Bd: Any,
    short_distance_factor_B: Any,
    box_function_top: Any,
) -> Real:
    """Short-distance factor ``G_F^2 M_W^2/(12 pi^2) m f^2 B eta_B S0(x_t)``, GeV, real and positive."""
    return (
        mixing_prefactor * mass_Bd * short_distance_factor_B * box_function_top * mixing_matrix_element_Bd**2
    )


@quantity(
    unit="GeV",
    title="Strength of the B_s box amplitude, without matrix elements",
    latex=r"M_{12}^s/(V_{tb}V_{ts}^*)^2",
    source=_BUCHALLA,
)
def box_strength_Bs(
    mixing_prefactor: Any,
    mass_Bs: Any,
    mixing_matrix_element_Bs: Any,
    short_distance_factor_B: Any,
    box_function_top: Any,
) -> Real:
    """Short-distance factor ``G_F^2 M_W^2/(12 pi^2) m f^2 B eta_B S0(x_t)``, GeV, real and positive."""
    return (
        mixing_prefactor * mass_Bs * short_distance_factor_B * box_function_top * mixing_matrix_element_Bs**2
    )


@quantity(
    unit="GeV",
    title="Standard box amplitude of B_d mixing",
    latex=r"M_{12}^{d,\mathrm{box}}",
    source=_BUCHALLA,
)
def box_amplitude_Bd(box_strength_Bd: Any, V_tb: Any, V_td: Any, V_cb: Any, V_cd: Any) -> Complex:
    """Standard short-distance amplitude of B_d mixing, GeV, complex; the CP operation conjugates it.

    Frame where ``V_cb V_cd^*`` is real: the argument is ``+2 beta``. Never replaced by a mixing hypothesis.
    """
    return _box_amplitude_B(box_strength_Bd, V_tb, V_td, V_cb, V_cd)


@quantity(
    unit="GeV",
    title="Standard box amplitude of B_s mixing",
    latex=r"M_{12}^{s,\mathrm{box}}",
    source=_BUCHALLA,
)
def box_amplitude_Bs(box_strength_Bs: Any, V_tb: Any, V_ts: Any, V_cb: Any, V_cs: Any) -> Complex:
    """Standard short-distance amplitude of B_s mixing, GeV, complex; the CP operation conjugates it.

    Frame where ``V_cb V_cs^*`` is real: the argument is ``-2 beta_s``. Never replaced by a mixing hypothesis.
    """
    return _box_amplitude_B(box_strength_Bs, V_tb, V_ts, V_cb, V_cs)


@quantity(unit="GeV", title="Mass-mixing amplitude of B_d", latex=r"M_{12}^d", source=_BUCHALLA)
def M12_Bd(box_amplitude_Bd: Any) -> Complex:
    """Off-diagonal element of the B_d mass matrix, GeV, complex; frame and sign of `box_amplitude_Bd`.

    The box amplitude, unless a hypothesis replaces it.
    """
    return box_amplitude_Bd


@quantity(unit="GeV", title="Mass-mixing amplitude of B_s", latex=r"M_{12}^s", source=_BUCHALLA)
def M12_Bs(box_amplitude_Bs: Any) -> Complex:
    """Off-diagonal element of the B_s mass matrix, GeV, complex; frame and sign of `box_amplitude_Bs`.

    The box amplitude, unless a hypothesis replaces it.
    """
    return box_amplitude_Bs


@quantity(unit="1/ps", title="B_d oscillation frequency", latex=r"\Delta m_d", source=_BUCHALLA)
def mixing_frequency_Bd(M12_Bd: Any, reduced_planck_constant: Any) -> Real:
    """Mass difference ``2 |M12| / hbar`` of the B_d eigenstates, 1/ps; Gamma12^2/M12^2 is neglected."""
    return 2e-12 * np.absolute(M12_Bd) / reduced_planck_constant


@quantity(unit="1/ps", title="B_s oscillation frequency", latex=r"\Delta m_s", source=_BUCHALLA)
def mixing_frequency_Bs(M12_Bs: Any, reduced_planck_constant: Any) -> Real:
    """Mass difference ``2 |M12| / hbar`` of the B_s eigenstates, 1/ps; Gamma12^2/M12^2 is neglected."""
    return 2e-12 * np.absolute(M12_Bs) / reduced_planck_constant


@quantity(
    unit="deg",
    title="B_d mixing phase",
    latex=r"\phi_d",
    source="PDG review CP Violation in the Quark Sector (T. Gershon, Y. Nir)",
    cp="odd",
    period=360.0,
)
def mixing_phase_Bd(M12_Bd: Any) -> Real:
    """Argument of M12 of B_d in the frame where ``V_cb V_cd^*`` is real, deg, in (-180, 180]; CP-odd.

    Sign: ``+2 beta`` in the standard model, about 45 deg; ``q/p = -exp(-i phase)`` in these conventions.
    """
    return np.angle(M12_Bd) * (180 / math.pi)


@quantity(
    unit="deg",
    title="B_s mixing phase",
    latex=r"\phi_s^{\mathrm{mix}}",
    source="PDG review CP Violation in the Quark Sector (T. Gershon, Y. Nir)",
    cp="odd",
    period=360.0,
)
def mixing_phase_Bs(M12_Bs: Any) -> Real:
    """Argument of M12 of B_s in the frame where ``V_cb V_cs^*`` is real, deg, in (-180, 180]; CP-odd.

    Sign: ``-2 beta_s`` in the standard model, about -2 deg.
    """
    return np.angle(M12_Bs) * (180 / math.pi)


# Kaons. lambda_i = V_id V_is^*; the box gives its conjugate because the kaon is (d sbar).


@quantity(
    unit="1",
    title="Product of matrix elements lambda_t of the kaon system, frame where lambda_u is real and positive",
    latex=r"\lambda_t",
    source=_BUCHALLA,
)
def kaon_product_top(V_td: Any, V_ts: Any, V_ud: Any, V_us: Any) -> Complex:
    """``V_td V_ts^*`` multiplied by the phase that makes ``V_ud V_us^*`` real and positive; dimensionless.

    Its imaginary part is ``J/|V_ud V_us|``, positive for eta-bar > 0; the CP operation conjugates it.
    """
    lambda_u = V_ud * np.conjugate(V_us)
    return V_td * np.conjugate(V_ts * lambda_u) / np.absolute(lambda_u)


@quantity(
    unit="1",
    title="Modulus of the product of matrix elements lambda_u of the kaon system",
    latex=r"|\lambda_u|",
    source=_BUCHALLA,
)
def kaon_product_up(V_ud: Any, V_us: Any) -> Real:
    """``|V_ud V_us^*|``, dimensionless."""
    return np.absolute(V_ud * V_us)


@quantity(
    unit="GeV",
    title="Strength of the kaon mixing amplitude, without loop functions and matrix elements",
    latex=r"G_F^2 M_W^2 F_K^2 \hat B_K m_K/12\pi^2",
    source=_BUCHALLA,
)
def mixing_strength_K(mixing_prefactor: Any, mass_K0: Any, decay_constant_K: Any, bag_K: Any) -> Real:
    """Factor ``G_F^2 M_W^2/(12 pi^2) F_K^2 B_K m_K`` of every part of M12 of the kaon, GeV."""
    return mixing_prefactor * mass_K0 * bag_K * decay_constant_K**2


@quantity(
    unit="GeV", title="Top part of the kaon mass-mixing amplitude", latex=r"M_{12}^{K,tt}", source=_UP_TOP
)
def M12_K_top(
    mixing_strength_K: Any,
    short_distance_factor_top_top: Any,
    box_function_top: Any,
    box_function_charm: Any,
    box_function_charm_top: Any,
    kaon_product_top: Any,
) -> Complex:
    """Part of M12 of the kaon proportional to ``(lambda_t^*)^2`` in the up-top form, GeV, complex.

    Frame where ``lambda_u`` is real. Its loop function is ``S0(x_t) + S0(x_c) - 2 S0(x_c, x_t)``. The only
    part that a hypothesis on kaon mixing replaces.
    """
    loop = box_function_top + box_function_charm - 2 * box_function_charm_top
    return mixing_strength_K * short_distance_factor_top_top * loop * np.conjugate(kaon_product_top) ** 2


@quantity(
    unit="GeV", title="Up-top part of the kaon mass-mixing amplitude", latex=r"M_{12}^{K,ut}", source=_UP_TOP
)
def M12_K_up_top(
    mixing_strength_K: Any,
    short_distance_factor_up_top: Any,
    box_function_charm: Any,
    box_function_charm_top: Any,
    kaon_product_top: Any,
    kaon_product_up: Any,
) -> Complex:
    """Part of M12 of the kaon proportional to ``lambda_u lambda_t^*`` in the up-top form, GeV, complex.

    Frame where ``lambda_u`` is real. Its loop function is ``S0(x_c) - S0(x_c, x_t)``, negative.
    """
    loop = box_function_charm - box_function_charm_top
    strength = 2 * mixing_strength_K * short_distance_factor_up_top
    return strength * loop * kaon_product_up * np.conjugate(kaon_product_top)


@quantity(unit="GeV", title="Mass-mixing amplitude of the kaon", latex=r"M_{12}^K", source=_UP_TOP)
def M12_K(M12_K_top: Any, M12_K_up_top: Any) -> Complex:
    """Off-diagonal element of the kaon mass matrix in the frame where ``lambda_u`` is real, GeV, complex.

    The part proportional to ``lambda_u^2``, real in this frame and dominated by long distances, is left out:
    the imaginary part is complete, the real part is not half the mass difference.
    """
    return M12_K_top + M12_K_up_top


@quantity(unit="1", title="CP violation in kaon mixing", latex=r"\epsilon_K", source=_UP_TOP, cp="odd")
def epsilon_K(long_distance_factor_epsilon_K: Any, M12_K: Any, mass_difference_K: Any) -> Real:
    r"""Size of CP violation in kaon mixing with a sign, dimensionless: positive for eta-bar > 0; CP-odd.

    :math:`\epsilon_K = \kappa_\epsilon\, \mathrm{Im} M_{12} / (\sqrt2\, \Delta m_K)` with the measured mass
    difference and the up-top unitarity form of M12. The factor :math:`\kappa_\epsilon` contains
    :math:`\sqrt2 \sin\phi_\epsilon` (0.974) and the long-distance parts. What is measured is the modulus,
    and the sign is that of the real part.
    """
    return long_distance_factor_epsilon_K * np.imag(M12_K) / (math.sqrt(2) * mass_difference_K)


@quantity(
    unit="GeV",
    title="Mass-mixing amplitude of the kaon, charm-top form",
    latex=r"M_{12}^{K(ct)}",
    source=_BUCHALLA,
)
def M12_K_charm_top(
    mixing_strength_K: Any,
    short_distance_factor_charm_charm: Any,
    short_distance_factor_charm_top: Any,
    short_distance_factor_top_top_charm_form: Any,
    box_function_charm: Any,
    box_function_charm_top: Any,
    box_function_top: Any,
    kaon_product_top: Any,
    kaon_product_charm: Any,
) -> Complex:
    """Short-distance M12 of the kaon with ``lambda_u`` eliminated, GeV, complex.

    Frame where ``lambda_u`` is real. Standard amplitude only: a hypothesis on kaon mixing acts on `M12_K_top`
    and does not move this one.
    """
    charm, top = np.conjugate(kaon_product_charm), np.conjugate(kaon_product_top)
    return mixing_strength_K * (
        short_distance_factor_charm_charm * box_function_charm * charm**2
        + short_distance_factor_top_top_charm_form * box_function_top * top**2
        + 2 * short_distance_factor_charm_top * box_function_charm_top * charm * top
    )


@quantity(
    unit="1",
    title="Product of matrix elements lambda_c of the kaon system, frame where lambda_u is real and positive",
    latex=r"\lambda_c",
    source=_BUCHALLA,
)
def kaon_product_charm(V_cd: Any, V_cs: Any, V_ud: Any, V_us: Any) -> Complex:
    """``V_cd V_cs^*`` multiplied by the phase that makes ``V_ud V_us^*`` real and positive; dimensionless.

    Its imaginary part is ``-J/|V_ud V_us|``; the CP operation conjugates it.
    """
    lambda_u = V_ud * np.conjugate(V_us)
    return V_cd * np.conjugate(V_cs * lambda_u) / np.absolute(lambda_u)


@quantity(
    unit="1",
    title="CP violation in kaon mixing, charm-top form",
    latex=r"\epsilon_K^{(ct)}",
    source="J. Brod, M. Gorbahn, Phys. Rev. Lett. 108, 121801 (arXiv:1108.2036)",
    cp="odd",
)
def epsilon_K_charm_top(
    long_distance_factor_epsilon_K: Any, M12_K_charm_top: Any, mass_difference_K: Any
) -> Real:
    """As `epsilon_K`, from the charm-top form with its own short-distance factors; CP-odd.

    Sign: positive for eta-bar > 0. An alternative for comparisons; never use both in one fit, and do not mix
    the short-distance factors of the two forms.
    """
    return long_distance_factor_epsilon_K * np.imag(M12_K_charm_top) / (math.sqrt(2) * mass_difference_K)
