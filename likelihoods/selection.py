"""Keeping some entries of an Inputs, and changing single numbers."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from likelihoods import units
from likelihoods.entries import UNSHARED_SOURCES, Declared, Entry, Notice, ParameterSetting
from likelihoods.fields import describe, real
from observables.errors import InputError, UnknownNameError

if TYPE_CHECKING:
    from likelihoods.document import CatalogueLike
    from likelihoods.inputs import Inputs

_KEYS = ("value", "error", "errors.SOURCE", "flat_halfwidth", "inflate")
_PARAMETER_KEYS = ("start", "lower", "upper", "fixed")
_WITH_UNIT = re.compile(r"([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*(\S.*)")


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
    notice = Notice("changed", entry.id, f"{key} set to {written}")
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
    notice = Notice("changed", name, f"{key} set to {written}")
    return replace(inputs, parameters=inputs.parameters | {name: changed}, history=(*inputs.history, notice))


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
    if not written.startswith("["):
        single = _positive(setting, _number(setting, written, unit))
        return single, single
    try:
        pair = tomllib.loads(f"pair = {written}")["pair"]
    except tomllib.TOMLDecodeError:
        raise InputError(f'setting "{setting}": write error=NUMBER or error=[PLUS, MINUS]') from None
    numbers = [real(item) for item in pair]
    if len(numbers) != 2 or any(isinstance(number, str) for number in numbers):
        raise InputError(f'setting "{setting}": write error=[PLUS, MINUS], not {describe(pair)}')
    plus, minus = (_positive(setting, number) for number in numbers if isinstance(number, float))
    return plus, minus


def _positive(setting: str, number: float) -> float:
    if not number > 0.0:
        raise InputError(f'setting "{setting}": must be positive, not {number:g}')
    return number
