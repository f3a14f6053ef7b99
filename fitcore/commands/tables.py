"""Tables for people, built from results; nothing here computes."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, Literal

from rich import box
from rich.table import Table
from rich.text import Text

from fitcore.commands.rounding import interval, number, with_error

if TYPE_CHECKING:
    from fitcore.result import Estimate, FitResult, MeasurementRow

#: Order of the notices about the inputs; other kinds follow.
NOTICE_ORDER = ("replaced", "dropped", "changed", "inflated", "shared", "recalled")

CAUTION = (
    "Intervals are those of chi-square differences of 1.000 (68.27 %) and 3.841 (95.0 %) for one quantity at "
    "a time: they hold as far as such differences follow their large-sample distribution (Wilks' theorem), "
    "every error is Gaussian as written, and correlations that the inputs do not state are absent. 'linear' "
    "intervals are propagated from the covariance matrix, 'profile' ones are not."
)


def table(title: str, *columns: str | tuple[str, str], caption: str = "") -> Table:
    """Make an empty table in the house style.

    Parameters
    ----------
    title : str
        Heading.
    columns : str or (str, str)
        Heads, each alone or with `"left"`, `"right"` or `"whole"` (left); the last two are not broken where
        there is room.
    caption : str
        A line under the table.
    """
    made = Table(
        title=title,
        title_style="bold",
        title_justify="left",
        caption=caption or None,
        caption_justify="left",
        box=box.SIMPLE_HEAD,
        pad_edge=False,
        header_style="bold",
    )
    for column in columns:
        head, side = (column, "left") if isinstance(column, str) else column
        justify: Literal["left", "right"] = "right" if side == "right" else "left"
        made.add_column(head, justify=justify, overflow="fold", no_wrap=side != "left")
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
    return f"p-value {value:.2g}" if value >= 1e-4 else f"p-value {value:.1e}"


def estimate(one: Estimate) -> str:
    """Write an estimate with its 68 % errors."""
    if one.interval_68 is not None and None not in one.interval_68:
        low, high = (float(end) for end in one.interval_68)
        plus, minus = high - one.value, one.value - low
        if plus >= 0 and minus >= 0 and math.isfinite(plus + minus):
            return with_error(one.value, plus, minus)
    if one.error is not None:
        return with_error(one.value, one.error)
    bounded = one.interval_68 is not None and any(
        end is not None and math.isfinite(end) for end in one.interval_68
    )
    return f"{number(one.value)} ({'open on one side' if bounded else 'unconstrained'})"


def estimates(title: str, rows: Mapping[str, Estimate]) -> Table:
    """Tabulate parameters or derived quantities."""
    made = table(title, ("name", "whole"), ("value", "whole"), "68.27 %", "95.0 %", "unit", "intervals")
    for name, one in rows.items():
        made.add_row(
            name,
            estimate(one),
            _interval(one.interval_68, one),
            _interval(one.interval_95, one),
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
    return interval(ends[0], ends[1], error)


def measurements(rows: Sequence[MeasurementRow]) -> Table:
    """Tabulate measured against fitted values, the largest pull first."""
    made = table(
        "Measured against fitted",
        ("id", "whole"),
        ("measured", "whole"),
        ("fitted", "whole"),
        ("unit", "whole"),
        ("pull", "right"),
        caption="pull = (measured - fitted) / measured error",
    )
    for row in by_pull(rows):
        made.add_row(
            row.id,
            with_error(row.measured, row.error_plus, row.error_minus),
            fitted_value(row),
            shown_unit(row.unit),
            pull(row.pull),
        )
    return made


def by_pull(rows: Sequence[MeasurementRow]) -> list[MeasurementRow]:
    """Sort measurements by the size of their pull, unknown pulls last."""
    return sorted(
        rows, key=lambda row: -abs(row.pull) if row.pull is not None and math.isfinite(row.pull) else 1.0
    )


def fitted_value(row: MeasurementRow) -> str:
    """Write a fitted value with as many decimals as the measurement has, or its own error if known."""
    if row.fitted_error:
        return with_error(row.fitted, row.fitted_error)
    text = with_error(row.fitted, row.error_plus, row.error_minus)
    if text.startswith("("):
        return text[1:].split(" ")[0] + text[text.rindex(")") + 1 :]
    return text.split(" ")[0]


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
            *(number(minimum.parameters.get(name), 4) for name in names),
        )
    return made


def names(title: str, rows: Iterable[tuple[str, str, str, str]]) -> Table:
    """Tabulate catalogue names: name, kind, unit, title."""
    made = table(title, ("name", "whole"), "kind", "unit", "title")
    for name, kind, unit, text in rows:
        made.add_row(name, kind, shown_unit(unit), text)
    return made
