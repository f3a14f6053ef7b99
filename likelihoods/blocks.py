"""``[[correlated]]`` tables: several quantities with one correlation or covariance matrix."""

from __future__ import annotations

from typing import Any

from likelihoods.document import DESCRIPTION, Reader, is_id
from likelihoods.entries import Block, Declared
from likelihoods.fields import Fields
from likelihoods.matrices import read_matrix

_KEYS = (
    "id",
    "ids",
    "quantities",
    "values",
    "errors",
    "units",
    "flat_halfwidths",
    "correlation",
    "covariance",
    "pdg",
    *DESCRIPTION,
)


def read_block(reader: Reader, index: int, table: dict[str, Any]) -> None:
    fields = reader.fields("correlated", index, table, _KEYS)
    identity = reader.identity(fields, "correlated block")
    quantities = fields.items(
        "quantities", required='quantities is missing; write quantities = ["NAME", ...]'
    )
    described = reader.description(fields, inflate_group=None)
    if quantities is None:
        return
    size = len(quantities)
    nodes = [reader.node(fields, ("quantities", i), name) for i, name in enumerate(quantities)]
    ids = _member_ids(reader, fields, identity, quantities)
    values = _per_quantity(fields, "values", size, "values is missing; write values = [NUMBER, ...]")
    numbers = [] if values is None else fields.numbers("values", values)
    unit_of = _units(reader, fields, nodes)
    errors, matrix = _block_errors(reader, fields, size)
    flats = _flat_halfwidths(fields, size)
    inflates = _block_inflate(fields, size)
    pdgs = _block_pdg(fields, size)
    if fields.failed or identity is None or errors is None or matrix is None:
        return
    for i, name in enumerate(ids):
        declared = Declared(numbers[i] or 0.0, errors[i], {}, flats[i], unit_of[i] or "", inflates[i])
        reader.add(name, nodes[i], declared, described, pdgs[i], fields, identity)
    line = reader.locations.line(fields.path)
    reader.document.blocks.append(Block(identity, tuple(ids), matrix, str(reader.path), line))


def _units(reader: Reader, fields: Fields, nodes: list[Any]) -> list[str | None]:
    """Read one unit for all members, or one per quantity."""
    if isinstance(fields.table.get("units"), str):
        return [reader.unit(fields, "units", fields.table["units"], node) for node in nodes]
    mend = 'units is missing; write units = ["1/ps", ...] or one unit for all ("1" if dimensionless)'
    items = _per_quantity(fields, "units", len(nodes), mend) or []
    return [
        reader.unit(fields, ("units", i), unit, node)
        for i, (unit, node) in enumerate(zip(items, nodes, strict=False))
    ]


def _member_ids(reader: Reader, fields: Fields, identity: str | None, quantities: list[Any]) -> list[str]:
    size = len(quantities)
    if "ids" in fields:
        given = _per_quantity(fields, "ids", size, "") or []
        if not all(isinstance(name, str) and is_id(name) for name in given):
            fields.problem("ids", 'ids must be a list of texts without "=", one per quantity')
            return []
        ids = list(given)
    elif identity is None:
        return []
    else:
        ids = [f"{identity}:{quantity}" for quantity in quantities]
    line = reader.locations.line(fields.path)
    if len(set(ids)) < len(ids):
        fields.problem(
            "ids" if "ids" in fields else "quantities",
            "two members have one id; write distinct ids = [...]",
        )
    for name in dict.fromkeys(ids):
        reader.claim(fields, name, line, "ids" if "ids" in fields else None)
    return ids


def _per_quantity(fields: Fields, key: str, size: int, required: str) -> list[Any] | None:
    items = fields.items(key, required=required)
    if items is not None and len(items) != size:
        fields.problem(key, f"{key} has {len(items)} elements for {size} quantities; give one per quantity")
        return None
    return items


def _block_errors(
    reader: Reader, fields: Fields, size: int
) -> tuple[list[tuple[float, float] | None] | None, tuple[tuple[float, ...], ...] | None]:
    """Read errors with a correlation matrix, or a covariance matrix alone."""
    if ("correlation" in fields) == ("covariance" in fields):
        fault = (
            "both correlation and covariance are given"
            if "correlation" in fields
            else "correlation is missing"
        )
        fields.problem(
            None, f"{fault}; write correlation = [[1.0, ...], ...] with errors, or covariance alone"
        )
        return None, None
    key = "correlation" if "correlation" in fields else "covariance"
    read = read_matrix(fields, key, size, reader.path.parent)
    if key == "covariance":
        if "errors" in fields:
            fields.problem(
                "errors", "errors and covariance are both given; a covariance holds the errors already"
            )
        if read is None:
            return None, None
        return [(error, error) for error in read.errors], read.correlation
    items = _per_quantity(fields, "errors", size, "errors is missing; write errors = [NUMBER, ...]")
    errors = (
        None
        if items is None
        else [fields.error(("errors", i), f"errors[{i}]", item) for i, item in enumerate(items)]
    )
    return errors, None if read is None else read.correlation


def _flat_halfwidths(fields: Fields, size: int) -> list[float]:
    if "flat_halfwidths" not in fields:
        return [0.0] * size
    numbers = fields.numbers("flat_halfwidths", _per_quantity(fields, "flat_halfwidths", size, "") or [])
    for i, number in enumerate(numbers):
        if number is not None and number < 0.0:
            fields.problem(
                ("flat_halfwidths", i), f"flat_halfwidths[{i}] must be zero or positive, not {number:g}"
            )
    return [number or 0.0 for number in numbers]


def _block_inflate(fields: Fields, size: int) -> list[float]:
    """Read one scale factor for all members, or one per quantity."""
    if not isinstance(fields.table.get("inflate"), list):
        return [fields.positive("inflate") or 1.0] * size
    numbers = fields.numbers("inflate", _per_quantity(fields, "inflate", size, "") or [])
    for i, number in enumerate(numbers):
        if number is not None and number <= 0.0:
            fields.problem(("inflate", i), f"inflate[{i}] must be positive, not {number:g}")
    return [number or 1.0 for number in numbers]


def _block_pdg(fields: Fields, size: int) -> list[str | None]:
    """Read one PDG identifier per quantity; "" where there is none."""
    if "pdg" not in fields:
        return [None] * size
    items = _per_quantity(fields, "pdg", size, "") or []
    if not all(isinstance(item, str) for item in items):
        fields.problem("pdg", 'pdg must be a list of texts, one per quantity ("" where there is none)')
    return [item or None for item in items]
