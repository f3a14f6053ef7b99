"""Tables for people, built from results; nothing here computes."""

from __future__ import annotations

import copy
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any, Literal

from rich import box
from rich.table import Table
from rich.text import Text

from fitcore.rounding import (
    interval,
    like_error,
    number,
    shared_power,
    significant,
    with_error,
)

if TYPE_CHECKING:
    from rich.console import Console

    from fitcore.result import Estimate, FitResult, MeasurementRow

#: Order of the notices about the inputs; other kinds follow.
NOTICE_ORDER = ("replaced", "dropped", "changed", "inflated", "shared", "recalled")

#: Names are not folded into lines shorter than this.
SHORTEST_NAME = 14
#: Text columns are not squeezed below this where a spare column can go instead.
READABLE = 24


class HouseTable(Table):
    """A table that gives up its least columns, then folds names, before it breaks a number.

    Attributes
    ----------
    spare : list of int
        Columns that go when there is no room, the first one first.
    folding : list of int
        Columns of names, which may be folded at `_`, `-`, `.` and `/`.
    """

    def __init__(self, *args: Any, **kwargs: Any) -> None:
        super().__init__(*args, **kwargs)
        self.spare: list[int] = []
        self.folding: list[int] = []

    def fit_into(self, console: Console) -> HouseTable:
        """Return the table in a form that a console has room for; the table itself if it has."""
        if self._least(console) <= console.width:
            return self
        dropped: list[int] = []
        made = self._compact(dropped)
        for column in self.spare:
            if made._least(console) <= console.width:
                return made
            dropped.append(column)
            made = self._compact(dropped)
        if made._least(console) > console.width:
            for part in made.columns:
                part.header = fold(part.header, SHORTEST_NAME)
        excess = made._least(console) - console.width
        for index in made.folding:
            if excess <= 0:
                break
            cells = [str(cell) for cell in made.columns[index].cells]
            before = max((len(cell) for cell in cells), default=0)
            room = max(before - excess, SHORTEST_NAME)
            made.columns[index]._cells = [fold(cell, room) for cell in made.columns[index]._cells]
            excess = made._least(console) - console.width
        if excess > 0:  # a column that may not break would be cut off
            for part in made.columns:
                part.no_wrap = False
        return made

    def _least(self, console: Console) -> int:
        """Width at which no number is broken and text columns stay readable."""
        from rich.measure import Measurement

        roomy = console.options.update(width=10_000)
        _, right, _, left = self.padding
        total = (len(self.columns) - 1) * (1 + left + right) + 2 * self.show_edge
        for column in self.columns:
            sizes = [Measurement.get(console, roomy, cell) for cell in (column.header, *column.cells)]
            natural = max(size.maximum for size in sizes)
            word = max(size.minimum for size in sizes)
            total += natural if column.no_wrap else min(natural, max(word, READABLE))
        return total

    def _compact(self, dropped: Sequence[int]) -> HouseTable:
        """Copy the table without some columns."""
        made = copy.copy(self)
        kept = [index for index in range(len(self.columns)) if index not in dropped]
        made.columns = [copy.copy(self.columns[index]) for index in kept]
        for new, column in enumerate(made.columns):
            column._index = new
        made.folding = [kept.index(index) for index in self.folding if index in kept]
        made.spare = []
        return made


def fold(name: Any, room: int) -> Any:
    """Fold a name into lines that fit, at its separators where it can be."""
    if not isinstance(name, str) or len(name) <= room:
        return name
    lines = [""]
    for piece in re.findall(r"[^_\-./]+[_\-./]?|[_\-./]", name):
        if lines[-1] and len(lines[-1]) + len(piece) > room:
            lines.append("")
        lines[-1] += piece
    return "\n".join(lines)


def table(title: str, *columns: str | tuple[str, str], caption: str = "") -> Table:
    """Make an empty table in the house style.

    Parameters
    ----------
    title : str
        Heading.
    columns : str or (str, str)
        Heads, each alone or with a word on how its cells behave:

        - ``"left"`` (a head alone): text, wrapped as needed;
        - ``"right"``, ``"whole"``: numbers, to the right or left; not broken where there is any room;
        - ``"name"``: a name, folded at its separators where there is no room;
        - ``"spare"``: as ``"whole"``, but left out where there is no room.
    caption : str
        A line under the table.
    """
    made = HouseTable(
        title=title,
        title_style="bold",
        title_justify="left",
        caption=caption or None,
        caption_justify="left",
        box=box.SIMPLE_HEAD,
        pad_edge=False,
        padding=(0, 1, 0, 0),
        show_edge=False,
        header_style="bold",
    )
    for index, column in enumerate(columns):
        head, side = (column, "left") if isinstance(column, str) else column
        justify: Literal["left", "right"] = "right" if side == "right" else "left"
        made.add_column(head, justify=justify, overflow="fold", no_wrap=side != "left")
        if side == "spare":
            made.spare.append(index)
        if side == "name":
            made.folding.append(index)
    return made


def shown_unit(unit: str) -> str:
    """Return the unit as a table shows it: nothing for dimensionless."""
    return "" if unit == "1" else unit


def notices(
    found: Iterable[Any], fixed: Mapping[str, float], units: Mapping[str, str] | None = None
) -> Table:
    """List what a reader must know about the inputs: replaced, dropped, inflated, recalled, held fixed.

    Parameters
    ----------
    found : iterable
        Notices, each with `kind`, `id`, `text` or a tuple of these three.
    fixed : mapping
        Parameters held fixed, with their values.
    units : mapping, optional
        Units of the fixed parameters.
    """
    by_kind: dict[str, list[tuple[str, str]]] = {}
    for notice in found:
        kind, label, text = notice if isinstance(notice, tuple) else (notice.kind, notice.id, notice.text)
        by_kind.setdefault(kind, []).append((label, text))
    made = Table.grid(padding=(0, 1))
    made.add_column(style="yellow", no_wrap=True)
    made.add_column(overflow="fold")
    for kind in [*NOTICE_ORDER, *(k for k in by_kind if k not in NOTICE_ORDER)]:
        items = by_kind.get(kind, [])
        if not items:
            continue
        word = f"  {kind}"
        if kind == "recalled":
            ids = ", ".join(label for label, _ in items)
            made.add_row(word, f"{ids} (quoted from memory: compare with the source before relying on them)")
        else:
            for label, text in items:
                made.add_row(word, f"{label}: {text}" if text else label)
    if fixed:
        units = units or {}
        held = ", ".join(
            f"{name} = {number(value)} {shown_unit(units.get(name, '1'))}".rstrip()
            for name, value in fixed.items()
        )
        made.add_row("  held fixed", held)
    return made


def verdict(result: FitResult) -> list[Text]:
    """Say whether the fit can be trusted, and how good it is."""
    lines = []
    if result.valid:
        lines.append(Text("Converged. ", style="bold green"))
    else:
        reason = result.message or "no reason recorded"
        lines.append(Text(f"NOT CONVERGED: {reason}. ", style="bold red"))
    freedom = f"{result.degrees_of_freedom} degrees of freedom"
    lines[0].append(f"chi-square {result.chi2:.2f} for {freedom}, {p_value(result.p_value)}", style="default")
    if result.valid and result.message:
        lines.append(Text(result.message))
    lines.extend(Text(f"  flag: {flag}", style="yellow") for flag in result.flags)
    return lines


def p_value(value: float | None) -> str:
    """Write a p-value, or why there is none."""
    if value is None:
        return "no p-value (calibrate it: flat ranges, limits or no degree of freedom left)"
    return f"p-value {significant(value)}"


def caution(result: FitResult) -> str:
    """Say what the intervals of a fit assume; flat ranges change it."""
    if any(one.method == "range" for one in result.parameters.values()):
        errors = (
            "flat theory errors are ranges inside which no value is preferred and outside which none is allowed, "
            "every other error is Gaussian as written"
        )
        more = " Under flat ranges neither a p-value nor a covariance matrix describes the fit."
    else:
        errors, more = "every error is Gaussian as written", ""
    return (
        "Intervals are those of chi-square differences of 1.000 (68.27 %) and 3.841 (95.0 %) for one quantity at "
        "a time: they hold as far as such differences follow their large-sample distribution (Wilks' theorem), "
        f"{errors}, and correlations that the inputs do not state are absent. 'linear' "
        f"intervals are propagated from the covariance matrix, 'profile' ones are not.{more}"
    )


def estimate(one: Estimate) -> str:
    """Write an estimate with its 68 % errors, or the range that a flat theory error allows."""
    return str(replace(one, unit="1"))  # the unit has its own column


def _power(one: Estimate) -> int:
    """Power of ten of the whole row: value and interval ends share it."""
    sides = one.sides or ((one.error, one.error) if one.error is not None else ())
    positive = [side for side in sides if side is not None and side > 0]
    return shared_power(one.value, *positive, error=min(positive, default=None))


def estimates(title: str, rows: Mapping[str, Estimate]) -> Table:
    """Tabulate parameters or derived quantities."""
    made = table(
        title,
        ("name", "name"),
        ("value", "whole"),
        ("68.27 %", "spare"),
        ("95.0 %", "whole"),
        ("unit", "whole"),
        ("method", "whole"),
    )
    for name, one in rows.items():
        made.add_row(
            name,
            estimate(one),
            *(
                "-" if one.method == "range" else _interval(ends, one)
                for ends in (one.interval_68, one.interval_95)
            ),
            shown_unit(one.unit),
            one.method if one.interval_68 is not None else "-",
        )
    return made


def _interval(ends: Sequence[float | None] | None, one: Estimate) -> str:
    if ends is None:
        return "-"
    error = one.error
    if one.interval_68 is not None and None not in one.interval_68:
        low, high = (float(end) for end in one.interval_68)
        sides = [side for side in (high - one.value, one.value - low) if math.isfinite(side) and side > 0]
        error = min(sides, default=error)
    return interval(ends[0], ends[1], error, _power(one) if error else None)


def measurements(rows: Sequence[MeasurementRow]) -> Table:
    """Tabulate measured against fitted values, the largest pull first."""
    made = table(
        "Measured against fitted",
        ("id", "name"),
        ("measured", "whole"),
        ("fitted", "whole"),
        ("unit", "whole"),
        ("pull", "right"),
        caption="pull = (measured - fitted) / measured error",
    )
    for row in by_pull(rows):
        power = shared_power(
            *(row.measured, row.fitted, row.error_plus, row.error_minus),
            error=min(row.error_plus, row.error_minus, row.fitted_error or math.inf),
        )
        made.add_row(
            row.id,
            with_error(row.measured, row.error_plus, row.error_minus, power=power),
            fitted_value(row, power),
            shown_unit(row.unit),
            pull(row.pull),
        )
    return made


def by_pull(rows: Sequence[MeasurementRow]) -> list[MeasurementRow]:
    """Sort measurements by the size of their pull, unknown pulls last."""
    return sorted(
        rows, key=lambda row: -abs(row.pull) if row.pull is not None and math.isfinite(row.pull) else 1.0
    )


def fitted_value(row: MeasurementRow, power: int | None = None) -> str:
    """Write a fitted value with its own error if known, else with as many decimals as the measurement has."""
    if row.fitted_error:
        return with_error(row.fitted, row.fitted_error, power=power)
    return like_error(row.fitted, min(row.error_plus, row.error_minus), power)


def pull(value: float | None) -> Text:
    """Write a pull with its sign; beyond two it is set off."""
    if value is None or not math.isfinite(value):
        return Text("-")
    shown = f"{value:+.2f}"
    shown = "0.00" if shown in ("-0.00", "+0.00") else shown
    return Text(shown, style="bold red" if abs(value) >= 3 else "yellow" if abs(value) >= 2 else "")


def other_minima(result: FitResult) -> Table | None:
    """Tabulate further minima, or None if there are none."""
    if not result.other_minima:
        return None
    names = list(result.parameters)[:4]
    made = table(
        "Other minima", ("chi-square", "right"), ("above the best", "right"), *((n, "right") for n in names)
    )
    for minimum in result.other_minima:
        made.add_row(
            f"{minimum.chi2:.2f}",
            f"{minimum.chi2 - result.chi2:+.2f}",
            *(_elsewhere(minimum.parameters.get(name), result.parameters[name]) for name in names),
        )
    return made


def _elsewhere(value: float | None, best: Estimate) -> str:
    """Write a parameter at another minimum with the decimals that it has at the best one."""
    smallest = min((side for side in best.sides or () if side > 0), default=best.error)
    return significant(value, 4) if value is None or not smallest else like_error(value, smallest)


def names(title: str, rows: Iterable[tuple[str, str, str, str]]) -> Table:
    """Tabulate catalogue names: name, kind, unit, title."""
    made = table(title, ("name", "name"), ("kind", "spare"), ("unit", "whole"), "title")
    for name, kind, unit, text in rows:
        made.add_row(name, kind, shown_unit(unit), text)
    return made
