"""Files to one set of entries: includes, replacements, drops."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path

from likelihoods.bundled import closest, find_inputs
from likelihoods.document import CatalogueLike, Document
from likelihoods.entries import Block, Correlation, Entry, Notice, ParameterSetting
from likelihoods.schema import read_document
from observables.errors import InputError


@dataclass
class Resolved:
    """What a file and everything that it includes say together."""

    title: str = ""
    revision: int = 1
    entries: dict[str, Entry] = field(default_factory=dict)
    blocks: dict[str, Block] = field(default_factory=dict)
    correlations: list[Correlation] = field(default_factory=list)
    parameters: dict[str, ParameterSetting] = field(default_factory=dict)
    notices: list[Notice] = field(default_factory=list)


def resolve(path: Path, catalogue: CatalogueLike) -> Resolved:
    """Read a file with its includes.

    Raises
    ------
    InputError
        With all problems of all files.
    """
    merger = _Merger(catalogue)
    document = merger.merge(path, ())
    if merger.problems or document is None:
        raise InputError(merger.problems)
    merger.result.title = document.title
    merger.result.revision = document.revision
    return merger.result


def read_text(path: Path) -> str:
    """Read an inputs file; UTF-8 only.

    Raises
    ------
    InputError
        When it cannot be read or is not text.
    """
    try:
        content = path.read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}") from error
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content.count(b"\n", 0, error.start) + 1
        raise InputError(f"{path}:{line}: not UTF-8 text; save the file as UTF-8") from error


class _Merger:
    def __init__(self, catalogue: CatalogueLike) -> None:
        self.catalogue = catalogue
        self.result = Resolved()
        self.problems: list[str] = []
        self.seen_ids: set[str] = set()
        self.merged: set[Path] = set()

    def merge(self, path: Path, chain: tuple[Path, ...]) -> Document | None:
        """Read one file after what it includes; each file counts once."""
        place = path.resolve()
        if place in self.merged:
            return None
        self.merged.add(place)
        try:
            document = read_document(path, read_text(path), self.catalogue)
        except InputError as error:
            self.problems.extend(error.problems)
            return None
        self.problems.extend(document.problems)
        for name, line in document.include:
            self.include(name, f"{path}:{line}: ", path, (*chain, place))
        for name, line in document.drop:
            self.drop(name, f"{path}:{line}: ", document)
        self.add(document)
        return document

    def include(self, name: str, where: str, path: Path, chain: tuple[Path, ...]) -> None:
        try:
            found, _ = find_inputs(name, beside=path.parent)
        except InputError as error:
            self.problems.append(f'{where}include "{name}": {error}')
            return
        if found.resolve() in chain:
            names = [place.name for place in (*chain[chain.index(found.resolve()) :], found)]
            self.problems.append(f"{where}circular include: {' -> '.join(names)}; remove one of them")
            return
        self.merge(found, chain)

    def drop(self, name: str, where: str, document: Document) -> None:
        if self.remove(name):
            self.result.notices.append(Notice("dropped", name, f"dropped by {_short(document.file)}"))
        elif name in document.ids and name not in self.seen_ids:
            self.problems.append(f'{where}drop "{name}": it is an entry of this very file; remove it there')
        elif name not in self.seen_ids:
            known = [*self.result.entries, *self.result.blocks]
            self.problems.append(
                f'{where}drop "{name}": no included entry has this id; {closest(name, known)}'
            )

    def remove(self, name: str) -> bool:
        """Take out an entry or a whole block, with the correlations that it had."""
        entries, blocks = self.result.entries, self.result.blocks
        gone = {entry.id for entry in entries.values() if name in (entry.id, entry.block)}
        for identity in gone:
            del entries[identity]
        for block in list(blocks.values()):
            left = block.restricted(set(entries))
            if left is None:
                del blocks[block.id]
            else:
                blocks[block.id] = left
        self.result.correlations = [c for c in self.result.correlations if not gone.intersection(c.between)]
        return bool(gone)

    def add(self, document: Document) -> None:
        for name in document.ids:
            where = self.result.entries.get(name) or self.result.blocks.get(name)
            if where is not None:
                old = f"{_short(where.file)}:{where.line}"
                self.remove(name)
                text = f"{_short(document.file)}:{document.ids[name]} replaces the entry of {old}"
                self.result.notices.append(Notice("replaced", name, text))
        self.seen_ids.update(document.ids)
        self.result.entries |= {entry.id: entry for entry in document.entries}
        self.result.blocks |= {block.id: block for block in document.blocks}
        pairs: dict[frozenset[str], Correlation] = {}
        for correlation in document.correlations:
            self.add_correlation(correlation, pairs)
        for name in document.parameters:
            if name in self.result.parameters:
                text = f"{_short(document.file)} replaces the settings of this parameter"
                self.result.notices.append(Notice("replaced", name, text))
        self.result.parameters |= document.parameters

    def add_correlation(self, correlation: Correlation, pairs: dict[frozenset[str], Correlation]) -> None:
        where = f"{correlation.file}:{correlation.line}: [correlation] "
        for name in correlation.between:
            if name in self.result.blocks and name not in self.result.entries:
                members = ", ".join(self.result.blocks[name].ids)
                self.problems.append(f'{where}"{name}" is a block; name one of its members: {members}')
                return
            if name not in self.seen_ids:
                known = list(self.result.entries)
                self.problems.append(f'{where}no entry has the id "{name}"; {closest(name, known)}')
                return
            if name not in self.result.entries and not self.problems:
                self.problems.append(f'{where}"{name}" was dropped; remove the correlation')
                return
        pair = frozenset(correlation.between)
        if pair in pairs:
            self.problems.append(f"{where}the pair was already given in line {pairs[pair].line}; keep one")
            return
        pairs[pair] = correlation
        kept = [other for other in self.result.correlations if frozenset(other.between) != pair]
        self.result.correlations = [*kept, correlation]


def _short(file: str) -> str:
    """Name of a file without its folder: notices go into results, which are compared between machines."""
    return Path(file).name
