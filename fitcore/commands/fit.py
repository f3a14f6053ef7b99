"""`weakmix fit`: the best fit, its intervals and its pulls."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from fitcore.commands.completion import complete_names
from fitcore.commands.errors import EXIT_FELL_SHORT
from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from pathlib import Path

    from fitcore.commands.run_folder import RunFolder
    from fitcore.problem import Problem
    from fitcore.result import FitResult


@click.command("fit")
@problem_options
@click.option(
    "--derived",
    multiple=True,
    metavar="NAME",
    shell_complete=complete_names,
    help="Derive this quantity too, with its profile interval; repeatable.",
)
@click.option(
    "--profile-intervals",
    is_flag=True,
    help="Find every interval by refitting everything else, not only those of the Wolfenstein parameters "
    "and of --derived.",
)
@click.option(
    "--compare-theory-errors",
    is_flag=True,
    help="Also tabulate the fit with theory errors as given, Gaussian and flat.",
)
@click.option("--no-figures", is_flag=True, help="Draw nothing (saves about a second).")
@output_options
@seed_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    derived: tuple[str, ...],
    profile_intervals: bool,
    compare_theory_errors: bool,
    no_figures: bool,
    output: Output,
    work: Work,
) -> None:
    """Find the best fit of INPUTS, its intervals and its pulls.

    Writes a run folder (result.json, exact inputs, figures, log): DIR with --out, otherwise a new one under
    weakmix-runs. With `--json -` and no --out nothing is written but the JSON on stdout.

    \b
      weakmix fit averages-2026
      weakmix fit averages-2026 --without alpha-average --derived mixing_frequency_Bs
      weakmix fit mine.toml --set frequency-Bd.error=0.001 --json - | jq .p_value
    """
    problem = request.load()
    announce(output, "fit", problem, notices=False)
    result, place = fit_and_store(
        problem,
        request,
        output,
        work,
        command="fit",
        derived=derived,
        profile_intervals=profile_intervals,
        figures=not no_figures,
    )
    print_fit(output, problem, result, place)
    content = result.to_dict()
    if compare_theory_errors:
        from fitcore.commands import theory_errors

        treatments = theory_errors.compare(request, work.seed)
        output.show("", theory_errors.table(treatments))
        content["theory_errors_compared"] = {one.name: one.to_dict() for one in treatments}
    output.write_json(content)
    leave_if_not_valid(ctx, result)


def leave_if_not_valid(ctx: click.Context, result: FitResult) -> None:
    """End the command with exit code 1 and the reason if the fit cannot be trusted."""
    if not result.valid:
        click.echo(f"weakmix: the fit did not converge: {result.message or 'no reason recorded'}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def fit_and_store(
    problem: Problem,
    request: ProblemRequest,
    output: Output,
    work: Work,
    *,
    command: str,
    derived: tuple[str, ...] = (),
    profile_intervals: bool = False,
    figures: bool = True,
) -> tuple[FitResult, Path | None]:
    """Fit, and write the run folder unless only JSON on stdout is wanted; shared by `fit` and `demo`.

    Returns
    -------
    result : FitResult
        Also when it is not valid: the caller decides on the exit code.
    place : Path or None
        The run folder.
    """
    from fitcore.commands import run_folder

    names = derived_names(problem, derived)
    profiled = (*problem.parameter_names, *names) if profile_intervals else derived
    if output.json_on_stdout and output.out is None:
        return problem.fit(derived=names, profile=profiled, rng=work.seed), None
    options = {
        **request.describe(),
        "derived": list(derived),
        "profile_intervals": profile_intervals,
        "figures": figures,
    }
    with run_folder.writing(
        command, problem.inputs.name, out=output.out, options=options, seed=work.seed
    ) as run:
        result = problem.fit(derived=names, profile=profiled, rng=work.seed)
        write_run(run, problem, result, figures=figures)
    return result, run.place


def print_fit(output: Output, problem: Problem, result: FitResult, place: Path | None) -> None:
    """Print a fit for a person: the verdict, what is special about the inputs, the numbers."""
    from fitcore.commands import tables

    output.show(*tables.verdict(result))
    show_notices(output, problem)
    output.show("")
    output.show(tables.estimates("Parameters", result.parameters))
    if result.derived:
        output.show(tables.estimates("Derived", result.derived))
    output.show(tables.measurements(result.measurements))
    others = tables.other_minima(result)
    if others is not None:
        output.show(others)
    output.show(tables.caution(result))
    if place is not None:
        output.show(f"\nWritten to {place}")


def announce(output: Output, what: str, problem: Problem, *, notices: bool = True) -> None:
    """Print the first lines of every command on INPUTS: what is fitted, and what is special about it.

    Parameters
    ----------
    notices : bool
        False for a command that calls `show_notices` itself, after its verdict.
    """
    inputs = problem.inputs
    output.headline(
        what,
        f"{inputs.name} revision {inputs.revision}" if inputs.revision else inputs.name,
        f"{counted(problem.n_entries, 'entry', 'entries')}, {counted(problem.n_parameters, 'parameter')}",
        f"hypothesis {problem.hypothesis}",
        f"theory errors {problem.theory_errors}",
    )
    if notices:
        show_notices(output, problem)
        output.show("")


def counted(number: int, one: str, many: str = "") -> str:
    """Write a number of things."""
    return f"{number} {one if number == 1 else many or one + 's'}"


def show_notices(output: Output, problem: Problem) -> None:
    """Print what is special about the inputs: replaced, recalled, inflated, held fixed."""
    from fitcore.commands import tables

    units = {name: problem.unit_of(name) for name in problem.fixed}
    made = tables.notices(problem.inputs.notices, problem.fixed, units)
    if made.row_count:
        output.show(made)


def derived_names(problem: Problem, asked: tuple[str, ...]) -> tuple[str, ...]:
    """Return the default derived quantities that the problem determines, and those asked for.

    Raises
    ------
    UnknownNameError
        If an asked name is not in the catalogue.
    InputError
        If an asked quantity is complex, or rests on parameters that the problem does not have.
    """
    from fitcore.commands.errors import input_error
    from fitcore.minimise.best_fit import DEFAULT_DERIVED

    for name in asked:
        problem.unit_of(name)  # an unknown name is an error here
        if problem.is_complex(name):
            message = f"--derived {name}: is complex; derive a real quantity, for instance its magnitude"
            raise input_error(message)
        problem.values(problem.start, (name,))  # so is a quantity that the problem does not determine
    default = [name for name in DEFAULT_DERIVED if problem.determines(name)]
    return tuple(dict.fromkeys([*default, *asked]))


def write_run(run: RunFolder, problem: Problem, result: FitResult, *, figures: bool) -> None:
    """Fill a run folder with a fit: result, exact inputs and figures."""
    run.write_json("result.json", result.to_dict())
    run.write_inputs(problem.inputs.name, problem.inputs.resolved_toml())
    run.log("fitted", converged=result.valid, chi2=result.chi2, message=result.message, calls=result.n_calls)
    if figures:
        from fitcore.figures import correlation, dumbbell

        footer = f"{problem.inputs.name} revision {problem.inputs.revision} - {result.inputs_sha256[:8]}"
        latex = {row.quantity: problem.latex_of(row.quantity) for row in result.measurements}
        run.write_figure("measured-against-fitted", dumbbell.draw(result, latex=latex, footer=footer))
        if len(correlation.defined(result)) > 1:
            latex = {name: problem.latex_of(name) for name in result.correlation_names}
            run.write_figure("correlation", correlation.draw(result, latex=latex, footer=footer))
