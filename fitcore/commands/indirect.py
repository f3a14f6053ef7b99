"""`weakmix indirect`: what everything else says about a quantity."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import click

from fitcore.commands.errors import EXIT_FELL_SHORT
from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.figures.style import Drawing
    from fitcore.problem import Problem
    from fitcore.studies.indirect import IndirectResult

CAUTION = (
    "Tension: root of chi-square(all) - chi-square(without it) - chi-square(its own entries alone), with the sign of "
    "direct minus indirect; in standard deviations as far as such differences follow their large-sample distribution "
    "(Wilks' theorem). Among many quantities some tensions are large by chance, and they are not independent."
)


@click.command("indirect")
@problem_options
@click.argument("names", metavar="[NAME]...", nargs=-1)
@click.option("--no-figures", is_flag=True, help="Draw nothing.")
@output_options
@seed_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    names: tuple[str, ...],
    no_figures: bool,
    output: Output,
    work: Work,
) -> None:
    """Predict NAME from everything but its own measurement, and compare.

    Entries of NAME and those marked as overlapping with them are left out, everything else is refitted. Without
    NAME: all measured quantities.

    \b
      weakmix indirect averages-2026
      weakmix indirect averages-2026 isospin_alpha phase_phi_s
    """
    from fitcore.commands import study
    from fitcore.commands.fit import announce
    from fitcore.commands.progress_bar import progress_bar
    from fitcore.studies.indirect import IndirectResult, indirect, measured_quantities

    problem = request.load()
    study.check_quantities(problem, names)
    wanted = names or measured_quantities(problem)
    announce(output, "indirect", problem)

    def compute() -> IndirectResult:
        with progress_bar("indirect", quiet=output.quiet) as report:
            return indirect(problem, wanted, rng=work.seed, progress=report)

    result, place = study.compute_and_store(
        "indirect",
        problem,
        request,
        output,
        work,
        options={"names": list(names)},
        compute=compute,
        to_dict=IndirectResult.to_dict,
        drawings=None if no_figures else lambda found: _drawings(problem, found),
    )
    output.show(table(result), CAUTION)
    if place is not None:
        output.show(f"\nWritten to {place}")
    output.write_json(result.to_dict())
    failed = [row.quantity for row in result.rows if {"not-converged", "interval-not-found"} & set(row.flags)]
    if failed:
        click.echo(f"weakmix: did not converge for {', '.join(failed)}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def table(result: IndirectResult) -> Table:
    """Tabulate direct against indirect, the largest tension first."""
    from fitcore.commands import tables
    from fitcore.rounding import number, shared_power, with_error

    made = tables.table(
        "Direct against indirect",
        ("quantity", "whole"),
        ("direct", "whole"),
        ("indirect", "whole"),
        ("unit", "whole"),
        ("tension", "right"),
        "remarks",
    )
    for row in sorted(result.rows, key=lambda row: -abs(row.tension or 0.0)):
        direct = "-"
        errors = [x for x in row.direct_error or () if x > 0]
        power = shared_power(row.direct, row.value, error=min(errors, default=None))
        if row.direct is not None and row.direct_error is not None:
            direct = with_error(row.direct, *row.direct_error, power=power)
        implied = "-"
        if row.value is not None and row.interval_68 is not None:
            low, high = row.interval_68
            implied = with_error(row.value, high - row.value, row.value - low, power=power)
        elif row.value is not None:
            implied = number(row.value)
        made.add_row(
            row.quantity,
            direct,
            implied,
            tables.shown_unit(row.unit),
            tables.pull(row.tension),
            ", ".join(row.flags),
        )
    return made


def _drawings(problem: Problem, result: IndirectResult) -> Mapping[str, Drawing]:
    from fitcore.commands.study import footer
    from fitcore.figures import direct_indirect, style

    groups: dict[str, tuple[tuple[str, ...], str]] = {}
    for entry in problem.inputs.entries:
        groups.setdefault(entry.quantity, (tuple(entry.groups), entry.kind))
    rows = [
        direct_indirect.Pair(
            row.quantity,
            problem.latex_of(row.quantity),
            row.unit,
            style.family_of(*groups.get(row.quantity, ((), "experiment"))),
            row.value,
            row.interval_68,
            row.interval_95,
            row.direct,
            row.direct_error,
            row.tension,
        )
        for row in result.rows
        if row.value is not None and row.interval_68 is not None and row.interval_95 is not None
    ]
    if not rows:
        return {}
    return {"direct-indirect": direct_indirect.draw(rows, title=problem.inputs.title, footer=footer(problem))}
