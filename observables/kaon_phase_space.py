"""Phase space of K -> pi l nu, integrated from the parameters of the form factors.

    I = int dt/M_K^8 lam^(3/2) (1 + m^2/2t)(1 - m^2/t)^2 [fb_+^2 + 3 m^2 Dl^2/((2t + m^2) lam) fb_0^2]
    lam = (t - (M_K + M_pi)^2)(t - (M_K - M_pi)^2),  Dl = M_K^2 - M_pi^2,  m^2 < t < (M_K - M_pi)^2

with fb = f/f_+(0) (V. Cirigliano et al., Rev. Mod. Phys. 84, 399, section III). The shapes come in two
forms: *dispersive*, with one parameter each (V. Bernard, M. Oertel, E. Passemar, J. Stern, Phys. Rev. D 80,
034034), as the cubic expansion in t that the experiments use; and *quadratic* (vector) *and linear* (scalar),
in the quantities whose names end in `_quadratic`. Use one form for all modes: at the published parameters
they differ by up to 0.8 % in the muon modes.

The squared shapes are polynomials in the shape parameters with coefficients that depend on masses alone.
Those are integrated once, on 32 Gauss-Legendre nodes in s with t = exp(b - (b - a) s^2), a = ln m^2,
b = ln t_max, which tames the electron's lower end and the square root at the upper one (relative error below
1e-12).
"""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np

from observables.catalogue import Real, constant, parameter, quantity

KAON_REVIEW = (
    "V. Cirigliano, G. Ecker, H. Neufeld, A. Pich, J. Portoles, Rev. Mod. Phys. 84, 399, arXiv:1107.6001"
)
DISPERSIVE = "V. Bernard, M. Oertel, E. Passemar, J. Stern, Phys. Rev. D 80, 034034, arXiv:0903.1654"
LISTINGS = "F. Takahashi et al. (Particle Data Group), Int. J. Mod. Phys. A 41, 2630011 (2026)"

#: Charged leptons of the modes, with their latex.
LEPTONS = {"e": "e", "mu": r"\mu"}

# --- parameters of the shapes -----------------------------------------------------------------------------

_SHAPES = (
    # name, start, lower, upper, step, title, latex, source of the start value
    (
        "form_factor_slope_K_pi",
        0.02555,
        -0.2,
        0.2,
        0.00038,
        "Dispersive slope of the vector form factor of K -> pi",
        r"\Lambda_+",
        "M. Antonelli et al., Eur. Phys. J. C 69, 399, arXiv:1005.2323, and updates; value from memory",
    ),
    (
        "form_factor_log_C_K_pi",
        0.1992,
        -1.0,
        1.0,
        0.0078,
        "Logarithm of the scalar form factor of K -> pi at t = m_K^2 - m_pi^2, over f_+(0)",
        r"\ln C",
        "M. Antonelli et al., Eur. Phys. J. C 69, 399, arXiv:1005.2323, and updates; value from memory",
    ),
    (
        "form_factor_linear_K_pi",
        0.0240,
        -0.2,
        0.2,
        0.0012,
        "Linear coefficient of the vector form factor of K -> pi, quadratic form",
        r"\lambda'_+",
        LISTINGS + ", K_L, muon-electron universality assumed",
    ),
    (
        "form_factor_curvature_K_pi",
        0.00199,
        -0.05,
        0.05,
        0.00048,
        "Quadratic coefficient of the vector form factor of K -> pi, quadratic form",
        r"\lambda''_+",
        LISTINGS + ", K_L, muon-electron universality assumed",
    ),
    (
        "form_factor_scalar_linear_K_pi",
        0.01163,
        -0.2,
        0.2,
        0.00092,
        "Linear coefficient of the scalar form factor of K -> pi, linear form",
        r"\lambda_0",
        LISTINGS + ", K_L, muon-electron universality assumed",
    ),
)

for _name, _start, _lower, _upper, _scale, _title, _latex, _source in _SHAPES:
    parameter(
        _name,
        unit="1",
        start=_start,
        lower=_lower,
        upper=_upper,
        scale=_scale,
        title=_title,
        latex=_latex,
        source=_source,
        fixed=True,
    )

_DISPERSIVE_CONSTANTS = (
    ("dispersive_p2_vector_K_pi", 5.84e-4, 0.93e-4, "Second-order coefficient, vector form factor", "p_2^+"),
    ("dispersive_p3_vector_K_pi", 0.30e-4, 0.02e-4, "Third-order coefficient, vector form factor", "p_3^+"),
    ("dispersive_p2_scalar_K_pi", 4.16e-4, 0.56e-4, "Second-order coefficient, scalar form factor", "p_2^0"),
    ("dispersive_p3_scalar_K_pi", 0.27e-4, 0.01e-4, "Third-order coefficient, scalar form factor", "p_3^0"),
    (
        "dispersive_G0_K_pi",
        0.0398,
        0.0044,
        "Dispersive integral G at t = 0, scalar form factor",
        "G(0)",
    ),
)

for _name, _value, _error, _title, _latex in _DISPERSIVE_CONSTANTS:
    constant(
        _name,
        _value,
        error=_error,
        unit="1",
        title=f"{_title} of K -> pi",
        latex=_latex,
        source=DISPERSIVE + "; value from memory",
    )

# --- phase-space integrals --------------------------------------------------------------------------------

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(32)
_NODES = 0.5 * (_NODES + 1.0)
_WEIGHTS = 0.5 * _WEIGHTS


def _phase_space(mass_kaon: Any, mass_pion: Any, mass_lepton: Any, mass_pi: Any) -> tuple[Any, Any, Any]:
    """Nodes x = t/m_pi+^2 and weights of the squared vector and scalar shapes; last axis: the nodes."""
    kaon, pion, lepton = mass_kaon[..., None], mass_pion[..., None], mass_lepton[..., None]
    square = lepton * lepton
    end = np.log((kaon - pion) * (kaon - pion))
    span = end - np.log(square)
    t = np.exp(end - span * (_NODES * _NODES))
    jacobian = 2.0 * span * t * (_NODES * _WEIGHTS)
    splitting = kaon * kaon - pion * pion
    triangle = (t - (kaon + pion) * (kaon + pion)) * (t - (kaon - pion) * (kaon - pion))
    common = jacobian / kaon**8 * (1.0 + square / (2.0 * t)) * (1.0 - square / t) ** 2 * np.sqrt(triangle)
    scalar = 3.0 * square * (splitting * splitting) / (2.0 * t + square)
    return t / (mass_pi[..., None] * mass_pi[..., None]), common * triangle, common * scalar


def _dispersive_coefficients(x: Any, weight: Any, p2: Any, p3: Any) -> tuple[Any, ...]:
    """Coefficients of L^0 ... L^6 in the integral of the squared dispersive shape of slope L.

    fb = 1 + L x + (L^2 + p2) x^2/2 + (L^3 + 3 p2 L + p3) x^3/6
    """
    square = x * x
    cube = square * x
    a0 = 1.0 + p2[..., None] * square / 2.0 + p3[..., None] * cube / 6.0
    a1 = x + p2[..., None] * cube / 2.0
    a2 = square / 2.0
    a3 = cube / 6.0
    powers = (
        a0 * a0,
        2.0 * a0 * a1,
        2.0 * a0 * a2 + a1 * a1,
        2.0 * (a0 * a3 + a1 * a2),
        2.0 * a1 * a3 + a2 * a2,
        2.0 * a2 * a3,
        a3 * a3,
    )
    return tuple(np.sum(weight * power, axis=-1) for power in powers)


def _dispersive_polynomials(
    mass_kaon: Any,
    mass_pion: Any,
    mass_lepton: Any,
    mass_pi: Any,
    p2_vector: Any,
    p3_vector: Any,
    p2_scalar: Any,
    p3_scalar: Any,
) -> tuple[tuple[Any, ...], tuple[Any, ...]]:
    """Polynomials of the vector and the scalar slope whose sum is the phase-space integral."""
    x, vector, scalar = _phase_space(mass_kaon, mass_pion, mass_lepton, mass_pi)
    return (
        _dispersive_coefficients(x, vector, p2_vector, p3_vector),
        _dispersive_coefficients(x, scalar, p2_scalar, p3_scalar),
    )


def _moments(
    mass_kaon: Any, mass_pion: Any, mass_lepton: Any, mass_pi: Any
) -> tuple[tuple[Any, ...], tuple[Any, ...]]:
    """Integrals of x^0 ... x^4 with the vector weight, and of x^0 ... x^2 with the scalar weight."""
    x, vector, scalar = _phase_space(mass_kaon, mass_pion, mass_lepton, mass_pi)
    powers = (1.0, x, x * x, x * x * x, x * x * x * x)
    return (
        tuple(np.sum(vector * power, axis=-1) for power in powers),
        tuple(np.sum(scalar * power, axis=-1) for power in powers[:3]),
    )


_cached_dispersive_polynomials = lru_cache(maxsize=64)(_dispersive_polynomials)
_cached_moments = lru_cache(maxsize=64)(_moments)


def _integrated_once(cached: Any, plain: Any, arguments: tuple[Any, ...]) -> Any:
    """Integrate once for numbers; anew for arrays, which arise when a mass is promoted to a parameter."""
    if all(isinstance(argument, np.floating) for argument in arguments):
        return cached(*arguments)
    return plain(*arguments)


def _polynomial(coefficients: tuple[Any, ...], variable: Any) -> Any:
    """Horner's rule, lowest order first."""
    value = coefficients[-1]
    for coefficient in reversed(coefficients[:-1]):
        value = value * variable + coefficient
    return value


@quantity(
    unit="1",
    title="Slope of the scalar form factor of K -> pi, dispersive form",
    latex=r"\lambda_0(\ln C)",
    source=DISPERSIVE,
)
def form_factor_scalar_slope_K_pi(
    form_factor_log_C_K_pi: Real, dispersive_G0_K_pi: Real, mass_pi: Real, mass_K0: Real
) -> Real:
    """Slope in t/m_pi+^2: m_pi+^2/(m_K0^2 - m_pi+^2) (ln C - G(0)), used for all modes."""
    square = mass_pi * mass_pi
    return square / (mass_K0 * mass_K0 - square) * (form_factor_log_C_K_pi - dispersive_G0_K_pi)


def _dispersive_integral(
    form_factor_slope_K_pi: Real,
    form_factor_scalar_slope_K_pi: Real,
    mass_kaon: Real,
    mass_pion: Real,
    mass_lepton: Real,
    mass_pi: Real,
    dispersive_p2_vector_K_pi: Real,
    dispersive_p3_vector_K_pi: Real,
    dispersive_p2_scalar_K_pi: Real,
    dispersive_p3_scalar_K_pi: Real,
) -> Real:
    """Phase-space integral of one mode, dispersive form factors."""
    vector, scalar = _integrated_once(
        _cached_dispersive_polynomials,
        _dispersive_polynomials,
        (
            mass_kaon,
            mass_pion,
            mass_lepton,
            mass_pi,
            dispersive_p2_vector_K_pi,
            dispersive_p3_vector_K_pi,
            dispersive_p2_scalar_K_pi,
            dispersive_p3_scalar_K_pi,
        ),
    )
    return _polynomial(vector, form_factor_slope_K_pi) + _polynomial(scalar, form_factor_scalar_slope_K_pi)


def _quadratic_integral(
    form_factor_linear_K_pi: Real,
    form_factor_curvature_K_pi: Real,
    form_factor_scalar_linear_K_pi: Real,
    mass_kaon: Real,
    mass_pion: Real,
    mass_lepton: Real,
    mass_pi: Real,
) -> Real:
    """Phase-space integral of one mode: fb_+ = 1 + l' x + l'' x^2/2, fb_0 = 1 + l_0 x, x = t/m_pi+^2."""
    vector, scalar = _integrated_once(_cached_moments, _moments, (mass_kaon, mass_pion, mass_lepton, mass_pi))
    linear, curvature, slope = (
        form_factor_linear_K_pi,
        form_factor_curvature_K_pi,
        form_factor_scalar_linear_K_pi,
    )
    return (
        vector[0]
        + 2.0 * linear * vector[1]
        + (linear * linear + curvature) * vector[2]
        + linear * curvature * vector[3]
        + curvature * curvature * vector[4] / 4.0
        + scalar[0]
        + 2.0 * slope * scalar[1]
        + slope * slope * scalar[2]
    )


_MODES = (
    # final part of the name, masses, mode in titles, latex of the kaon
    ("K0_pi", "mass_K0", "mass_pi", "K0 -> pi-", "K^0"),
    ("K_pi0", "mass_K", "mass_pi0", "K+ -> pi0", "K^+"),
)

for _mode, _mass_kaon, _mass_pion, _written, _kaon_latex in _MODES:
    for _lepton, _lepton_latex in LEPTONS.items():
        _masses = {"mass_kaon": _mass_kaon, "mass_pion": _mass_pion, "mass_lepton": f"mass_{_lepton}"}
        for _suffix, _function, _form in (
            ("", _dispersive_integral, "dispersive"),
            ("_quadratic", _quadratic_integral, "quadratic"),
        ):
            quantity(
                unit="1",
                name=f"phase_space_{_mode}_{_lepton}_nu{_suffix}",
                ingredients=_masses,
                title=f"Phase-space integral of {_written} {_lepton} nu (K_l3), {_form} form factors",
                latex=rf"I_{{{_kaon_latex}{_lepton_latex}}}",
                source=KAON_REVIEW + "; " + DISPERSIVE,
                recalled=_form == "dispersive",
            )(_function)
