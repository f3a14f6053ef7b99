"""`weakmix budget`: which input makes which part of an uncertainty."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import click

from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.figures.style import Drawing
    from fitcore.problem import Problem
    from fitcore.studies.budget import BudgetResult, BudgetRow

#: Entries that a table lists; the rest is in the JSON and the CSV.
MOST = 25

CAUTION = (
    "shift: change of the quantity when the measured value moves up by one standard deviation and everything is "
    "refitted; squares of shifts add up to the square of the whole uncertainty (with correlations where stated). "
    "if exact: the part of the uncertainty that would vanish if what the entry measures were known exactly, the root "
    "of sigma^2 - sigma'^2 with sigma' the uncertainty then left, by linear propagation; these parts do not add up. It "
    "exceeds the shift where other entries measure the same thing. Groups may share entries; `experiment` and "
    "`theory` are the kinds of the entries. --only and --without take groups and kinds as well as ids."
)


@click.command("budget")
@problem_options
@click.argument("names", metavar="[NAME]...", nargs=-1)
@click.option("--no-figures", is_flag=True, help="Draw nothing.")
@output_options
@seed_options
def command(
    request: ProblemRequest, names: tuple[str, ...], no_figures: bool, output: Output, work: Work
) -> None:
    """Divide the uncertainty of NAME among the inputs.

    Without NAME: the four Wolfenstein parameters.

    \b
      weakmix budget averages-2026 wolfenstein_rhobar wolfenstein_etabar
    """
    from fitcore.commands import study
    from fitcore.commands.errors import input_error
    from fitcore.commands.fit import announce
    from fitcore.commands.progress_bar import progress_bar
    from fitcore.minimise.best_fit import PROFILED
    from fitcore.studies.budget import BudgetResult, budget

    problem = request.load()
    study.check_quantities(problem, names)
    wanted = names or tuple(name for name in PROFILED if name in problem.parameter_names)
    if not wanted:
        raise input_error("these inputs have none of the four Wolfenstein parameters; give NAMEs")
    announce(output, "budget", problem)

    def compute() -> BudgetResult:
        with progress_bar("budget", quiet=output.quiet):
            return budget(problem, wanted, rng=work.seed)

    result, place = study.compute_and_store(
        "budget",
        problem,
        request,
        output,
        work,
        options={"names": list(names)},
        compute=compute,
        to_dict=BudgetResult.to_dict,
        drawings=None if no_figures else lambda found: _drawings(problem, found),
    )
    for name in result.quantities:
        output.show(*tables_of(result, name))
    output.show(CAUTION)
    if place is not None:
        output.show(f"\nWritten to {place}")
    output.write_json(result.to_dict())


def tables_of(result: BudgetResult, name: str) -> list[Table]:
    """Tabulate the entries and the groups of one quantity's budget."""
    from fitcore.commands import tables
    from fitcore.rounding import with_error

    whole = f"{name}: {with_error(result.values[name], result.errors[name])} {tables.shown_unit(result.units[name])}"
    rows = result.entries[name]
    left = f"{len(rows) - MOST} smaller ones are in result.json" if len(rows) > MOST else ""
    made = []
    for title, part, caption in ((whole, rows[:MOST], left), ("in groups", result.groups[name], "")):
        one = tables.table(
            title,
            ("input" if part is not result.groups[name] else "group", "whole"),
            ("shift", "right"),
            ("of the uncertainty", "right"),
            ("if exact", "right"),
            caption=caption,
        )
        for row in part:
            one.add_row(row.name, *_cells(row, result.errors[name], signed=title == whole))
        made.append(one)
    return made


def _cells(row: BudgetRow, error: float, *, signed: bool) -> tuple[str, str, str]:
    from fitcore.rounding import share, shared_power

    power = shared_power(error)  # one for the whole table
    return (
        share(row.shift, error, sign=signed, power=power),
        f"{100 * abs(row.shift) / error:.0f} %" if error else "-",
        share(row.removal, error, power=power),
    )


def _drawings(problem: Problem, result: BudgetResult) -> Mapping[str, Drawing]:
    from fitcore.commands.study import footer
    from fitcore.figures import budget, style

    drawn = {}
    for name in result.quantities:
        if not result.errors[name]:
            continue
        bars = [
            budget.Bar(row.name, style.family_of(*result.families[row.name]), row.shift, row.removal)
            for row in result.entries[name]
        ]
        groups = [budget.Bar(row.name, style.OTHER, row.shift, row.removal) for row in result.groups[name]]
        drawn[f"budget-{name}"] = budget.draw(
            name,
            bars,
            groups,
            error=result.errors[name],
            latex=problem.latex_of(name),
            unit=result.units[name],
            title=problem.inputs.title,
            footer=footer(problem),
        )
    return drawn
