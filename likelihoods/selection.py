"""Keeping some entries of an Inputs, and changing single numbers."""

from __future__ import annotations

import difflib
import math
import re
import tomllib
from collections.abc import Iterable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from likelihoods import units
from likelihoods.entries import UNSHARED_SOURCES, Declared, Entry, Notice, ParameterSetting
from likelihoods.fields import real
from observables.errors import InputError, UnknownNameError

if TYPE_CHECKING:
    from likelihoods.document import CatalogueLike
    from likelihoods.inputs import Inputs

_KEYS = ("value", "error", "errors.SOURCE", "flat_halfwidth", "inflate")
_PARAMETER_KEYS = ("start", "lower", "upper", "fixed")
#: A number that changes by more than this is pointed out: it may be in another unit than meant.
SUSPICIOUS_FACTOR = 10.0
_PAIR = re.compile(r"(\[.*\])\s*([^\s\]].*)?")
_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_LIKE_A_PAIR = re.compile(rf"\(?\s*{_NUMBER}\s*(?:[,/:;]|(?=[-+]))\s*{_NUMBER}\s*\)?")
_WITH_UNIT = re.compile(rf"({_NUMBER})\s*(\S.*)")


def close(name: str, known: Iterable[str]) -> list[str]:
    """Names that look like ``name``, best first."""
    return difflib.get_close_matches(name, list(known), n=3, cutoff=0.3)


def keep(inputs: Inputs, only: tuple[str, ...], without: tuple[str, ...]) -> Inputs:
    """Keep the entries that ``only`` names (all if empty) and ``without`` does not."""
    known = dict.fromkeys(name for entry in inputs.entries for name in sorted(entry.names))
    for name in (*only, *without):
        if name not in known:
            raise UnknownNameError(name, "entry or group", close(name, known))
    if not only and not without:
        return inputs
    kept = tuple(
        entry
        for entry in inputs.entries
        if (not only or not entry.names.isdisjoint(only)) and entry.names.isdisjoint(without)
    )
    if not kept:
        raise InputError(f"{inputs.path}: the selection leaves no entry; ask for fewer exclusions")
    ids = {entry.id for entry in kept}
    blocks = (block.restricted(ids) for block in inputs.blocks)
    return replace(
        inputs,
        entries=kept,
        blocks=tuple(block for block in blocks if block is not None),
        correlations=tuple(c for c in inputs.correlations if ids.issuperset(c.between)),
    )


def change(inputs: Inputs, settings: tuple[str, ...], catalogue: CatalogueLike | None) -> Inputs:
    """Apply settings such as ``ID.error=0.01``, one after the other."""
    for setting in settings:
        target, equals, written = setting.rpartition("=")
        target, written = target.strip(), written.strip()
        if not equals or not target or not written:
            raise InputError(f'setting "{setting}": write ID.error=NUMBER, or another of {", ".join(_KEYS)}')
        if target.startswith("parameters."):
            inputs = _change_parameter(inputs, setting, target, written, catalogue)
        else:
            inputs = _change_entry(inputs, setting, target, written)
    return inputs


def _change_entry(inputs: Inputs, setting: str, target: str, written: str) -> Inputs:
    entry, key = _entry_and_key(inputs, setting, target)
    declared = _changed_numbers(entry, setting, key, written)
    changed = entry.restated(declared)
    if key == "inflate":
        changed = replace(changed, inflate_group=None)
    notice = Notice("changed", entry.id, _what_changed(inputs, entry, declared, key))
    return replace(
        inputs,
        entries=tuple(changed if other is entry else other for other in inputs.entries),
        history=(*inputs.history, notice),
    )


def _entry_and_key(inputs: Inputs, setting: str, target: str) -> tuple[Entry, str]:
    # Ids may hold dots: the longest id that the target starts with counts.
    for entry in sorted(inputs.entries, key=lambda entry: -len(entry.id)):
        if target.startswith(entry.id + "."):
            return entry, target[len(entry.id) + 1 :]
    if target in inputs.ids:
        raise InputError(
            f'setting "{setting}": say which number: {target}.error=..., or another of {", ".join(_KEYS)}'
        )
    identity = (
        target.partition(".errors.")[0] if ".errors." in target else target.rpartition(".")[0] or target
    )
    raise UnknownNameError(identity, "entry", close(identity, inputs.ids))


def _changed_numbers(entry: Entry, setting: str, key: str, written: str) -> Declared:
    declared = entry.declared
    if key == "value":
        return replace(declared, value=_number(setting, written, declared.unit))
    if key == "error":
        pair = _error(setting, written, declared.unit)
        return replace(declared, error=pair, errors={})
    if key == "inflate":
        return replace(declared, inflate=_positive(setting, _number(setting, written, "1")))
    if key == "flat_halfwidth":
        width = _number(setting, written, declared.unit)
        return replace(declared, flat_halfwidth=width if width == 0.0 else _positive(setting, width))
    prefix, _, source = key.partition(".")
    if prefix == "errors" and source in declared.errors:
        error = _number(setting, written, declared.unit)
        if error == 0.0 or (error < 0.0 and source in UNSHARED_SOURCES):
            raise InputError(f'setting "{setting}": the error must be positive')
        return replace(declared, errors=declared.errors | {source: error})
    if prefix == "errors":
        sources = ", ".join(declared.errors) or "none"
        raise InputError(
            f'setting "{setting}": entry "{entry.id}" has no error source "{source}"; it has: {sources}'
        )
    raise InputError(f'setting "{setting}": unknown key "{key}"; use one of {", ".join(_KEYS)}')


def _what_changed(inputs: Inputs, entry: Entry, new: Declared, key: str) -> str:
    """Say what a setting did: old -> new in the unit of the file, lost named sources, a suspicious size."""
    old, unit = entry.declared, "" if key == "inflate" or entry.declared.unit == "1" else entry.declared.unit
    pairs = [_numbers_of(old, key), _numbers_of(new, key)]
    shown = " -> ".join(_written(numbers) for numbers in pairs)
    parts = [
        f"{key} {shown}" + (f" (in units of {unit})" if unit[:1].isdigit() else f" {unit}" if unit else "")
    ]
    if key == "error" and old.errors:
        lost = [name for name in entry.shared_errors if _is_shared(inputs, entry, name)]
        parts.append(f"replaces the named errors {', '.join(old.errors)}")
        if lost:
            parts.append(f"NO LONGER SHARES {', '.join(lost)} with other entries")
    factors = [abs(b / a) for a, b in zip(*pairs, strict=True) if a and b]
    strange = [f for f in factors if not 1.0 / SUSPICIOUS_FACTOR <= f <= SUSPICIOUS_FACTOR]
    if strange:
        size = float(f"{max(strange[0], 1 / strange[0]):.2g}")
        much = f"{size:,.0f} times {'larger' if strange[0] > 1 else 'smaller'}"
        hint = f'; a number alone is in the unit of the file, "{old.unit}"' if key != "inflate" else ""
        other = "deg" if old.unit == "rad" else "1"
        hint += (
            f'; write another behind it, such as "{key}=NUMBER {other}"'
            if _is_scaled(old.unit) and hint
            else ""
        )
        parts.append(f"CAUTION: {much} than before{hint}")
    return "; ".join(parts)


def _is_scaled(unit: str) -> bool:
    """Whether a unit is a pure number other than 1, which is easily forgotten."""
    return unit in ("%", "percent") or (unit != "1" and _is_number(unit))


def _is_shared(inputs: Inputs, entry: Entry, source: str) -> bool:
    return any(source in other.shared_errors for other in inputs.entries if other is not entry)


def _numbers_of(declared: Declared, key: str) -> tuple[float, float]:
    """The number that a key stands for, twice, or the upward and downward error."""
    if key == "error":
        both = declared.error
        return (math.hypot(*declared.errors.values()),) * 2 if both is None else both
    source = key.removeprefix("errors.")
    number = declared.errors[source] if key != source else getattr(declared, key)
    return (float(number),) * 2


def _written(numbers: tuple[float, float]) -> str:
    plus, minus = numbers
    return f"{plus:.6g}" if plus == minus else f"[{plus:.6g}, {minus:.6g}]"


def _change_parameter(
    inputs: Inputs, setting: str, target: str, written: str, catalogue: CatalogueLike | None
) -> Inputs:
    if catalogue is None:
        from observables import catalogue as public

        catalogue = public.with_hypothesis_parameters()
    name, _, key = target.removeprefix("parameters.").rpartition(".")
    if key not in _PARAMETER_KEYS:
        raise InputError(
            f'setting "{setting}": write parameters.NAME.KEY=..., KEY one of {", ".join(_PARAMETER_KEYS)}'
        )
    if name not in catalogue:
        raise UnknownNameError(name, "parameter", catalogue.close_matches(name))
    node = catalogue[name]
    if node.kind == "quantity":
        raise InputError(f'setting "{setting}": "{name}" is computed from others; only parameters can be set')
    value: Any
    if key == "fixed":
        if written not in ("true", "false"):
            raise InputError(f'setting "{setting}": fixed must be true or false')
        value = written == "true"
    else:
        value = _number(setting, written, node.unit)
    changed = replace(inputs.parameters.get(name, ParameterSetting()), **{key: value})
    if changed.fixed and changed.start is None:
        raise InputError(
            f'setting "{setting}": a fixed parameter needs its value; set parameters.{name}.start first'
        )
    if changed.lower is not None and changed.upper is not None and changed.lower >= changed.upper:
        raise InputError(f'setting "{setting}": lower must be below upper')
    before = getattr(inputs.parameters.get(name, ParameterSetting()), key)
    if before is None:
        before = getattr(node, "value" if node.kind == "constant" and key == "start" else key, None)
    notice = Notice("changed", name, _parameter_changed(key, before, value, node.unit))
    return replace(inputs, parameters=inputs.parameters | {name: changed}, history=(*inputs.history, notice))


def _parameter_changed(key: str, old: Any, new: Any, unit: str) -> str:
    old, new = (f"{x:.6g}" if isinstance(x, float) else str(x).lower() for x in (old, new))
    unit = "" if key == "fixed" or unit == "1" else f" {unit}"
    return f"{key} set to {new}{unit}" if old == "none" else f"{key} {old} -> {new}{unit}"


def _number(setting: str, written: str, unit: str) -> float:
    """Read a number, followed by a unit or not, into ``unit``."""
    found = _WITH_UNIT.fullmatch(written)
    text, own_unit = found.groups() if found and not _is_number(written) else (written, unit)
    try:
        number = real(float(text))
        scale = units.factor(own_unit, unit)
    except units.UnitError as error:
        raise InputError(f'setting "{setting}": {error}') from error
    except ValueError:
        raise InputError(f'setting "{setting}": "{text}" is not a number') from None
    if isinstance(number, str):
        raise InputError(f'setting "{setting}": {number}')
    return number * scale


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _error(setting: str, written: str, unit: str) -> tuple[float, float]:
    """Read one error, or ``[PLUS, MINUS]``, either with a unit behind it."""
    how = "write error=NUMBER or error=[PLUS, MINUS], both positive, with or without a unit behind"
    if written.startswith("["):
        found = _PAIR.fullmatch(written)
        try:
            pair = tomllib.loads(f"pair = {found[1] if found else written}")["pair"]
        except tomllib.TOMLDecodeError:
            raise InputError(f'setting "{setting}": {how}') from None
        numbers = [real(item) for item in pair]
        if len(numbers) != 2 or any(isinstance(number, str) for number in numbers):
            raise InputError(f'setting "{setting}": write error=[PLUS, MINUS], two positive numbers')
        own_unit = (found[2] if found else None) or unit
        plus, minus = (
            _positive(setting, _number(setting, f"{number!r} {own_unit}", unit)) for number in numbers
        )
        return plus, minus
    if _LIKE_A_PAIR.fullmatch(written):
        raise InputError(f'setting "{setting}": "{written}" is not one number; {how}')
    single = _positive(setting, _number(setting, written, unit))
    return single, single


def _positive(setting: str, number: float) -> float:
    if not number > 0.0:
        raise InputError(f'setting "{setting}": must be positive, not {number:g}')
    return number
