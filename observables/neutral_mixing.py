r"""Mixing of B_d and B_s: off-diagonal mass-matrix elements, phases and oscillation frequencies.

Conventions
-----------
``M12 = <M| H |Mbar> / (2 m)`` with ``M = (bbar d), (bbar s)`` and phases of the states such that the box prefactor
is positive (CP|M> = -|Mbar>). Amplitudes are given in the invariant frame where ``V_cb V_cq^*`` is real, so that
rephasing the quark fields moves nothing; there ``arg M12`` is ``2 beta`` for B_d and ``-2 beta_s`` for B_s.

``box_amplitude_B*`` is the standard short-distance amplitude; ``M12_B*`` equals it unless a hypothesis on mixing
replaces it.

Source: G. Buchalla, A. J. Buras, M. E. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from observables import loop_functions
from observables.catalogue import Complex, Real, parameter, quantity

_BUCHALLA = "G. Buchalla, A. Buras, M. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996)"
_INAMI_LIM = "T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297 (1981)"

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


@quantity(unit="1", title="Box function of the top quark", latex=r"S_0(x_t)", source=_INAMI_LIM)
def box_function_top(top_mass_msbar: Real, mass_W: Real) -> Real:
    """Box function at ``x_t = (m_t(m_t)/M_W)^2``, dimensionless."""
    return loop_functions.box_function((top_mass_msbar / mass_W) ** 2)


@quantity(
    unit="GeV^-2", title="Prefactor of the box amplitudes", latex=r"G_F^2 M_W^2/12\pi^2", source=_BUCHALLA
)
def mixing_prefactor(fermi_constant: Real, mass_W: Real) -> Real:
    """Common factor ``G_F^2 M_W^2 / (12 pi^2)`` of the mixing amplitudes, GeV^-2."""
    return (fermi_constant * mass_W) ** 2 / (12 * math.pi**2)


@quantity(
    unit="GeV",
    title="B_d mixing matrix element: decay constant times root of the bag parameter",
    latex=r"f_{B_d}\sqrt{\hat B_{B_d}}",
    source="FLAG Review 2024 (arXiv:2411.04268), definition of the ratio xi",
)
def mixing_matrix_element_Bd(mixing_matrix_element_Bs: Real, mixing_matrix_element_ratio: Real) -> Real:
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
    mixing_prefactor: Real,
    mass_Bd: Real,
    mixing_matrix_element_Bd: Real,
    short_distance_factor_B: Real,
    box_function_top: Real,
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
    mixing_prefactor: Real,
    mass_Bs: Real,
    mixing_matrix_element_Bs: Real,
    short_distance_factor_B: Real,
    box_function_top: Real,
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
def box_amplitude_Bd(
    box_strength_Bd: Real, V_tb: Complex, V_td: Complex, V_cb: Complex, V_cd: Complex
) -> Complex:
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
def box_amplitude_Bs(
    box_strength_Bs: Real, V_tb: Complex, V_ts: Complex, V_cb: Complex, V_cs: Complex
) -> Complex:
    """Standard short-distance amplitude of B_s mixing, GeV, complex; the CP operation conjugates it.

    Frame where ``V_cb V_cs^*`` is real: the argument is ``-2 beta_s``. Never replaced by a mixing hypothesis.
    """
    return _box_amplitude_B(box_strength_Bs, V_tb, V_ts, V_cb, V_cs)


@quantity(unit="GeV", title="Mass-mixing amplitude of B_d", latex=r"M_{12}^d", source=_BUCHALLA)
def M12_Bd(box_amplitude_Bd: Complex) -> Complex:
    """Off-diagonal element of the B_d mass matrix, GeV, complex; frame and sign of `box_amplitude_Bd`.

    The box amplitude, unless a hypothesis replaces it.
    """
    return box_amplitude_Bd


@quantity(unit="GeV", title="Mass-mixing amplitude of B_s", latex=r"M_{12}^s", source=_BUCHALLA)
def M12_Bs(box_amplitude_Bs: Complex) -> Complex:
    """Off-diagonal element of the B_s mass matrix, GeV, complex; frame and sign of `box_amplitude_Bs`.

    The box amplitude, unless a hypothesis replaces it.
    """
    return box_amplitude_Bs


@quantity(unit="1/ps", title="B_d oscillation frequency", latex=r"\Delta m_d", source=_BUCHALLA)
def mixing_frequency_Bd(M12_Bd: Complex, reduced_planck_constant: Real) -> Real:
    """Mass difference ``2 |M12| / hbar`` of the B_d eigenstates, 1/ps; Gamma12^2/M12^2 is neglected."""
    return 2e-12 * np.absolute(M12_Bd) / reduced_planck_constant


@quantity(unit="1/ps", title="B_s oscillation frequency", latex=r"\Delta m_s", source=_BUCHALLA)
def mixing_frequency_Bs(M12_Bs: Complex, reduced_planck_constant: Real) -> Real:
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
def mixing_phase_Bd(M12_Bd: Complex) -> Real:
    """Argument of M12 of B_d in the frame where ``V_cb V_cd^*`` is real, deg, in [-180, 180]; CP-odd.

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
def mixing_phase_Bs(M12_Bs: Complex) -> Real:
    """Argument of M12 of B_s in the frame where ``V_cb V_cs^*`` is real, deg, in [-180, 180]; CP-odd.

    Sign: ``-2 beta_s`` in the standard model, about -2 deg.
    """
    return np.angle(M12_Bs) * (180 / math.pi)
