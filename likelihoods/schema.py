"""Reading one inputs file: its top level, ``[[measurement]]`` and ``[[correlation]]`` tables."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from likelihoods.blocks import read_block
from likelihoods.document import DESCRIPTION, CatalogueLike, Document, Reader
from likelihoods.entries import UNSHARED_SOURCES, Correlation, Declared
from likelihoods.fields import Fields, describe, real
from likelihoods.locations import KeyPath, Locations
from likelihoods.settings import read_parameters

_MEASUREMENT = (
    "id",
    "quantity",
    "value",
    "error",
    "errors",
    "flat_halfwidth",
    "unit",
    "pdg",
    "inflate_group",
    *DESCRIPTION,
)
_CORRELATION = ("between", "coefficient", "source", "note")
_TOP = ("title", "include", "drop", "revision", "measurement", "correlated", "correlation", "parameters")
_NOT_YET = ("curve", "limit", "count")
_SYNTAX_LINE = re.compile(r" \(at line (\d+), column (\d+)\)$")


def read_document(path: Path, text: str, catalogue: CatalogueLike) -> Document:
    """Check and convert one inputs file.

    Parameters
    ----------
    path : Path
        The file, as it is to be called in messages; matrices in CSV files are looked for beside it.
    text : str
        Its content.
    catalogue : Catalogue
        For quantities, units and parameters.

    Returns
    -------
    Document
        With all problems collected in ``problems``, in the order of the file.
    """
    document = Document(str(path))
    if not text.strip():
        document.problems.append(f"{path}:1: the file is empty; `weakmix new` writes a template")
        return document
    try:
        tables = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # syntax; numbers of thousands of digits; very deep nesting
        document.problems.append(_syntax_problem(path, text, error))
        return document
    reader = Reader(document, path, Locations(text), catalogue)
    _read(reader, tables)
    document.problems = [problem for _, problem in sorted(reader.problems, key=lambda found: found[0])]
    return document


def _syntax_problem(path: Path, text: str, error: Exception) -> str:
    found = _SYNTAX_LINE.search(str(error))
    if found is not None:
        line, column = found.groups()
        return f"{path}:{line}: not valid TOML: {str(error)[: found.start()]} (column {column})"
    at_end = str(error).endswith("(at end of document)")
    last = text.rstrip().count("\n") + 1 if at_end else 1
    return f"{path}:{last}: not valid TOML: {error}"


def _read(reader: Reader, tables: dict[str, Any]) -> None:
    for name in _NOT_YET:
        if name in tables:
            reader.report(
                _first(name, tables[name]), "", f"[[{name}]] is not supported yet; remove the table"
            )
    known = {key: value for key, value in tables.items() if key not in _NOT_YET}
    top = Fields(known, (), "", _TOP, reader.report)
    reader.document.title = top.text("title") or ""
    revision = tables.get("revision", 1)
    if isinstance(revision, bool) or not isinstance(revision, int) or revision < 1:
        top.problem("revision", f"revision must be a whole number from 1, not {describe(revision)}")
    else:
        reader.document.revision = revision
    for key, names in (("include", reader.document.include), ("drop", reader.document.drop)):
        for name in top.texts(key):
            names.append((name, reader.locations.line((key, tables[key].index(name)))))
    for index, table in _tables(top, "measurement"):
        _measurement(reader, index, table)
    for index, table in _tables(top, "correlated"):
        read_block(reader, index, table)
    for index, table in _tables(top, "correlation"):
        _correlation(reader, index, table)
    reader.document.entries.sort(key=lambda entry: entry.line)  # stable: block members keep their order
    read_parameters(reader, top)


def _tables(top: Fields, name: str) -> list[tuple[int, dict[str, Any]]]:
    value = top.table.get(name, [])
    if isinstance(value, list) and all(isinstance(table, dict) for table in value):
        return list(enumerate(value))
    top.problem(name, f"{name} must be a list of tables; write [[{name}]] with double brackets")
    return []


def _measurement(reader: Reader, index: int, table: dict[str, Any]) -> None:
    fields = reader.fields("measurement", index, table, _MEASUREMENT)
    identity = reader.identity(fields, "measurement")
    node = reader.node(fields, "quantity", table.get("quantity"))
    value = fields.number("value", required="value is missing; write value = NUMBER")
    unit = reader.unit(fields, "unit", table.get("unit"), node)
    error, errors = _errors(fields)
    flat = fields.positive("flat_halfwidth", or_zero=True) or 0.0
    group = fields.text("inflate_group")
    described = reader.description(fields, inflate_group=group)
    inflate = fields.positive("inflate")
    if inflate is not None and group is not None:
        fields.problem("inflate", "inflate and inflate_group are both given; a group computes its own factor")
    pdg = fields.text("pdg")
    if fields.failed or identity is None or node is None or value is None or unit is None:
        return
    declared = Declared(value, error, errors, flat, unit, 1.0 if inflate is None else inflate)
    reader.add(identity, node, declared, described, pdg, fields, None)


def _errors(fields: Fields) -> tuple[tuple[float, float] | None, dict[str, float]]:
    """Read ``error`` or ``errors``, whichever is given."""
    if ("error" in fields) == ("errors" in fields):
        mend = "write error = NUMBER, error = [PLUS, MINUS] or errors = { NAME = NUMBER }"
        fault = "both error and errors are given" if "error" in fields else "error is missing"
        fields.problem("errors" if "errors" in fields else None, f"{fault}; {mend}")
        return None, {}
    if "error" in fields:
        return fields.error(("error",), "error", fields.table["error"]), {}
    named = fields.table["errors"]
    if not isinstance(named, dict) or not named:
        fields.problem(
            "errors", "errors must name each source: errors = { statistical = 0.1, tagging = 0.2 }"
        )
        return None, {}
    errors = {}
    for name, value in named.items():
        number = real(value)
        if isinstance(value, list):
            number = (
                "must be one number; named sources are symmetric, use error = [plus, minus] without names"
            )
        elif number == 0.0:
            number = "must not be zero; leave the source out"
        elif isinstance(number, float) and number < 0.0 and name in UNSHARED_SOURCES:
            number = f"must be positive, not {number:g}; only shared sources carry a sign"
        if isinstance(number, str):
            fields.problem(("errors", name), f'error source "{name}" {number}')
        else:
            errors[name] = number
    return None, errors


def _correlation(reader: Reader, index: int, table: dict[str, Any]) -> None:
    fields = Fields(
        table,
        ("correlation", index),
        f"[correlation {index + 1}] ",
        _CORRELATION,
        reader.report,
    )
    between = fields.texts("between")
    if len(between) != 2 and not fields.failed:
        fields.problem(
            "between" if "between" in fields else None,
            'write between = ["ID-1", "ID-2"], two different ids',
        )
    coefficient = fields.number("coefficient", required="coefficient is missing; write coefficient = NUMBER")
    if coefficient is not None and abs(coefficient) >= 1.0:
        fields.problem("coefficient", f"coefficient must lie between -1 and 1, not {coefficient:g}")
    fields.text("source")
    fields.text("note")
    if coefficient is not None and not fields.failed:
        line = reader.locations.line(fields.path)
        pair = (between[0], between[1])
        reader.document.correlations.append(Correlation(pair, coefficient, str(reader.path), line))


def _first(name: str, value: Any) -> KeyPath:
    return (name, 0) if isinstance(value, list) and value else (name,)
