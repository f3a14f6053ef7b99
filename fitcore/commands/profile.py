"""`weakmix profile`: the profile chi-square in one or two quantities, its intervals or regions."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.errors import EXIT_FELL_SHORT, input_error
from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, seed_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.commands.scan import Scan


@click.command("profile")
@problem_options
@click.argument("names", metavar="NAME[=LOW:HIGH[:POINTS]]...", nargs=-1, required=True)
@click.option(
    "--cl",
    "levels",
    type=float,
    multiple=True,
    default=(0.683, 0.954),
    show_default=True,
    help="Confidence level, repeatable; 0.683 and 0.954 mean 68.27 and 95.45 %.",
)
@click.option("--each", is_flag=True, help="Two names: also profile every constraint alone, as its own band.")
@click.option(
    "--compare-theory-errors",
    is_flag=True,
    help="One name: lay the profiles with theory errors as given, Gaussian and flat over each other.",
)
@click.option("--no-figures", is_flag=True, help="Draw nothing.")
@output_options
@seed_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    names: tuple[str, ...],
    levels: tuple[float, ...],
    each: bool,
    compare_theory_errors: bool,
    no_figures: bool,
    output: Output,
    work: Work,
) -> None:
    """Scan one or two quantities of INPUTS, everything else refitted at each point.

    NAME is a parameter or any real quantity, in its unit (see `weakmix find`). Without LOW:HIGH a range around
    the best fit is chosen; POINTS is 201 for one name and 100 for each of two (50 for bands in derived quantities).

    With --each, a band is the profile of the entries of one measured quantity alone, with the theory inputs that it
    needs. Directions that the plane does not show (lambda and A, for the apex) are held, within their uncertainties,
    where the measurements that hardly change over the frame put them at the best fit: the same for every band, so
    that none is bent by another measurement. A band is counted from its lowest point in the frame.

    \b
      weakmix profile averages-2026 angle_alpha
      weakmix profile averages-2026 wolfenstein_rhobar wolfenstein_etabar --each
      weakmix profile averages-2026 jarlskog=2.8e-5:3.6e-5:101 --compare-theory-errors
    """
    from dataclasses import replace

    from fitcore.commands import run_folder, scan, scan_axes, scan_report
    from fitcore.commands.fit import announce
    from fitcore.commands.progress_bar import progress_bar

    axes = scan_axes.parse_axes(names)
    if each and len(axes) != 2:
        raise input_error("--each draws bands in a plane: give two names")
    if compare_theory_errors and (len(axes) != 1 or request.theory_errors != "as-given"):
        raise input_error("--compare-theory-errors takes one name, and no --theory-errors beside it")
    scan_axes.check_levels(levels, len(axes))
    problem = request.load()
    scan_axes.check_names(problem, axes)
    announce(output, "profile", problem)
    others = {}
    if compare_theory_errors:
        others = {way: replace(request, theory_errors=way).load() for way in ("gaussian", "flat")}

    options = {
        **request.describe(),
        "names": list(names),
        "cl": list(levels),
        "each": each,
        "compare_theory_errors": compare_theory_errors,
        "figures": not no_figures,
    }

    def work_through() -> Scan:
        with progress_bar("profile", quiet=output.quiet) as report:
            return scan.run(
                problem, axes, tuple(levels), each=each, others=others, seed=work.seed, report=report
            )

    place = None
    if output.json_on_stdout and output.out is None:
        found = work_through()
    else:
        with run_folder.writing(
            "profile", problem.inputs.name, out=output.out, options=options, seed=work.seed
        ) as run:
            found = work_through()
            run.write_json("result.json", scan_report.to_dict(found))
            run.write_inputs(problem.inputs.name, problem.inputs.resolved_toml())
            run.log("profiled", minimum=found.profile.minimum, flagged=int(found.profile.flagged.sum()))
            if not no_figures:
                from fitcore.commands.scan_figures import drawings

                for name, drawing in drawings(found).items():
                    run.write_figure(name, drawing)
        place = run.place
    _print(output, found)
    if place is not None:
        output.show(f"\nWritten to {place}")
    output.write_json(scan_report.to_dict(found))
    problems = scan_report.shortcomings(found)
    if problems:
        click.echo(f"weakmix: {'; '.join(problems)}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def _print(output: Output, found: Scan) -> None:
    from rich.text import Text

    from fitcore.commands import scan_report, scan_tables

    profile = found.profile
    if profile.better_minimum is not None:
        text = "A LOWER MINIMUM WAS FOUND during the scan; everything below is counted from it:"
        output.show(Text(text, style="bold red"), scan_tables.point(found), "")
    line = f"lowest chi-square {profile.minimum:.3f} at " + ", ".join(
        f"{name} = {scan_tables.number(value)}" for name, value in zip(profile.names, found.best, strict=True)
    )
    output.show(Text(line), *(Text(f"  {note}", style="yellow") for note in scan_report.notes(found)), "")
    output.show(*scan_tables.regions(found))
    words: dict[str, Any] = {"quantity": "one quantity", "dof": 1} if len(profile.names) == 1 else {}
    output.show(scan_tables.caution(len(profile.names)) if words or len(profile.names) == 2 else "")
