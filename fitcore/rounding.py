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


def significant(value: float | None, digits: int = 2, *, sign: bool = False) -> str:
    """Write a number with exactly so many significant digits, zeros included; `-` for nothing.

    `0.10` and `0.0030`, never `0.1` and `0.003`; below 1e-4 and from 1e6 with an exponent.
    """
    if value is None or not math.isfinite(value):
        return "-" if value is None else str(value)
    if value == 0:
        return "0"
    text = f"{value:+.{digits - 1}e}" if sign else f"{value:.{digits - 1}e}"
    power = int(text.split("e")[1])
    if not -5 < power < 6:
        return text
    return signed(value, digits - 1 - power) if sign else fixed(value, digits - 1 - power)


def signed(value: float, decimals: int) -> str:
    """Write a number with some decimals and its sign, plus included; what rounds to zero has none."""
    text = fixed(value, decimals)
    return text if text.startswith("-") or not float(text) else f"+{text}"


def shared_power(*numbers: float | None, error: float | None = None) -> int:
    """Return the power of ten that a row of a table writes behind its numbers; 0 for none.

    Parameters
    ----------
    numbers : float or None
        All numbers of the row that say how large it is.
    error : float, optional
        Large numbers get a power only where it is 100 or more.
    """
    sizes = [abs(x) for x in numbers if x is not None and math.isfinite(x) and x]
    if not sizes:
        return 0
    power = math.floor(math.log10(max(sizes)))
    coarse = error is not None and math.isfinite(error) and error > 0 and last_decimal(error) < 0
    return power if power < -3 or (power > 5 and coarse) else 0


def _scaled(value: float, decimals: int, power: int) -> str:
    return fixed(value * 10.0**-power if power else value, decimals + power)


def _suffix(power: int) -> str:
    return f"e{power:+03d}" if power else ""


def share(value: float, whole: float, *, sign: bool = False, power: int = 0) -> str:
    """Write a part of an uncertainty: two digits, but no more than two decimals beyond those of the whole."""
    if not math.isfinite(value):
        return str(value)
    decimals = last_decimal(whole) + 2 if whole > 0 else 6
    if value:
        decimals = min(decimals, last_decimal(abs(value)))
    scaled = value * 10.0**-power
    return (signed if sign else fixed)(scaled, decimals + power) + _suffix(power)


def with_error(
    value: float,
    plus: float | None,
    minus: float | None = None,
    rule: Rule = "two-digits",
    power: int | None = None,
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
    power : int, optional
        Power of ten written behind, 0 for none; by default its own (`shared_power` gives that of a row).

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
    if power is None:
        power = shared_power(value, *finite, error=min(finite))
    shown = [_scaled(x, decimals, power) for x in (value, plus, minus)]
    text = f"{shown[0]} {_pair(shown[1], shown[2])}"
    return f"({text}){_suffix(power)}" if power else text


def _pair(plus: str, minus: str) -> str:
    return f"+- {plus}" if plus == minus else f"+{plus} -{minus}"


def like_error(value: float, error: float, power: int | None = None) -> str:
    """Write a value alone, with the decimals that it would have beside this error."""
    if not (math.isfinite(value) and math.isfinite(error) and error > 0):
        return number(value)
    if power is None:
        power = shared_power(value, error, error=error)
    return _scaled(value, last_decimal(error), power) + _suffix(power)


def interval(
    low: float | None, high: float | None, error: float | None = None, power: int | None = None
) -> str:
    """Write an interval, rounded to two digits of its half-width (or of `error`).

    `power` is the power of ten written behind, as in `with_error`.
    """
    if low is None and high is None:
        return "-"
    known = error is not None and math.isfinite(error) and error > 0
    if low is None or high is None or not (math.isfinite(low) and math.isfinite(high)) or high <= low:
        if not known:
            return f"[{_end(low, '-inf')}, {_end(high, 'inf')}]"
        ends = [
            like_error(end, error or math.nan, power)
            if end is not None and math.isfinite(end)
            else _end(end, missing)
            for end, missing in ((low, "-inf"), (high, "inf"))
        ]
        return f"[{ends[0]}, {ends[1]}]"
    size = error if known and error is not None else (high - low) / 2
    decimals = last_decimal(size)
    if power is None:
        power = shared_power(low, high, error=size)
    return f"[{_scaled(low, decimals, power)}, {_scaled(high, decimals, power)}]{_suffix(power)}"


def _end(value: float | None, missing: str) -> str:
    return missing if value is None else number(value)
