"""Writing an Inputs as one self-contained TOML file."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from likelihoods.entries import Block, Entry

if TYPE_CHECKING:
    from likelihoods.inputs import Inputs

_ESCAPES = {'"': '\\"', "\\": "\\\\", "\n": "\\n", "\t": "\\t", "\r": "\\r", "\b": "\\b", "\f": "\\f"}
_BARE = frozenset("abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_-")


def to_toml(inputs: Inputs) -> str:
    """Write entries, correlations and parameter settings; numbers as they were written, in their own units.

    Parameters
    ----------
    inputs : Inputs

    Returns
    -------
    str
        Reading it again gives the same terms to the bit, and the same text.
    """
    parts = [_table("", {"title": inputs.title, "revision": inputs.revision})]
    blocks = {block.id: block for block in inputs.blocks}
    for entry in inputs.entries:
        if entry.block is None:
            parts.append(_table("[[measurement]]", _measurement(entry)))
        elif entry.block in blocks:
            block = blocks.pop(entry.block)
            members = [inputs[identity] for identity in block.ids]
            parts.append(_table("[[correlated]]", _correlated(block, members)))
    for correlation in inputs.correlations:
        keys = {"between": list(correlation.between), "coefficient": correlation.coefficient}
        parts.append(_table("[[correlation]]", keys))
    for name, setting in inputs.parameters.items():
        keys = {
            "start": setting.start,
            "lower": setting.lower,
            "upper": setting.upper,
            "fixed": setting.fixed,
        }
        if setting.prior is not None:
            keys["prior"] = _without_none(vars(setting.prior))
        parts.append(_table(f"[parameters.{_key(name)}]", keys))
    return "\n".join(parts)


def _measurement(entry: Entry) -> dict[str, Any]:
    declared = entry.declared
    error: dict[str, Any] = (
        {"errors": declared.errors} if declared.error is None else {"error": _error(declared.error)}
    )
    return {
        "id": entry.id,
        "quantity": entry.quantity,
        "value": declared.value,
        **error,
        "flat_halfwidth": declared.flat_halfwidth or None,
        "unit": declared.unit,
        "inflate": None if declared.inflate == 1.0 else declared.inflate,
        "inflate_group": entry.inflate_group,
        "pdg": entry.pdg,
        **_description(entry),
    }


def _correlated(block: Block, members: list[Entry]) -> dict[str, Any]:
    numbers = [member.declared for member in members]
    flats = [declared.flat_halfwidth for declared in numbers]
    inflates = [declared.inflate for declared in numbers]
    return {
        "id": block.id,
        "ids": list(block.ids),
        "quantities": [member.quantity for member in members],
        "values": [declared.value for declared in numbers],
        "errors": [_error(declared.error) for declared in numbers if declared.error is not None],
        "units": [declared.unit for declared in numbers],
        "flat_halfwidths": flats if any(flats) else None,
        "inflate": inflates if any(inflate != 1.0 for inflate in inflates) else None,
        "pdg": [member.pdg or "" for member in members] if any(member.pdg for member in members) else None,
        **_description(members[0]),
        "correlation": [list(row) for row in block.correlation],
    }


def _description(entry: Entry) -> dict[str, Any]:
    return {
        "kind": entry.kind,
        "groups": list(entry.groups) or None,
        "overlaps": list(entry.overlaps) or None,
        "part_of": entry.part_of,
        "recalled": entry.recalled or None,
        "source": entry.source,
        "note": entry.note,
    }


def _error(error: tuple[float, float]) -> float | list[float]:
    return error[0] if error[0] == error[1] else list(error)


def _without_none(keys: Mapping[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in keys.items() if value is not None}


def _table(header: str, keys: Mapping[str, Any]) -> str:
    lines = [header] if header else []
    lines += [f"{_key(key)} = {_value(value)}" for key, value in _without_none(keys).items()]
    return "\n".join(lines) + "\n"


def _key(name: str) -> str:
    return name if name and _BARE.issuperset(name) else _text(name)


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, str):
        return _text(value)
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{_key(key)} = {_value(item)}" for key, item in value.items()) + " }"
    if isinstance(value, list | tuple):
        rows = [_value(item) for item in value]
        if value and isinstance(value[0], list) and len(value[0]) > 2:
            return "[\n    " + ",\n    ".join(rows) + ",\n]"
        return "[" + ", ".join(rows) + "]"
    return repr(value)


def _text(text: str) -> str:
    characters = (
        _ESCAPES.get(c) or (f"\\u{ord(c):04x}" if ord(c) < 0x20 or ord(c) == 0x7F else c) for c in text
    )
    return '"' + "".join(characters) + '"'
