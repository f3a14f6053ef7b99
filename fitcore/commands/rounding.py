"""Writing a number with its error: how many digits, and which form.

Two rules decide the digits of the error: `"two-digits"` (the default everywhere) keeps two
significant digits; `"pdg"` is the rule of the Review of Particle Physics, section "Introduction",
"Rounding": of the three leading digits of the error, 100 to 354 keep two significant digits, 355 to 949
keep one, 950 to 999 round up to 1000 and keep two. The value gets the same last decimal place.
"""

from __future__ import annotations

import math
from decimal import ROUND_HALF_UP, Context, Decimal
from typing import Literal

Rule = Literal["two-digits", "pdg"]

_ENOUGH_DIGITS = Context(prec=700)


def last_decimal(error: float, rule: Rule = "two-digits") -> int:
    """Return the number of decimals at which an error, and its value, are rounded.

    Parameters
    ----------
    error : float
        A positive, finite error.
    rule : {"two-digits", "pdg"}
        See the module's first lines.

    Returns
    -------
    int
        Decimals after the point; negative for errors of a hundred and more.
    """
    if not (math.isfinite(error) and error > 0):
        message = f"an error must be positive and finite to round with it, got {error!r}"
        raise ValueError(message)
    # decimal formatting avoids the binary noise of log10 and division near powers of ten
    digits, exponent = f"{error:.2e}".split("e")
    leading, power = int(digits.replace(".", "")), int(exponent)
    if rule == "pdg":
        # 950 to 999 becomes 1000, whose second digit sits where the first digit was
        return 1 - power if leading < 355 else -power
    return 1 - int(f"{error:.1e}".split("e")[1])


def fixed(value: float, decimals: int) -> str:
    """Write a number with some decimals, halves away from zero; negative ones round before the point."""
    if not math.isfinite(value):
        return str(value)
    # through the shortest decimal text: 0.95 is meant, not the binary fraction just below it
    rounded = Decimal(repr(float(value))).quantize(
        Decimal(1).scaleb(-decimals), ROUND_HALF_UP, _ENOUGH_DIGITS
    )
    return f"{rounded or abs(rounded):.{max(decimals, 0)}f}"  # no "-0.0"


def number(value: float | None, digits: int = 6) -> str:
    """Write a number that has no error, with significant digits; `-` for nothing."""
    if value is None:
        return "-"
    return f"{value:.{digits}g}"


def with_error(
    value: float, plus: float | None, minus: float | None = None, rule: Rule = "two-digits"
) -> str:
    """Write a value with its error, symmetric or not, in one readable form.

    Parameters
    ----------
    value : float
        The central value.
    plus, minus : float or None
        Upper and lower error, both positive; `minus` defaults to `plus`, `plus = None` means no error.
    rule : {"two-digits", "pdg"}
        Digits kept of the (smaller) error.

    Returns
    -------
    str
        `0.22519 +- 0.00068`, `0.8334 +0.0107 -0.0105` or, where the leading digits start late,
        `(3.203 +- 0.070)e-05`.
    """
    if plus is None:
        return number(value)
    minus = plus if minus is None else minus
    finite = [error for error in (plus, minus) if math.isfinite(error) and error > 0]
    if not math.isfinite(value) or not finite:
        return f"{number(value)} {_pair(number(plus), number(minus))}"
    decimals = last_decimal(min(finite), rule)
    largest = max(abs(value), *finite)
    power = math.floor(math.log10(largest))
    if power < -3 or (power > 5 and decimals < 0):
        factor = 10.0**-power
        shown = [fixed(x * factor, decimals + power) for x in (value, plus, minus)]
        return f"({shown[0]} {_pair(shown[1], shown[2])})e{power:+03d}"
    shown = [fixed(x, decimals) for x in (value, plus, minus)]
    return f"{shown[0]} {_pair(shown[1], shown[2])}"


def _pair(plus: str, minus: str) -> str:
    return f"+- {plus}" if plus == minus else f"+{plus} -{minus}"


def interval(low: float | None, high: float | None, error: float | None = None) -> str:
    """Write an interval, rounded to two digits of its half-width (or of `error`)."""
    if low is None and high is None:
        return "-"
    if low is None or high is None or not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        return f"[{_end(low, '-inf')}, {_end(high, 'inf')}]"
    decimals = last_decimal(error or (high - low) / 2)
    power = math.floor(math.log10(max(abs(low), abs(high))))
    if power < -3 or (power > 5 and decimals < 0):
        factor = 10.0**-power
        low, high = low * factor, high * factor
        return f"[{fixed(low, decimals + power)}, {fixed(high, decimals + power)}]e{power:+03d}"
    return f"[{fixed(low, decimals)}, {fixed(high, decimals)}]"


def _end(value: float | None, missing: str) -> str:
    return missing if value is None else number(value)
