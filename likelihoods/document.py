"""What one inputs file says, and the checks that its tables have in common."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

from likelihoods import units
from likelihoods.entries import (
    KINDS,
    Block,
    Correlation,
    Declared,
    Entry,
    ParameterSetting,
    convert_numbers,
)
from likelihoods.fields import Fields, describe
from likelihoods.locations import KeyPath, Locations

#: Keys that describe an entry and that every kind of table has.
DESCRIPTION = ("kind", "groups", "inflate", "overlaps", "source", "recalled", "note", "part_of")


class CatalogueLike(Protocol):
    """What reading an inputs file needs of the catalogue."""

    def __getitem__(self, name: str, /) -> Any: ...
    def __contains__(self, name: object, /) -> bool: ...
    def close_matches(self, name: str) -> tuple[str, ...]: ...


@dataclass
class Document:
    """What one file says by itself, before includes are read.

    ``entries`` and ``blocks`` stand in the order of the file; ``ids`` holds every id that the file declares,
    those of faulty entries too (so that one mistake is reported once).
    """

    file: str
    title: str = ""
    revision: int = 1
    include: list[tuple[str, int]] = field(default_factory=list)
    drop: list[tuple[str, int]] = field(default_factory=list)
    entries: list[Entry] = field(default_factory=list)
    blocks: list[Block] = field(default_factory=list)
    correlations: list[Correlation] = field(default_factory=list)
    parameters: dict[str, ParameterSetting] = field(default_factory=dict)
    ids: dict[str, int] = field(default_factory=dict)
    problems: list[str] = field(default_factory=list)


class Reader:
    """Checks of single tables, with the catalogue and the lines of the file at hand.

    Parameters
    ----------
    document : Document
        Where records are collected; problems are collected in ``problems``, each with its line.
    path : Path
        The file.
    locations : Locations
        Its lines.
    catalogue : Catalogue
        For quantities, units and parameters.
    """

    def __init__(
        self, document: Document, path: Path, locations: Locations, catalogue: CatalogueLike
    ) -> None:
        self.document = document
        self.path = path
        self.locations = locations
        self.catalogue = catalogue
        self.problems: list[tuple[int, str]] = []

    def report(self, path: KeyPath, label: str, text: str) -> None:
        line = self.locations.line(path)
        self.problems.append((line, f"{self.path}:{line}: {label}{text}"))

    def fields(self, name: str, index: int, table: dict[str, Any], known: tuple[str, ...]) -> Fields:
        identity = table.get("id")
        label = (
            f'[{name} {index + 1} "{identity}"] ' if isinstance(identity, str) else f"[{name} {index + 1}] "
        )
        return Fields(table, (name, index), label, known, self.report)

    def identity(self, fields: Fields, what: str) -> str | None:
        identity = fields.text("id", required=f'id is missing; give the {what} a unique id = "..."')
        if identity is None:
            return None
        if not is_id(identity):
            fields.problem("id", 'id must not hold "=", line ends, or blanks at its ends')
            return None
        self.claim(fields, identity, self.locations.line((*fields.path, "id")), "id")
        return identity

    def claim(self, fields: Fields, identity: str, line: int, key: str | None) -> None:
        if identity in self.document.ids:
            first = self.document.ids[identity]
            fields.problem(key, f'duplicate id "{identity}", first used in line {first}; choose another')
        else:
            self.document.ids[identity] = line

    def node(self, fields: Fields, key: Any, name: Any) -> Any:
        """Look a quantity up in the catalogue; it must be real."""
        if name is None:
            fields.problem(
                None, 'quantity is missing; write quantity = "NAME" (`weakmix find` searches them)'
            )
            return None
        if not isinstance(name, str):
            fields.problem(key, f"quantity must be a text, not {describe(name)}")
            return None
        if name not in self.catalogue:
            close = self.catalogue.close_matches(name)
            mend = f"closest: {', '.join(close)}" if close else "`weakmix find` searches the catalogue"
            fields.problem(key, f'unknown {"parameter" if key is None else "quantity"} "{name}"; {mend}')
            return None
        node = self.catalogue[name]
        if node.is_complex:
            real_ones = [
                other for other in self.catalogue.close_matches(name) if not self.catalogue[other].is_complex
            ]
            mend = f" such as {', '.join(real_ones)}" if real_ones else ""
            fields.problem(
                key, f'quantity "{name}" is complex and cannot be measured; use a real quantity{mend}'
            )
            return None
        return node

    def unit(self, fields: Fields, key: Any, unit: Any, node: Any) -> str | None:
        wanted = "1" if node is None else node.unit
        if unit is None:
            mend = '"1" if dimensionless' if node is None else f"or another that fits {node.name}"
            fields.problem(None, f'unit is missing; write unit = "{wanted}" ({mend})')
            return None
        if not isinstance(unit, str):
            fields.problem(key, f'unit must be a text such as "{wanted}", not {describe(unit)}')
            return None
        if node is not None:
            try:
                units.factor(unit, wanted)
            except units.UnitError as error:
                fields.problem(key, f'{error}; {node.name} is in "{wanted}"')
                return None
        return unit

    def description(self, fields: Fields, inflate_group: str | None) -> dict[str, Any]:
        return {
            "kind": fields.choice("kind", KINDS, "experiment"),
            "groups": fields.texts("groups"),
            "inflate_group": inflate_group,
            "overlaps": fields.texts("overlaps"),
            "source": fields.text(
                "source", required='source is missing; write source = "where the value is from"'
            ),
            "recalled": bool(fields.flag("recalled")),
            "note": fields.text("note"),
            "part_of": fields.text("part_of"),
        }

    def add(
        self,
        identity: str,
        node: Any,
        declared: Declared,
        described: dict[str, Any],
        pdg: str | None,
        fields: Fields,
        block: str | None,
    ) -> None:
        numbers: dict[str, Any] = convert_numbers(declared, node.unit)
        self.document.entries.append(
            Entry(
                id=identity,
                quantity=node.name,
                pdg=pdg,
                unit=node.unit,
                period=node.period,
                file=str(self.path),
                line=self.locations.line(fields.path),
                label=fields.label.strip(),
                block=block,
                declared=declared,
                **numbers,
                **described,
            )
        )


def is_id(name: str) -> bool:
    return bool(name) and name == name.strip() and name.isprintable() and "=" not in name
