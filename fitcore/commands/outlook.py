"""`weakmix outlook`: expected intervals when some uncertainties shrink."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import click

from fitcore.commands.errors import EXIT_FELL_SHORT
from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from rich.table import Table

    from fitcore.figures.style import Drawing
    from fitcore.problem import Problem
    from fitcore.studies.outlook import OutlookResult

CAUTION = (
    "Future intervals come from pseudo-data at today's best fit, without fluctuation, with the future errors: what "
    "a typical future would give if today's best fit were the truth; 'narrower by' compares them with the same "
    "pseudo-data and today's errors. Errors that the file does not name stay as they "
    "are, and so do all correlations."
)


@click.command("outlook")
@problem_options
@click.argument("future", metavar="FUTURE.toml", type=click.Path(path_type=Path))
@click.argument("names", metavar="[NAME]...", nargs=-1)
@click.option("--no-figures", is_flag=True, help="Draw nothing.")
@output_options
@seed_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    future: Path,
    names: tuple[str, ...],
    no_figures: bool,
    output: Output,
    work: Work,
) -> None:
    """Show what the uncertainties in FUTURE.toml would do to the intervals of NAME.

    FUTURE.toml has a table [future]; each key is the id of an entry or a group. Without NAME: the four
    Wolfenstein parameters.

    \b
      title = "Twice the data"
      [future]
      "gamma-average" = { error = 1.0, unit = "deg" }
      "lattice" = { factor = 0.5 }
    """
    from fitcore.commands import study
    from fitcore.commands.errors import input_error
    from fitcore.commands.fit import announce
    from fitcore.commands.progress_bar import progress_bar
    from fitcore.minimise.best_fit import PROFILED
    from fitcore.studies.outlook import OutlookResult, outlook, read_future

    problem = request.load()
    study.check_quantities(problem, names)
    wanted = names or tuple(name for name in PROFILED if name in problem.parameter_names)
    if not wanted:
        raise input_error("these inputs have none of the four Wolfenstein parameters; give NAMEs")
    plan = read_future(future, problem)
    announce(output, "outlook", problem)

    def compute() -> OutlookResult:
        with progress_bar("outlook", quiet=output.quiet):
            return outlook(problem, plan, wanted, rng=work.seed)

    result, place = study.compute_and_store(
        "outlook",
        problem,
        request,
        output,
        work,
        options={"names": list(names), "future": str(future)},
        compute=compute,
        to_dict=OutlookResult.to_dict,
        drawings=None if no_figures else lambda found: _drawings(problem, found),
        files={"future.toml": future.read_text(encoding="utf-8")},
    )
    output.show(*tables_of(result), *(f"flag: {flag}" for flag in result.flags), CAUTION)
    if place is not None:
        output.show(f"\nWritten to {place}")
    output.write_json(result.to_dict())
    lost = [flag for flag in result.flags if flag.startswith("interval-not-found")]
    if lost:
        click.echo(f"weakmix: {'; '.join(lost)}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def tables_of(result: OutlookResult) -> list[Table]:
    """Tabulate the changed errors, and the intervals before and after."""
    from fitcore.commands import tables
    from fitcore.rounding import like_error, shared_power, with_error

    changed = tables.table(
        f"Errors of {result.title}" if result.title else "Errors",
        ("id", "whole"),
        ("now", "right"),
        ("future", "right"),
        ("unit", "whole"),
    )
    for name, now, later, unit in result.changed:
        finer = min(now, later)  # both with its decimals
        power = shared_power(now, later)
        changed.add_row(name, *(like_error(x, finer, power) for x in (now, later)), tables.shown_unit(unit))
    made = tables.table(
        "Expected intervals, 68.27 %",
        ("quantity", "whole"),
        ("now", "whole"),
        ("future", "whole"),
        ("unit", "whole"),
        ("narrower by", "right"),
    )
    for row in result.rows:
        power = shared_power(row.value, *row.now_68)
        cells = [
            with_error(row.value, high - row.value, row.value - low, power=power)
            for low, high in (row.now_68, row.future_68)
        ]
        made.add_row(row.name, *cells, tables.shown_unit(row.unit), f"{row.gain:.2f}")
    return [changed, made]


def _drawings(problem: Problem, result: OutlookResult) -> Mapping[str, Drawing]:
    from fitcore.commands.study import footer
    from fitcore.figures import outlook

    rows = [
        outlook.BeforeAfter(
            row.name,
            problem.latex_of(row.name),
            row.unit,
            row.value,
            row.now_68,
            row.now_95,
            row.future_68,
            row.future_95,
            row.gain,
        )
        for row in result.rows
    ]
    return {"outlook": outlook.draw(rows, title=result.title, footer=footer(problem))}
