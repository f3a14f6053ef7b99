"""The quark-mixing matrix: its nine elements, and what can be said of it without a choice of phases.

The elements follow from four parameters through the standard parametrisation, exact to all orders:
sin(theta_12) = lambda, sin(theta_23) = A lambda^2 and

    sin(theta_13) exp(i delta) = A lambda^3 (rho-bar + i eta-bar) sqrt(1 - A^2 lambda^4)
                                 / [ sqrt(1 - lambda^2) (1 - A^2 lambda^4 (rho-bar + i eta-bar)) ].

Only sin(theta_13) exp(i delta) as a whole is used, never its phase alone: all is regular at
rho-bar = eta-bar = 0. A point outside the domain (A lambda^2 > 1, for instance) gives nan.

Everything else is defined through the elements V_ij by combinations that do not change when the quark fields
are rephased, so a hypothesis that replaces elements moves it too. Phases come from products of four elements
(no quotients), in degrees in (-180, 180].

Sources: L.-L. Chau, W.-Y. Keung, Phys. Rev. Lett. 53, 1802; A. Buras, M. Lautenbacher, G. Ostermaier,
Phys. Rev. D 50, 3433; A. Ceccucci, Z. Ligeti, Y. Sakai, "CKM Quark-Mixing Matrix", review of the Particle
Data Group (2026).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np

from observables.catalogue import Complex, Real, parameter, quantity

REVIEW = (
    'A. Ceccucci, Z. Ligeti, Y. Sakai, "CKM Quark-Mixing Matrix", review of the Particle Data Group (2026)'
)
STANDARD_FORM = "L.-L. Chau, W.-Y. Keung, Phys. Rev. Lett. 53, 1802; " + REVIEW
EXACT_FORM = "A. Buras, M. Lautenbacher, G. Ostermaier, Phys. Rev. D 50, 3433; " + REVIEW
JARLSKOG = "C. Jarlskog, Phys. Rev. Lett. 55, 1039; " + REVIEW

UP_QUARKS = ("u", "c", "t")
DOWN_QUARKS = ("d", "s", "b")

parameter(
    "wolfenstein_lambda",
    unit="1",
    start=0.225,
    lower=0.0,
    upper=1.0,
    scale=0.0007,
    title="Wolfenstein parameter lambda",
    latex=r"\lambda",
    source=EXACT_FORM,
)
parameter(
    "wolfenstein_A",
    unit="1",
    start=0.82,
    lower=0.0,
    upper=2.0,
    scale=0.015,
    title="Wolfenstein parameter A",
    latex=r"A",
    source=EXACT_FORM,
)
parameter(
    "wolfenstein_rhobar",
    unit="1",
    start=0.16,
    lower=-1.5,
    upper=1.5,
    scale=0.01,
    title="Real part of the apex of the unitarity triangle",
    latex=r"\bar\rho",
    source=EXACT_FORM,
)
parameter(
    "wolfenstein_etabar",
    unit="1",
    start=0.35,
    lower=-1.5,
    upper=1.5,
    scale=0.01,
    title="Imaginary part of the apex of the unitarity triangle",
    latex=r"\bar\eta",
    source=EXACT_FORM,
    cp_odd=True,
)


# --- pieces shared by the nine elements -------------------------------------------------------------------


@quantity(
    unit="1",
    title="sin(theta_23) of the parametrisation",
    latex=r"A\lambda^2",
    source=EXACT_FORM,
)
def parametrised_sine_23(wolfenstein_lambda: Real, wolfenstein_A: Real) -> Real:
    """A lambda^2, the sine of the second rotation angle."""
    return wolfenstein_A * (wolfenstein_lambda * wolfenstein_lambda)


@quantity(
    unit="1",
    title="cos(theta_12) of the parametrisation",
    latex=r"\sqrt{1-\lambda^2}",
    source=EXACT_FORM,
)
def parametrised_cosine_12(wolfenstein_lambda: Real) -> Real:
    """Cosine of the first rotation angle, positive; nan for lambda > 1."""
    return np.sqrt(1.0 - wolfenstein_lambda * wolfenstein_lambda)


@quantity(
    unit="1",
    title="cos(theta_23) of the parametrisation",
    latex=r"\sqrt{1-A^2\lambda^4}",
    source=EXACT_FORM,
)
def parametrised_cosine_23(parametrised_sine_23: Real) -> Real:
    """Cosine of the second rotation angle, positive; nan for A lambda^2 > 1."""
    return np.sqrt(1.0 - parametrised_sine_23 * parametrised_sine_23)


@quantity(
    unit="1",
    title="sin(theta_13) exp(i delta) of the parametrisation",
    latex=r"s_{13}e^{i\delta}",
    source=EXACT_FORM,
    physical=False,
)
def parametrised_sine_13_with_phase(
    wolfenstein_lambda: Real,
    wolfenstein_rhobar: Real,
    wolfenstein_etabar: Real,
    parametrised_sine_23: Real,
    parametrised_cosine_12: Real,
    parametrised_cosine_23: Real,
) -> Complex:
    """sin(theta_13) exp(i delta), which is the complex conjugate of V_ub in the standard choice of phases."""
    apex = wolfenstein_rhobar + 1j * wolfenstein_etabar
    size = wolfenstein_lambda * parametrised_sine_23 * parametrised_cosine_23 / parametrised_cosine_12
    return size * apex / (1.0 - (parametrised_sine_23 * parametrised_sine_23) * apex)


@quantity(
    unit="1",
    title="cos(theta_13) of the parametrisation",
    latex=r"c_{13}",
    source=EXACT_FORM,
)
def parametrised_cosine_13(parametrised_sine_13_with_phase: Complex) -> Real:
    """Cosine of the third rotation angle, positive; nan where sin(theta_13) would exceed one."""
    real, imaginary = parametrised_sine_13_with_phase.real, parametrised_sine_13_with_phase.imag
    return np.sqrt(1.0 - (real * real + imaginary * imaginary))


# --- the nine elements, standard choice of phases ---------------------------------------------------------


def _element(name: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Decorator of one element: rows up, charm, top; columns down, strange, bottom."""
    up, down = name[2], name[3]
    return quantity(
        unit="1",
        title=f"Element V_{up}{down} (standard choice of phases)",
        latex=rf"V_{{{up}{down}}}",
        source=STANDARD_FORM,
        physical=False,
    )


@_element("V_ud")
def V_ud(parametrised_cosine_12: Real, parametrised_cosine_13: Real) -> Complex:
    """c12 c13."""
    return parametrised_cosine_12 * parametrised_cosine_13 + 0j


@_element("V_us")
def V_us(wolfenstein_lambda: Real, parametrised_cosine_13: Real) -> Complex:
    """s12 c13."""
    return wolfenstein_lambda * parametrised_cosine_13 + 0j


@_element("V_ub")
def V_ub(parametrised_sine_13_with_phase: Complex) -> Complex:
    """s13 exp(-i delta)."""
    return np.conjugate(parametrised_sine_13_with_phase)


@_element("V_cd")
def V_cd(
    wolfenstein_lambda: Real,
    parametrised_cosine_12: Real,
    parametrised_sine_23: Real,
    parametrised_cosine_23: Real,
    parametrised_sine_13_with_phase: Complex,
) -> Complex:
    """-s12 c23 - c12 s23 s13 exp(i delta)."""
    return (-wolfenstein_lambda * parametrised_cosine_23) - (
        parametrised_cosine_12 * parametrised_sine_23
    ) * parametrised_sine_13_with_phase


@_element("V_cs")
def V_cs(
    wolfenstein_lambda: Real,
    parametrised_cosine_12: Real,
    parametrised_sine_23: Real,
    parametrised_cosine_23: Real,
    parametrised_sine_13_with_phase: Complex,
) -> Complex:
    """c12 c23 - s12 s23 s13 exp(i delta)."""
    return (parametrised_cosine_12 * parametrised_cosine_23) - (
        wolfenstein_lambda * parametrised_sine_23
    ) * parametrised_sine_13_with_phase


@_element("V_cb")
def V_cb(parametrised_sine_23: Real, parametrised_cosine_13: Real) -> Complex:
    """s23 c13."""
    return parametrised_sine_23 * parametrised_cosine_13 + 0j


@_element("V_td")
def V_td(
    wolfenstein_lambda: Real,
    parametrised_cosine_12: Real,
    parametrised_sine_23: Real,
    parametrised_cosine_23: Real,
    parametrised_sine_13_with_phase: Complex,
) -> Complex:
    """s12 s23 - c12 c23 s13 exp(i delta)."""
    return (wolfenstein_lambda * parametrised_sine_23) - (
        parametrised_cosine_12 * parametrised_cosine_23
    ) * parametrised_sine_13_with_phase


@_element("V_ts")
def V_ts(
    wolfenstein_lambda: Real,
    parametrised_cosine_12: Real,
    parametrised_sine_23: Real,
    parametrised_cosine_23: Real,
    parametrised_sine_13_with_phase: Complex,
) -> Complex:
    """-c12 s23 - s12 c23 s13 exp(i delta)."""
    return (-parametrised_cosine_12 * parametrised_sine_23) - (
        wolfenstein_lambda * parametrised_cosine_23
    ) * parametrised_sine_13_with_phase


@_element("V_tb")
def V_tb(parametrised_cosine_23: Real, parametrised_cosine_13: Real) -> Complex:
    """c23 c13."""
    return parametrised_cosine_23 * parametrised_cosine_13 + 0j


# --- magnitudes, their sums and quotients -----------------------------------------------------------------


def _magnitude(element: Complex) -> Real:
    """Magnitude of one element."""
    return np.absolute(element)


def _sum_of_squares(first: Real, second: Real, third: Real) -> Real:
    """Sum of three squared magnitudes: one if the matrix is unitary."""
    return first * first + second * second + third * third


def _quotient(numerator: Real, denominator: Real) -> Real:
    """Quotient of two magnitudes."""
    return numerator / denominator


for _up in UP_QUARKS:
    for _down in DOWN_QUARKS:
        quantity(
            unit="1",
            name=f"magnitude_V_{_up}{_down}",
            ingredients={"element": f"V_{_up}{_down}"},
            title=f"Magnitude of V_{_up}{_down}",
            latex=rf"|V_{{{_up}{_down}}}|",
            source=REVIEW,
        )(_magnitude)

for _up in UP_QUARKS:
    quantity(
        unit="1",
        name=f"unitarity_sum_row_{_up}",
        ingredients={
            position: f"magnitude_V_{_up}{_down}"
            for position, _down in zip(("first", "second", "third"), DOWN_QUARKS, strict=True)
        },
        title=f"Sum of squared magnitudes, row of {_up}",
        latex=rf"\sum_j |V_{{{_up}j}}|^2",
        source=REVIEW,
    )(_sum_of_squares)

for _down in DOWN_QUARKS:
    quantity(
        unit="1",
        name=f"unitarity_sum_column_{_down}",
        ingredients={
            position: f"magnitude_V_{_up}{_down}"
            for position, _up in zip(("first", "second", "third"), UP_QUARKS, strict=True)
        },
        title=f"Sum of squared magnitudes, column of {_down}",
        latex=rf"\sum_i |V_{{i{_down}}}|^2",
        source=REVIEW,
    )(_sum_of_squares)

for _numerator, _denominator in (("us", "ud"), ("ub", "cb"), ("td", "ts")):
    quantity(
        unit="1",
        name=f"magnitude_ratio_V_{_numerator}_V_{_denominator}",
        ingredients={
            "numerator": f"magnitude_V_{_numerator}",
            "denominator": f"magnitude_V_{_denominator}",
        },
        title=f"Quotient of the magnitudes of V_{_numerator} and V_{_denominator}",
        latex=rf"|V_{{{_numerator}}}/V_{{{_denominator}}}|",
        source=REVIEW,
    )(_quotient)


# --- angles and invariants --------------------------------------------------------------------------------


def _degrees(product: Complex) -> Real:
    """Phase of a complex number in degrees, in (-180, 180]."""
    phase = np.angle(product) * (180.0 / np.pi)
    return np.where(phase <= -180.0, 180.0, phase)


def _angle_of_triangle(title: str, latex: str) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Decorator of an angle in degrees: odd under CP, the same after a full turn."""
    return quantity(unit="deg", title=title, latex=latex, source=REVIEW, cp="odd", period=360.0)


@_angle_of_triangle("Unitarity-triangle angle alpha", r"\alpha")
def angle_alpha(V_td: Complex, V_tb: Complex, V_ud: Complex, V_ub: Complex) -> Real:
    """alpha = arg[-V_td V_tb^* / (V_ud V_ub^*)] in degrees; positive for eta-bar > 0."""
    return _degrees(-(V_td * np.conjugate(V_tb)) * (np.conjugate(V_ud) * V_ub))


@_angle_of_triangle("Unitarity-triangle angle beta", r"\beta")
def angle_beta(V_cd: Complex, V_cb: Complex, V_td: Complex, V_tb: Complex) -> Real:
    """beta = arg[-V_cd V_cb^* / (V_td V_tb^*)] in degrees; positive for eta-bar > 0."""
    return _degrees(-(V_cd * np.conjugate(V_cb)) * (np.conjugate(V_td) * V_tb))


@_angle_of_triangle("Unitarity-triangle angle gamma", r"\gamma")
def angle_gamma(V_ud: Complex, V_ub: Complex, V_cd: Complex, V_cb: Complex) -> Real:
    """gamma = arg[-V_ud V_ub^* / (V_cd V_cb^*)] in degrees; positive for eta-bar > 0."""
    return _degrees(-(V_ud * np.conjugate(V_ub)) * (np.conjugate(V_cd) * V_cb))


@_angle_of_triangle("Angle beta_s of the strange-bottom triangle", r"\beta_s")
def angle_beta_s(V_ts: Complex, V_tb: Complex, V_cs: Complex, V_cb: Complex) -> Real:
    """beta_s = arg[-V_ts V_tb^* / (V_cs V_cb^*)] in degrees; about +lambda^2 eta-bar radians."""
    return _degrees(-(V_ts * np.conjugate(V_tb)) * (np.conjugate(V_cs) * V_cb))


@_angle_of_triangle("Angle beta_K of the down-strange triangle", r"\beta_K")
def angle_beta_K(V_cs: Complex, V_cd: Complex, V_us: Complex, V_ud: Complex) -> Real:
    """beta_K = arg[-V_cs V_cd^* / (V_us V_ud^*)] in degrees; negative (about -0.04) for eta-bar > 0."""
    return _degrees(-(V_cs * np.conjugate(V_cd)) * (np.conjugate(V_us) * V_ud))


@quantity(unit="1", title="Jarlskog invariant", latex=r"J", source=JARLSKOG, cp="odd")
def jarlskog(V_us: Complex, V_cb: Complex, V_ub: Complex, V_cs: Complex) -> Real:
    """J = Im(V_us V_cb V_ub^* V_cs^*); positive for eta-bar > 0. Every unitarity triangle has area |J|/2."""
    return ((V_us * V_cb) * np.conjugate(V_ub * V_cs)).imag


@quantity(unit="1", title="Side of the unitarity triangle from the origin", latex=r"R_b", source=REVIEW)
def side_Rb(magnitude_V_ud: Real, magnitude_V_ub: Real, magnitude_V_cd: Real, magnitude_V_cb: Real) -> Real:
    """R_b = |V_ud V_ub| / |V_cd V_cb|, which is |rho-bar + i eta-bar| for a unitary matrix."""
    return (magnitude_V_ud * magnitude_V_ub) / (magnitude_V_cd * magnitude_V_cb)


@quantity(unit="1", title="Side of the unitarity triangle from (1, 0)", latex=r"R_t", source=REVIEW)
def side_Rt(magnitude_V_td: Real, magnitude_V_tb: Real, magnitude_V_cd: Real, magnitude_V_cb: Real) -> Real:
    """R_t = |V_td V_tb| / |V_cd V_cb|, which is |1 - rho-bar - i eta-bar| for a unitary matrix."""
    return (magnitude_V_td * magnitude_V_tb) / (magnitude_V_cd * magnitude_V_cb)


@quantity(unit="1", title="Sine of theta_12", latex=r"\sin\theta_{12}", source=STANDARD_FORM)
def sine_theta12(magnitude_V_us: Real, magnitude_V_ud: Real) -> Real:
    """sin(theta_12) = |V_us| / sqrt(|V_ud|^2 + |V_us|^2)."""
    return magnitude_V_us / np.sqrt(magnitude_V_ud * magnitude_V_ud + magnitude_V_us * magnitude_V_us)


@quantity(unit="1", title="Sine of theta_13", latex=r"\sin\theta_{13}", source=STANDARD_FORM)
def sine_theta13(magnitude_V_ub: Real) -> Real:
    """sin(theta_13) = |V_ub|."""
    return magnitude_V_ub


@quantity(unit="1", title="Sine of theta_23", latex=r"\sin\theta_{23}", source=STANDARD_FORM)
def sine_theta23(magnitude_V_cb: Real, magnitude_V_tb: Real) -> Real:
    """sin(theta_23) = |V_cb| / sqrt(|V_cb|^2 + |V_tb|^2)."""
    return magnitude_V_cb / np.sqrt(magnitude_V_cb * magnitude_V_cb + magnitude_V_tb * magnitude_V_tb)


@quantity(
    unit="deg",
    title="Kobayashi-Maskawa phase of the standard parametrisation",
    latex=r"\delta",
    source="M. Kobayashi, T. Maskawa, Prog. Theor. Phys. 49, 652; " + STANDARD_FORM,
    cp="odd",
    period=360.0,
)
def kobayashi_maskawa_phase(V_us: Complex, V_cb: Complex, V_ub: Complex, V_cs: Complex) -> Real:
    """The phase delta in degrees, by a definition that does not depend on the choice of phases.

    With Q = V_us V_cb V_ub^* V_cs^*, the standard parametrisation gives
    (1 - |V_ub|^2) Q + |V_us V_ub V_cb|^2 = (positive number) exp(i delta).
    """
    coupling = V_us * V_cb
    first = coupling * np.conjugate(V_ub * V_cs)
    square_ub = V_ub.real * V_ub.real + V_ub.imag * V_ub.imag
    square_coupling = coupling.real * coupling.real + coupling.imag * coupling.imag
    return _degrees((1.0 - square_ub) * first + square_coupling * square_ub)
