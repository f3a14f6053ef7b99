"""Unit strings to factors between units.

The registry holds what quark-mixing inputs are written in, and nothing else. Angles are a dimension of
their own, so that a plain number is never taken for radians, and an energy is never silently turned into a
frequency: both are the kind of slip that a unit check is for.
"""

from __future__ import annotations

import math
import re
from functools import lru_cache
from typing import Any

_DEFINITIONS = """
femto- = 1e-15 = f-
pico- = 1e-12 = p-
nano- = 1e-9 = n-
micro- = 1e-6 = u- = µ- = μ-
milli- = 1e-3 = m-
centi- = 1e-2 = c-
kilo- = 1e3 = k-
mega- = 1e6 = M-
giga- = 1e9 = G-
tera- = 1e12 = T-
second = [time] = s
minute = 60 * second = min
hour = 3600 * second = h
day = 86400 * second = d
year = 365.25 * day = yr
hertz = 1 / second = Hz
electron_volt = [energy] = eV
meter = [length] = m
barn = 1e-28 * meter ** 2 = b
radian = [angle] = rad
degree = 3.141592653589793 / 180 * radian = deg = °
percent = 0.01 = %
permille = 0.001 = ‰
speed_of_light = 1 = c
hbar = 1 = ħ
"""

_DIMENSIONLESS = {"1": 1.0, "": 1.0, "%": 1e-2, "percent": 1e-2}
# What nearly every entry is written in, so that a fit does not wait for pint: dimension, mantissa, power of ten.
_ENERGIES = {"meV": -3, "eV": 0, "keV": 3, "MeV": 6, "GeV": 9, "TeV": 12}
_TIMES = {"fs": -15, "ps": -12, "ns": -9, "us": -6, "ms": -3, "s": 0}
_COMMON: dict[str, tuple[str, float, int]] = {
    **{unit: ("energy", 1.0, power) for unit, power in _ENERGIES.items()},
    **{unit: ("time", 1.0, power) for unit, power in _TIMES.items()},
    **{f"1/{unit}": ("1/time", 1.0, -power) for unit, power in _TIMES.items()},
    "rad": ("angle", 1.0, 0),
    "mrad": ("angle", 1.0, -3),
    "deg": ("angle", math.pi / 180.0, 0),
}
#: CODATA 2022, exact in the revised SI: hbar = 6.582119569e-25 GeV s.
HBAR_HINT = (
    ": one is an energy, the other a rate; divide the energy by hbar = 6.582119569e-13 GeV ps and write the "
    'unit "1/ps" ("hbar/ps" means the same)'
)
# Powers are kept small and unchained, so that no string can make the parser compute for minutes.
_POWER = re.compile(r"\*\*|\^")
_TAME_POWER = re.compile(r"(?:[A-Za-z]|(?<![\d.])10)\s*(?:\*\*|\^)\s*[-+]?\d{1,2}(?![\d.]|\s*(?:\*\*|\^))")


class UnitError(ValueError):
    """A unit string that is not known or does not fit; the text says which and why."""


@lru_cache(maxsize=1)
def _registry() -> Any:
    import pint  # imported only when a unit needs converting: it costs more than reading the file

    registry: Any = pint.UnitRegistry(
        None, cache_folder=None, preprocessors=[lambda text: text.replace("%", " percent ")]
    )
    for line in _DEFINITIONS.strip().splitlines():
        registry.define(line)
    return registry


@lru_cache(maxsize=512)
def _parse(text: str) -> Any:
    if len(text) > 80 or len(_POWER.findall(text)) != len(_TAME_POWER.findall(text)):
        raise UnitError(f'unit "{text[:80]}" is not understood')
    try:
        quantity = _registry().parse_expression(text)
        quantity = _registry().Quantity(quantity).to_base_units()
        magnitude = float(quantity.magnitude)
    except Exception as error:  # the parser raises whatever its tokeniser meets
        raise UnitError(f'unit "{text}" is not known') from error
    if not (math.isfinite(magnitude) and magnitude > 0.0):
        raise UnitError(f'unit "{text}" is not a positive scale')
    return quantity


def _scale(text: str) -> float | None:
    """Give the value of a unit that is a pure number ("1", "1e-3", "%"), None for any other."""
    text = text.strip()
    if text in _DIMENSIONLESS:
        return _DIMENSIONLESS[text]
    try:
        value = float(text)
    except ValueError:
        return None
    if not (math.isfinite(value) and value > 0.0):
        raise UnitError(f'unit "{text}" is not a positive scale')
    return value


@lru_cache(maxsize=1024)
def factor(unit: str, target: str) -> float:
    """Factor that turns a number in ``unit`` into one in ``target``.

    Parameters
    ----------
    unit, target : str
        For example "MeV" and "GeV", "%" and "1", "1e-3" and "1", "rad" and "deg", "1/fs" and "1/ps".

    Raises
    ------
    UnitError
        When a string is not known, or the two measure different things.
    """
    if unit == target:
        return 1.0
    if not unit.strip():
        raise UnitError(f'unit is empty; write "{target}"')
    if unit in _COMMON and target in _COMMON:
        (dimension, mantissa, power), (wanted, target_mantissa, target_power) = _COMMON[unit], _COMMON[target]
        if dimension != wanted:
            hint = HBAR_HINT if {dimension, wanted} == {"energy", "1/time"} else ""
            raise UnitError(f'unit "{unit}" cannot be converted to "{target}"{hint}')
        return mantissa / target_mantissa * float(f"1e{power - target_power}")
    scale, target_scale = _scale(unit), _scale(target)
    if scale is not None and target_scale is not None:
        return scale / target_scale
    have, want = _parse(unit), _parse(target)
    if have.dimensionality != want.dimensionality:
        kinds = {str(have.dimensionality), str(want.dimensionality)}
        hint = HBAR_HINT if kinds == {"[energy]", "1 / [time]"} else ""
        raise UnitError(f'unit "{unit}" cannot be converted to "{target}"{hint}')
    return float(have.magnitude) / float(want.magnitude)
