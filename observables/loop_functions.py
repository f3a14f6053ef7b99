r"""One-loop functions of the W, box and penguin diagrams (Inami-Lim functions).

All arguments are squared mass ratios ``x = m^2 / M_W^2`` of a quark of running mass ``m = m(m)``; all results
are dimensionless. The functions are elementwise over any shape and use plain ufuncs only, so that
forward-derivative arrays pass through. They are defined for ``x >= 0`` and give nan below; two of them, and
the combination Z0, grow like ln x at the origin.

Every function here has the form ``[p(x) + q(x) ln x] / (x - 1)^n`` with a numerator that vanishes as fast as
the denominator at the W mass. Near there the quotient loses all its digits, so the Taylor series about
``x = 1`` takes over, with coefficients worked out in exact fractions; both agree to a few rounding errors
where they meet.

The box function of two different quarks is a divided difference: with
``g(a) = [(a^2 - 8 a + 4) ln a + 3 (a - 1)] / [4 (a - 1)^2]``, regular at one,

    S0(x, y) = x y [g(x) - g(y)] / (x - y),

because the pole of ``g`` cancels the third term of the textbook form. The limits y -> x and x, y -> 1 follow
from this without a special formula.

Sources
-------
T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297 (1981); G. Buchalla, A. J. Buras, M. E. Lautenbacher, Rev.
Mod. Phys. 68, 1125 (1996).
"""

from __future__ import annotations

from collections.abc import Sequence
from fractions import Fraction
from functools import cache
from typing import Any

import numpy as np

__all__ = [
    "box_function",
    "box_function_mixed",
    "charged_lepton_function",
    "gluon_penguin_function",
    "leptonic_box_function",
    "magnetic_gluon_function",
    "magnetic_photon_function",
    "neutrino_function",
    "photon_penguin_function",
    "z_penguin_function",
    "z_photon_function",
]

# Within this distance of x = 1 the series is used; outside, the closed form loses at most 1/REACH^4 = 3.
SERIES_REACH = 0.75
SERIES_TERMS = 130  # SERIES_REACH ** SERIES_TERMS is far below the spacing of floats
# Two arguments closer than this (relative) are too close to subtract g(x) - g(y) directly.
CLOSE = 0.25
# Arguments of a smaller ratio are neither close nor both within reach of one.
APART = 0.125


class _LogarithmicQuotient:
    """The function ``[p(x) + q(x) ln x] / (x - 1)^n``, accurate on both sides of and at ``x = 1``.

    Parameters
    ----------
    denominator : int
        Common denominator of the coefficients.
    p, q : sequence of int
        Coefficients of the polynomials, constant term first, multiplied by `denominator`.
    power : int
        The power ``n`` of the pole that cancels.
    """

    def __init__(self, denominator: int, p: Sequence[int], q: Sequence[int], power: int) -> None:
        self._p = tuple(Fraction(c, denominator) for c in p)
        self._q = tuple(Fraction(c, denominator) for c in q)
        self._p_float = tuple(float(c) for c in self._p)
        self._q_float = tuple(float(c) for c in self._q)
        self.power = power

    @property
    def series(self) -> tuple[float, ...]:
        """Taylor coefficients about ``x = 1``, lowest first."""
        return _taylor_coefficients(self._p, self._q, self.power)

    def _closed(self, x: Any) -> Any:
        # x = 0 multiplies its own logarithm by a power of x, whose limit is zero unless q(0) is not.
        logarithm = np.log(np.where(x == 0.0, 1.0, x)) if self._q[0] == 0 else np.log(x)
        u = x - 1.0
        denominator = u * u
        if self.power == 3:
            denominator = denominator * u
        elif self.power == 4:
            denominator = denominator * denominator
        return (_horner(self._p_float, x) + _horner(self._q_float, x) * logarithm) / denominator

    def __call__(self, x: Any) -> Any:
        near = np.absolute(x - 1.0) < SERIES_REACH
        with np.errstate(divide="ignore", invalid="ignore"):
            if not np.any(near):
                return self._closed(x)
            # Each branch sees harmless arguments only.
            closed = self._closed(np.where(near, 2.0, x))
            series = _horner(self.series, np.where(near, x - 1.0, 0.0))
        return np.where(near, series, closed)


def _horner(coefficients: Sequence[float], x: Any) -> Any:
    result = coefficients[-1]
    for coefficient in coefficients[-2::-1]:
        result = result * x + coefficient if coefficient else result * x
    return result


@cache
def _taylor_coefficients(p: tuple[Fraction, ...], q: tuple[Fraction, ...], power: int) -> tuple[float, ...]:
    """Exact Taylor coefficients of ``[p + q ln x]/(x - 1)^power`` about one."""
    length = SERIES_TERMS + power
    numerator = [Fraction(0)] * length
    for k, coefficient in enumerate(_shifted_to_one(p)):
        numerator[k] += coefficient
    for k, coefficient in enumerate(_shifted_to_one(q)):
        for j in range(1, length - k):
            numerator[k + j] += coefficient * Fraction((-1) ** (j + 1), j)  # ln(1 + u)
    return tuple(float(c) for c in numerator[power:])


def _shifted_to_one(coefficients: Sequence[Fraction]) -> list[Fraction]:
    """Coefficients in ``u = x - 1`` of a polynomial given by those in ``x``."""
    shifted: list[Fraction] = []
    for coefficient in reversed(coefficients):
        # multiply by (u + 1) and add the next coefficient
        shifted = [a + b for a, b in zip([Fraction(0), *shifted], [*shifted, Fraction(0)], strict=True)]
        shifted[0] += coefficient
    return shifted


_S0 = _LogarithmicQuotient(4, (0, -4, 15, -12, 1), (0, 0, 0, 6), 3)
_B0 = _LogarithmicQuotient(4, (0, 1, -1), (0, 1), 2)
_C0 = _LogarithmicQuotient(8, (0, 6, -7, 1), (0, 2, 3), 2)
_X0 = _LogarithmicQuotient(8, (0, -2, 1, 1), (0, -6, 3), 2)
_Y0 = _LogarithmicQuotient(8, (0, 4, -5, 1), (0, 0, 3), 2)
_D0 = _LogarithmicQuotient(36, (0, 0, -25, 44, -19), (-16, 64, -108, 60, -6), 4)
_E0 = _LogarithmicQuotient(12, (0, 18, -29, 10, 1), (-8, 32, -18), 4)
_D0_PRIME = _LogarithmicQuotient(12, (0, 7, -12, -3, 8), (0, 0, 12, -18), 4)
_E0_PRIME = _LogarithmicQuotient(4, (0, 2, 3, -6, 1), (0, 0, 6), 4)
_G = _LogarithmicQuotient(4, (-3, 3), (4, -8, 1), 2)


def box_function(x: Any) -> Any:
    r"""Box function :math:`S_0(x)` of two equal quarks in the loop.

    :math:`S_0(x) = \frac{4x - 11x^2 + x^3}{4(1-x)^2} - \frac{3 x^3 \ln x}{2(1-x)^3}`, with the contribution
    of a massless up quark subtracted by unitarity.

    Parameters
    ----------
    x : float or array
        Squared mass ratio, any shape, dimensionless.

    Returns
    -------
    array
        Same shape, dimensionless; nan for negative `x`.

    Notes
    -----
    Source: T. Inami, C. S. Lim, Prog. Theor. Phys. 65, 297 (1981).
    """
    return _S0(x)


def box_function_mixed(x: Any, y: Any) -> Any:
    r"""Box function :math:`S_0(x, y)` of two different quarks in the loop; symmetric.

    Parameters
    ----------
    x, y : float or array
        Squared mass ratios, dimensionless, of shapes that broadcast.

    Returns
    -------
    array
        Dimensionless; zero where an argument is zero, nan where one is negative.

    Notes
    -----
    A divided difference (module text), accurate also where the arguments agree, ``S0(x, x) = S0(x)``, or lie
    at the W mass. Source: G. Buchalla, A. J. Buras, M. E. Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996).
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        if np.all((x > 0.0) & (x < APART * y)):  # charm and top: nothing special about any point
            return x * y * ((_G(x) - _G(y)) / (x - y))

        u, v = x - 1.0, y - 1.0
        size = np.maximum(np.absolute(x), np.absolute(y))
        both_near = (np.absolute(u) < SERIES_REACH) & (np.absolute(v) < SERIES_REACH)
        close = ~both_near & (np.absolute(x - y) < CLOSE * size)
        either_zero = (x == 0.0) | (y == 0.0)
        special = both_near | close | either_zero

        # Each branch sees harmless arguments only.
        a, b = np.where(special, 2.0, x), np.where(special, 4.0, y)
        slope = (_G(a) - _G(b)) / (a - b)
        if np.any(close):
            slope = np.where(close, _close_slope(np.where(close, x, 2.0), np.where(close, y, 2.0)), slope)
        if np.any(both_near):
            series = _series_slope(_G.series, np.where(both_near, u, 0.0), np.where(both_near, v, 0.0))
            slope = np.where(both_near, series, slope)
        return np.where(either_zero, 0.0 * (x + y), x * y * slope)


def _close_slope(x: Any, y: Any) -> Any:
    """``[g(x) - g(y)]/(x - y)`` for nearly equal arguments away from one."""
    u, v = x - 1.0, y - 1.0
    product = u * v
    # g = A ln a + B with A = 1/4 - 3/(2u) - 3/(4u^2), B = 3/(4u); product rule for divided differences
    slope_a = 1.5 / product + 0.75 * (u + v) / (product * product)
    slope_b = -0.75 / product
    relative = (x - y) / y
    apart = relative != 0.0
    slope_log = np.where(apart, np.log1p(relative) / np.where(apart, relative, 1.0), 1.0 - 0.5 * relative) / y
    return (0.25 - 1.5 / u - 0.75 / (u * u)) * slope_log + slope_a * np.log(y) + slope_b


def _series_slope(coefficients: Sequence[float], u: Any, v: Any) -> Any:
    """Divided difference of a polynomial between `u` and `v`, without subtracting values."""
    value, slope = coefficients[-1], 0.0
    for coefficient in coefficients[-2::-1]:
        slope = slope * u + value
        value = value * v + coefficient
    return slope


def leptonic_box_function(x: Any) -> Any:
    r"""Box function :math:`B_0(x)` with a lepton line, dimensionless.

    :math:`B_0(x) = \frac14 \left[\frac{x}{1-x} + \frac{x \ln x}{(x-1)^2}\right]`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _B0(x)


def z_penguin_function(x: Any) -> Any:
    r"""Z penguin function :math:`C_0(x)` in the 't Hooft-Feynman gauge, dimensionless.

    :math:`C_0(x) = \frac{x}{8} \left[\frac{x-6}{x-1} + \frac{3x+2}{(x-1)^2}\ln x\right]`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _C0(x)


def photon_penguin_function(x: Any) -> Any:
    r"""Photon penguin function :math:`D_0(x)` in the 't Hooft-Feynman gauge, dimensionless; grows as ln x at
    x -> 0.

    :math:`D_0(x) = -\frac49 \ln x + \frac{-19x^3 + 25x^2}{36(x-1)^3} + \frac{x^2(5x^2-2x-6)}{18(x-1)^4}\ln x`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _D0(x)


def gluon_penguin_function(x: Any) -> Any:
    r"""Gluon penguin function :math:`E_0(x)`, dimensionless; grows as ln x at x -> 0.

    :math:`E_0(x) = -\frac23 \ln x + \frac{x^2(15-16x+4x^2)}{6(1-x)^4}\ln x + \frac{x(18-11x-x^2)}{12(1-x)^3}`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _E0(x)


def magnetic_photon_function(x: Any) -> Any:
    r"""Magnetic photon penguin function :math:`D_0'(x)`, dimensionless.

    :math:`D_0'(x) = -\frac{8x^3+5x^2-7x}{12(1-x)^3} + \frac{x^2(2-3x)}{2(1-x)^4}\ln x`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _D0_PRIME(x)


def magnetic_gluon_function(x: Any) -> Any:
    r"""Magnetic gluon penguin function :math:`E_0'(x)`, dimensionless.

    :math:`E_0'(x) = -\frac{x(x^2-5x-2)}{4(1-x)^3} + \frac{3x^2}{2(1-x)^4}\ln x`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _E0_PRIME(x)


def neutrino_function(x: Any) -> Any:
    r"""Gauge-independent function :math:`X_0 = C_0 - 4 B_0` of decays to a neutrino pair, dimensionless.

    :math:`X_0(x) = \frac{x}{8}\left[\frac{x+2}{x-1} + \frac{3x-6}{(x-1)^2}\ln x\right]`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _X0(x)


def charged_lepton_function(x: Any) -> Any:
    r"""Gauge-independent function :math:`Y_0 = C_0 - B_0` of decays to a charged-lepton pair, dimensionless.

    :math:`Y_0(x) = \frac{x}{8}\left[\frac{x-4}{x-1} + \frac{3x}{(x-1)^2}\ln x\right]`
    (Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125, 1996). Argument and result as `box_function`.
    """
    return _Y0(x)


def z_photon_function(x: Any) -> Any:
    r"""Gauge-independent function :math:`Z_0 = C_0 + D_0/4`, dimensionless.

    Source: Buchalla, Buras, Lautenbacher, Rev. Mod. Phys. 68, 1125 (1996). Argument and result as
    `box_function`.
    """
    return _C0(x) + 0.25 * _D0(x)
