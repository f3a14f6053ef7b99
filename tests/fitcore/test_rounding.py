"""Digits: the published rounding rule, and properties of every text."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fitcore.rounding import (
    fixed,
    interval,
    last_decimal,
    like_error,
    number,
    share,
    shared_power,
    significant,
    with_error,
)


@pytest.mark.parametrize(
    ("value", "error", "expected"),
    [
        # The two worked examples of the Review of Particle Physics, "Introduction", "Rounding" (from memory).
        (0.827, 0.119, "0.83 +- 0.12"),
        (0.827, 0.367, "0.8 +- 0.4"),
        # The edges of the rule.
        (10.0, 0.354, "10.00 +- 0.35"),
        (10.0, 0.355, "10.0 +- 0.4"),
        (10.0, 0.949, "10.0 +- 0.9"),
        (10.0, 0.950, "10.0 +- 1.0"),
    ],
)
def test_rule_of_the_review_of_particle_physics(value: float, error: float, expected: str) -> None:
    assert with_error(value, error, rule="pdg") == expected


@pytest.mark.parametrize(
    ("arguments", "expected"),
    [
        ((0.225190, 0.00068), "0.22519 +- 0.00068"),
        ((0.83341, 0.0107, 0.0105), "0.833 +- 0.011"),
        ((0.83341, 0.01052, 0.01048), "0.833 +0.011 -0.010"),
        ((3.203e-5, 7.0e-7), "(3.203 +- 0.070)e-05"),
        ((84.1, 3.7, 3.0), "84.1 +3.7 -3.0"),
        ((17.765, 0.006), "17.7650 +- 0.0060"),
        ((1.0, 0.0996), "1.00 +- 0.10"),
        ((1234.0, 123.0), "1230 +- 120"),
        ((-0.0001, 0.01), "0.000 +- 0.010"),
        ((0.0, 0.5), "0.00 +- 0.50"),
        ((4.4e-9, 1e-10), "(4.40 +- 0.10)e-09"),
        ((2.5e8, 1.2e6), "(2.500 +- 0.012)e+08"),
        ((1.0, None), "1"),
        ((1.0, 0.1, 0.0), "1.00 +0.10 -0.00"),
        ((1.0, math.inf, 0.1), "1.00 +inf -0.10"),
        ((math.nan, 0.1), "nan +- 0.1"),
    ],
)
def test_forms(arguments: tuple[float, ...], expected: str) -> None:
    assert with_error(*arguments) == expected


@given(
    value=st.floats(-1e6, 1e6),
    error=st.floats(1e-12, 1e6),
)
def test_text_gives_back_value_and_error(value: float, error: float) -> None:
    text = with_error(value, error)
    match = re.fullmatch(r"\(?(\S+) \+- ([^)e]+)\)?(?:e([-+]\d+))?", text)
    assert match is not None, text
    power = 10.0 ** int(match[3] or 0)
    assert float(match[2]) * power == pytest.approx(error, rel=0.0501)  # two digits: half of 1 in 10
    step = 10.0 ** -last_decimal(error)
    assert abs(float(match[1]) * power - value) <= 0.5 * step * (1 + 1e-6) + 1e-9 * abs(value)


@given(error=st.floats(1e-300, 1e300), rule=st.sampled_from(["two-digits", "pdg"]))
def test_rounded_error_has_one_or_two_digits(error: float, rule: str) -> None:
    units = error * 10.0 ** last_decimal(error, rule) if abs(last_decimal(error, rule)) < 300 else 50.0  # type: ignore[arg-type]
    assert 3.5 <= units < 100


@pytest.mark.parametrize("error", [0.0, -1.0, math.nan, math.inf])
def test_rounding_needs_a_positive_error(error: float) -> None:
    with pytest.raises(ValueError, match="positive and finite"):
        last_decimal(error)


@pytest.mark.parametrize(
    ("ends", "expected"),
    [
        ((0.22451, 0.22587), "[0.22451, 0.22587]"),
        ((3.133e-5, 3.273e-5), "[3.133, 3.273]e-05"),
        ((None, None), "-"),
        ((0.1, math.inf), "[0.1, inf]"),
        ((None, 2.0), "[-inf, 2]"),
        ((1.0, 1.0), "[1, 1]"),
    ],
)
def test_intervals(ends: tuple[float | None, float | None], expected: str) -> None:
    assert interval(*ends) == expected


def test_numbers() -> None:
    assert number(None) == "-"
    assert number(0.1234567) == "0.123457"
    assert fixed(-0.0004, 2) == "0.00"
    assert fixed(1251.0, -2) == "1300"


@pytest.mark.parametrize(
    ("arguments", "expected"),
    [
        ((0.1,), "0.10"),
        ((0.003,), "0.0030"),
        ((1.0,), "1.0"),
        ((4e-5,), "4.0e-05"),
        ((0.0996,), "0.10"),
        ((None,), "-"),
        ((0.0,), "0"),
        ((2.856e-3, 3), "0.00286"),
        ((1234567.0,), "1.2e+06"),
    ],
)
def test_significant_digits_keep_their_zeros(arguments: tuple[float, ...], expected: str) -> None:
    assert significant(*arguments) == expected


@given(value=st.floats(1e-12, 1e12), digits=st.integers(1, 6))
def test_significant_digits_give_back_the_number(value: float, digits: int) -> None:
    text = significant(value, digits)
    assert float(text) == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits))
    assert significant(value, digits, sign=True).removeprefix("+") == text


def test_one_power_for_a_row() -> None:
    power = shared_power(1.49e-4, 9.71e-5, error=4.2e-6)
    assert with_error(1.49e-4, 0.14e-4, power=power) == "(1.49 +- 0.14)e-04"
    assert with_error(9.71e-5, 0.42e-5, power=power) == "(0.971 +- 0.042)e-04"
    assert interval(9.29e-5, 10.13e-5, 0.42e-5, power=power) == "[0.929, 1.013]e-04"
    assert like_error(1.0e-4, 0.42e-5, power) == "1.000e-04"
    assert shared_power(0.5, 1e-9) == 0
    assert shared_power(None, math.inf) == 0
    assert shared_power(2.5e8, error=1.2e6) == 8
    assert shared_power(2.5e8, error=0.1) == 0


def test_parts_of_an_uncertainty() -> None:
    assert share(0.003, 0.0066, sign=True) == "+0.0030"
    assert share(0.0026, 0.0066, sign=True) == "+0.0026"
    assert share(-8.1e-5, 0.0066, sign=True) == "-0.000081"
    assert share(1e-9, 0.0066) == "0.000000"
    assert share(8.6e-8, 5.7e-7, sign=True, power=-7) == "+0.86e-07"


def test_open_ends_have_the_decimals_of_the_error() -> None:
    assert interval(0.1, math.inf, 0.013) == "[0.100, inf]"
    assert interval(-math.inf, 0.5, 0.1) == "[-inf, 0.50]"
