r"""Mixing of the neutral kaon: the amplitude M12, and epsilon_K in its two forms.

Conventions
-----------
``M12 = <M| H |Mbar> / (2 m)`` with ``M = (d sbar)`` and phases of the states such that the box prefactor is positive
(CP|M> = -|Mbar>). Amplitudes are given in the invariant frame where ``lambda_u = V_ud V_us^*`` is real and positive,
in which Gamma12 is real (negative). The box gives the conjugate of ``lambda_i = V_id V_is^*``.

Only ``M12_K_top`` is short-distance enough to be replaced by a hypothesis.

Not included: the electroweak two-loop shift of the top part (about -0.7 % of epsilon_K; J. Brod, S. Kvedaraite,
Z. Polonsky, arXiv:2108.00017).

Sources: G. Buchalla, A. J. Buras, M. E. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996); J. Brod, M. Gorbahn,
E. Stamou, Phys. Rev. Lett. 125, 171803 (arXiv:1911.06822).
"""

from __future__ import annotations

import math

import numpy as np

from observables import loop_functions
from observables.catalogue import Complex, Real, parameter, quantity

_BUCHALLA = "G. Buchalla, A. Buras, M. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996)"
_INAMI_LIM = "T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297 (1981)"
_UP_TOP = "J. Brod, M. Gorbahn, E. Stamou, Phys. Rev. Lett. 125, 171803 (arXiv:1911.06822)"

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


@quantity(unit="1", title="Box function of the charm quark", latex=r"S_0(x_c)", source=_INAMI_LIM)
def box_function_charm(charm_mass_msbar: Real, mass_W: Real) -> Real:
    """Box function at ``x_c = (m_c(m_c)/M_W)^2``, dimensionless."""
    return loop_functions.box_function((charm_mass_msbar / mass_W) ** 2)


@quantity(unit="1", title="Box function of charm and top", latex=r"S_0(x_c, x_t)", source=_BUCHALLA)
def box_function_charm_top(charm_mass_msbar: Real, top_mass_msbar: Real, mass_W: Real) -> Real:
    """Box function with one charm and one top quark in the loop, dimensionless."""
    return loop_functions.box_function_mixed((charm_mass_msbar / mass_W) ** 2, (top_mass_msbar / mass_W) ** 2)


@quantity(
    unit="1",
    title="Product of matrix elements lambda_t of the kaon system, frame where lambda_u is real and positive",
    latex=r"\lambda_t",
    source=_BUCHALLA,
)
def kaon_product_top(V_td: Complex, V_ts: Complex, V_ud: Complex, V_us: Complex) -> Complex:
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
def kaon_product_up(V_ud: Complex, V_us: Complex) -> Real:
    """``|V_ud V_us^*|``, dimensionless."""
    return np.absolute(V_ud * V_us)


@quantity(
    unit="GeV",
    title="Strength of the kaon mixing amplitude, without loop functions and matrix elements",
    latex=r"G_F^2 M_W^2 F_K^2 \hat B_K m_K/12\pi^2",
    source=_BUCHALLA,
)
def mixing_strength_K(mixing_prefactor: Real, mass_K0: Real, decay_constant_K: Real, bag_K: Real) -> Real:
    """Factor ``G_F^2 M_W^2/(12 pi^2) F_K^2 B_K m_K`` of every part of M12 of the kaon, GeV."""
    return mixing_prefactor * mass_K0 * bag_K * decay_constant_K**2


@quantity(
    unit="GeV", title="Top part of the kaon mass-mixing amplitude", latex=r"M_{12}^{K,tt}", source=_UP_TOP
)
def M12_K_top(
    mixing_strength_K: Real,
    short_distance_factor_top_top: Real,
    box_function_top: Real,
    box_function_charm: Real,
    box_function_charm_top: Real,
    kaon_product_top: Complex,
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
    mixing_strength_K: Real,
    short_distance_factor_up_top: Real,
    box_function_charm: Real,
    box_function_charm_top: Real,
    kaon_product_top: Complex,
    kaon_product_up: Real,
) -> Complex:
    """Part of M12 of the kaon proportional to ``lambda_u lambda_t^*`` in the up-top form, GeV, complex.

    Frame where ``lambda_u`` is real. Its loop function is ``S0(x_c) - S0(x_c, x_t)``, negative.
    """
    loop = box_function_charm - box_function_charm_top
    strength = 2 * mixing_strength_K * short_distance_factor_up_top
    return strength * loop * kaon_product_up * np.conjugate(kaon_product_top)


@quantity(unit="GeV", title="Mass-mixing amplitude of the kaon", latex=r"M_{12}^K", source=_UP_TOP)
def M12_K(M12_K_top: Complex, M12_K_up_top: Complex) -> Complex:
    """Off-diagonal element of the kaon mass matrix in the frame where ``lambda_u`` is real, GeV, complex.

    The part proportional to ``lambda_u^2``, real in this frame and dominated by long distances, is left out:
    the imaginary part is complete, the real part is not half the mass difference.
    """
    return M12_K_top + M12_K_up_top


@quantity(unit="1", title="CP violation in kaon mixing", latex=r"\epsilon_K", source=_UP_TOP, cp="odd")
def epsilon_K(long_distance_factor_epsilon_K: Real, M12_K: Complex, mass_difference_K: Real) -> Real:
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
    mixing_strength_K: Real,
    short_distance_factor_charm_charm: Real,
    short_distance_factor_charm_top: Real,
    short_distance_factor_top_top_charm_form: Real,
    box_function_charm: Real,
    box_function_charm_top: Real,
    box_function_top: Real,
    kaon_product_top: Complex,
    kaon_product_charm: Complex,
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
def kaon_product_charm(V_cd: Complex, V_cs: Complex, V_ud: Complex, V_us: Complex) -> Complex:
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
    long_distance_factor_epsilon_K: Real, M12_K_charm_top: Complex, mass_difference_K: Real
) -> Real:
    """As `epsilon_K`, from the charm-top form with its own short-distance factors; CP-odd.

    Sign: positive for eta-bar > 0. An alternative for comparisons; never use both in one fit, and do not mix
    the short-distance factors of the two forms.
    """
    return long_distance_factor_epsilon_K * np.imag(M12_K_charm_top) / (math.sqrt(2) * mass_difference_K)
