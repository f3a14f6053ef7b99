"""The table behind `--compare-theory-errors`: theory errors as given, Gaussian and flat, side by side."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from fitcore.commands.options import ProblemRequest

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.problem import Problem
    from fitcore.studies.treatments import Treatment

WAYS = ("as-given", "gaussian", "flat")


def compare(request: ProblemRequest, seed: int = 0) -> tuple[Treatment, ...]:
    """Fit the four Wolfenstein parameters (or all, if there are none) under every treatment."""
    from fitcore.minimise.best_fit import PROFILED
    from fitcore.studies.treatments import compare_treatments

    problems: dict[str, Problem] = {way: replace(request, theory_errors=way).load() for way in WAYS}
    first = problems[WAYS[0]]
    names = [name for name in PROFILED if name in first.parameter_names] or list(first.parameter_names)
    return compare_treatments(problems, names, rng=seed)


def table(treatments: tuple[Treatment, ...]) -> Table:
    """Tabulate the treatments; a plateau is given as an interval."""
    from fitcore.commands import tables
    from fitcore.rounding import interval, shared_power, with_error

    made = tables.table(
        "Treatment of theory errors",
        ("parameter", "whole"),
        *((treatment.name, "whole") for treatment in treatments),
        caption="68.27 % profile intervals; in brackets: chi-square hardly changes between these values",
    )
    for name in treatments[0].rows:
        cells = []
        power = shared_power(*(treatment.rows[name].value for treatment in treatments))
        for treatment in treatments:
            row = treatment.rows[name]
            low, high = row.interval_68
            text = with_error(row.value, high - row.value, row.value - low, power=power)
            plateau = "" if row.plateau is None else f"  {interval(*row.plateau, 0.5 * (high - low), power)}"
            cells.append(text + plateau)
        made.add_row(name, *cells)
    made.add_row("chi-square", *(f"{treatment.chi2:.2f}" for treatment in treatments))
    return made
