"""Unit strings."""

from __future__ import annotations

import contextlib
import math
import subprocess
import sys

import pytest
from hypothesis import given
from hypothesis import strategies as st

from likelihoods import units
from likelihoods.units import UnitError, factor


@pytest.mark.parametrize(
    ("unit", "target", "expected"),
    [
        ("GeV", "GeV", 1.0),
        ("MeV", "GeV", 1e-3),
        ("keV", "GeV", 1e-6),
        ("TeV", "GeV", 1e3),
        ("1e-3 GeV", "GeV", 1e-3),
        ("GeV/c^2", "GeV", 1.0),
        ("MeV/c", "GeV", 1e-3),
        ("%", "1", 1e-2),
        ("percent", "1", 1e-2),
        ("permille", "1", 1e-3),
        ("1e-3", "1", 1e-3),
        ("10^-3", "1", 1e-3),
        ("10**-3", "1", 1e-3),
        ("1", "%", 100.0),
        ("rad", "deg", 180.0 / math.pi),
        ("deg", "rad", math.pi / 180.0),
        ("degree", "deg", 1.0),
        ("mrad", "rad", 1e-3),
        ("°", "deg", 1.0),
        ("fs", "s", 1e-15),
        ("ps", "s", 1e-12),
        ("ns", "s", 1e-9),
        ("us", "s", 1e-6),
        ("µs", "s", 1e-6),
        ("min", "s", 60.0),
        ("1/fs", "1/ps", 1e3),
        ("ps^-1", "1/ps", 1.0),
        ("ps**-1", "1/ps", 1.0),
        ("1/s", "1/ps", 1e-12),
        ("1e12 hbar/s", "1/ps", 1.0),
        ("10^10 s^-1", "1/ps", 1e-2),
        (" 1/ps ", "1/ps", 1.0),
    ],
)
def test_factor(unit: str, target: str, expected: float) -> None:
    assert math.isclose(factor(unit, target), expected, rel_tol=2e-15)


@pytest.mark.parametrize(
    ("unit", "target"),
    [
        ("GeV", "1/ps"),
        ("MeV", "1/s"),
        ("ps", "1/ps"),
        ("1", "deg"),
        ("deg", "1"),
        ("%", "rad"),
        ("s", "GeV"),
        ("1", "GeV"),
        ("GeV^2", "GeV"),
    ],
)
def test_different_things(unit: str, target: str) -> None:
    with pytest.raises(UnitError, match="cannot be converted to"):
        factor(unit, target)


@pytest.mark.parametrize(
    "unit", ["furlong", "gev!", "1/", "GeV(", "import os", "s-1", "inverse ps", "1 2", "\n", "\0", "x" * 100]
)
def test_not_known(unit: str) -> None:
    with pytest.raises(UnitError):
        factor(unit, "1/ps")


@pytest.mark.parametrize("unit", ["0", "-1", "nan", "inf", "-2 GeV", "0 GeV", "1e400"])
def test_not_a_scale(unit: str) -> None:
    with pytest.raises(UnitError, match=r"positive scale|not known"):
        factor(unit, "GeV" if "GeV" in unit else "1")


@pytest.mark.parametrize(
    "unit", ["9^9^9^9", "9**9**9", "(9)^(9)^(9)", "10^99^99", "2.10^3", "10^(9^9)", "10^1000", "1e3^99"]
)
def test_powers_cannot_stall_the_reader(unit: str) -> None:
    with pytest.raises(UnitError):
        factor(unit, "1")


@given(st.text(max_size=12))
def test_any_text_is_a_factor_or_a_unit_error(text: str) -> None:
    with contextlib.suppress(UnitError):
        assert factor(text, "GeV") > 0.0


def test_equal_strings_and_plain_scales_need_no_unit_library() -> None:
    code = (
        "import sys; from likelihoods.units import factor; "
        "factor('1/ps', '1/ps'); factor('%', '1'); factor('1e-3', '1'); "
        "sys.exit('pint' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_common_units_agree_with_the_registry() -> None:
    for unit in units._COMMON:
        for target in units._COMMON:
            have, want = units._parse(unit), units._parse(target)
            if have.dimensionality != want.dimensionality:
                with pytest.raises(UnitError, match="cannot be converted to"):
                    factor(unit, target)
            else:
                assert math.isclose(factor(unit, target), have.magnitude / want.magnitude, rel_tol=1e-15)


def test_published_inputs_do_not_wait_for_pint() -> None:
    code = (
        "import sys, likelihoods; likelihoods.load_inputs('averages-2026'); sys.exit('pint' in sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
