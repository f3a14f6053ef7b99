"""The data model of an inputs file: plain frozen records, numbers in the catalogue's units."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace

from likelihoods import units

#: Error-source names that are private to each entry, however many entries use them: statistical
#: fluctuations of two measurements are independent. Every other name used twice is shared.
UNSHARED_SOURCES = frozenset({"statistical", "stat", "uncorrelated"})

KINDS = ("experiment", "theory")


@dataclass(frozen=True)
class Notice:
    """Something about the inputs that a reader of a result has to know.

    Attributes
    ----------
    kind : str
        "replaced", "dropped", "recalled", "inflated", "shared" or "changed".
    id : str
        Entry (or error source, for "shared") that the notice is about.
    text : str
        One sentence.
    """

    kind: str
    id: str
    text: str


@dataclass(frozen=True)
class Prior:
    """Prior of one parameter, used by posteriors only; numbers in the parameter's catalogue unit.

    Attributes
    ----------
    kind : str
        "uniform" (``lower``, ``upper``), "normal" (``mean``, ``error``), "log-uniform" (``lower``, ``upper``)
        or "isotropic-angle" (no numbers).
    """

    kind: str
    lower: float | None = None
    upper: float | None = None
    mean: float | None = None
    error: float | None = None


@dataclass(frozen=True)
class ParameterSetting:
    """What ``[parameters.NAME]`` says; ``None`` means the catalogue's own setting stays."""

    start: float | None = None
    lower: float | None = None
    upper: float | None = None
    fixed: bool | None = None
    prior: Prior | None = None


@dataclass(frozen=True)
class Declared:
    """The numbers of an entry exactly as written, in its own unit and before any scale factor.

    Kept so that the resolved file gives back the same bits, and so that a scale factor can be recomputed.
    """

    value: float
    error: tuple[float, float] | None
    errors: dict[str, float] = field(hash=False)
    flat_halfwidth: float
    unit: str
    inflate: float = 1.0


@dataclass(frozen=True)
class Entry:
    """One measured value of one real quantity, in the catalogue's unit.

    Attributes
    ----------
    id, quantity : str
        Unique identifier and the catalogue name of what was measured.
    value, plus, minus : float
        Measured value and its total upward and downward errors (both positive, scale factor included).
    errors : dict of str to float
        Signed named error sources (scale factor included), or empty where one error was given.
    flat_halfwidth : float
        Additional flat theory half-width, not scaled; 0 where there is none.
    kind : str
        "experiment" or "theory".
    groups, overlaps : tuple of str
        Groups for selections, and ids that must not be used together with this entry.
    inflate : float
        Scale factor in use, written in the file or recomputed for an ``inflate_group``.
    inflate_group : str or None
        Entries of one group and quantity share a scale factor that follows the members present.
    source, pdg, note, part_of : str or None
        Where the value is from, its PDG identifier, remarks, and the combination that it belongs to.
    recalled : bool
        The value is quoted from memory.
    unit : str
        The catalogue's unit, in which all numbers of this record are.
    period : float or None
        Period of an angle: residuals are wrapped to half a period.
    file, line, label : str, int, str
        Where the entry was written, and how messages call its table.
    block : str or None
        Id of the ``[[correlated]]`` table that it came from.
    declared : Declared
        The numbers as written.
    """

    id: str
    quantity: str
    value: float
    plus: float
    minus: float
    errors: dict[str, float] = field(hash=False)
    flat_halfwidth: float
    kind: str
    groups: tuple[str, ...]
    inflate: float
    inflate_group: str | None
    overlaps: tuple[str, ...]
    source: str
    pdg: str | None
    recalled: bool
    note: str | None
    part_of: str | None
    unit: str
    period: float | None
    file: str
    line: int
    label: str
    block: str | None
    declared: Declared

    @property
    def where(self) -> str:
        """``file:line: [table number "id"]`` of the entry, for messages."""
        member = f' "{self.id}"' if self.block else ""
        return f"{self.file}:{self.line}: {self.label}{member}"

    @property
    def shared_errors(self) -> dict[str, float]:
        """Named sources that other entries may share (statistical ones never are)."""
        return {name: error for name, error in self.errors.items() if name not in UNSHARED_SOURCES}

    @property
    def names(self) -> frozenset[str]:
        """Every word that selects this entry: its id, its block, its groups and its kind."""
        return frozenset((self.id, self.kind, *self.groups, *((self.block,) if self.block else ())))

    def restated(self, declared: Declared, inflate: float | None = None) -> Entry:
        """Give the same entry with other numbers.

        Parameters
        ----------
        declared : Declared
            The numbers, in ``declared.unit``.
        inflate : float, optional
            Scale factor in use; ``declared.inflate`` if not given.
        """
        return replace(
            self,
            **convert_numbers(declared, self.unit, inflate),  # type: ignore[arg-type]
            declared=declared,
        )


def convert_numbers(declared: Declared, unit: str, inflate: float | None = None) -> dict[str, object]:
    """Convert declared numbers to ``unit`` and apply the scale factor.

    Returns
    -------
    dict
        The fields value, plus, minus, errors, flat_halfwidth and inflate of an `Entry`.
    """
    factor = units.factor(declared.unit, unit)
    scale = declared.inflate if inflate is None else inflate
    errors = {name: error * factor * scale for name, error in declared.errors.items()}
    if declared.error is None:
        plus = minus = math.hypot(*errors.values())
    else:
        plus, minus = (error * factor * scale for error in declared.error)
    return {
        "value": declared.value * factor,
        "plus": plus,
        "minus": minus,
        "errors": errors,
        "flat_halfwidth": declared.flat_halfwidth * factor,
        "inflate": scale,
    }


@dataclass(frozen=True)
class Block:
    """Correlation matrix of the entries of one ``[[correlated]]`` table, in the order of ``ids``."""

    id: str
    ids: tuple[str, ...]
    correlation: tuple[tuple[float, ...], ...]
    file: str
    line: int

    def restricted(self, keep: set[str]) -> Block | None:
        """Give the block of the members in ``keep``; None when none is left."""
        index = [i for i, name in enumerate(self.ids) if name in keep]
        if not index:
            return None
        if len(index) == len(self.ids):
            return self
        rows = tuple(tuple(self.correlation[i][j] for j in index) for i in index)
        return replace(self, ids=tuple(self.ids[i] for i in index), correlation=rows)


@dataclass(frozen=True)
class Correlation:
    """Correlation coefficient between two entries (a ``[[correlation]]`` table)."""

    between: tuple[str, str]
    coefficient: float
    file: str
    line: int
