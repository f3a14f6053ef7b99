"""`weakmix sample`: a posterior chain in a file that can be stopped and resumed."""

from __future__ import annotations

import shlex
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.errors import EXIT_FELL_SHORT
from fitcore.commands.options import ProblemRequest, output_options, problem_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.problem import Problem
    from fitcore.result import FitResult
    from fitcore.sampling.sample_result import SampleResult


@click.command("sample")
@problem_options
@click.option(
    "--chain",
    "chain_path",
    required=True,
    metavar="FILE.h5",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Chain file; an existing one of the same problem is resumed.",
)
@click.option(
    "--until", type=click.IntRange(min=1), metavar="STEPS", help="Stop at this total number of steps."
)
@click.option(
    "--effective",
    type=click.FloatRange(min=1),
    metavar="N",
    help="Stop when every parameter has N effective samples and the ensembles agree.  [default: 2000]",
)
@click.option(
    "--minutes", type=click.FloatRange(min=0, min_open=True), metavar="M", help="Stop after M minutes."
)
@click.option("--walkers", type=click.IntRange(min=8), metavar="W", help="Walkers per ensemble, even.")
@click.option(
    "--ensembles", type=click.IntRange(min=2), metavar="E", help="Independent ensembles.  [default: 4]"
)
@click.option("--seed", type=click.IntRange(min=0), help="Seed of a new chain.  [default: 0]")
@output_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    chain_path: Path,
    until: int | None,
    effective: float | None,
    minutes: float | None,
    walkers: int | None,
    ensembles: int | None,
    seed: int | None,
    output: Output,
) -> None:
    """Sample the posterior of INPUTS into a chain file.

    Flat in the parameters inside their bounds, unless the inputs file gives a parameter its own prior. An
    interrupt (Ctrl-C) keeps everything sampled so far; the same command goes on from there, and the chain is
    the same, bit for bit, as without the interruption.

    \b
      weakmix sample averages-2026 --chain averages.h5
      weakmix sample world-2026 --chain world.h5 --effective 20000
      weakmix sample world-2026 --chain world.h5 --minutes 30
    """
    from fitcore.commands import posterior_tables
    from fitcore.commands.fit import announce
    from fitcore.commands.progress import ChainProgress
    from fitcore.sampling.from_fit import modes_of_fit
    from fitcore.sampling.posterior import sample

    problem = request.load()
    announce(output, "posterior", problem)
    if seed is None and not chain_path.exists():
        seed = 0
    fit = problem.fit(rng=seed or 0)
    go_on = resume_command(ctx, request, chain_path, until, effective, minutes)
    try:
        with ChainProgress(output) as progress:
            result = sample(
                problem,
                modes=modes_of_fit(problem, fit),
                chain_path=chain_path,
                until=until,
                effective=effective,
                minutes=minutes,
                walkers=walkers,
                ensembles=ensembles,
                rng=seed,
                progress=progress,
            )
    except KeyboardInterrupt:
        _say_how_to_go_on(output, "Interrupted during the pilot run: no steps yet. To start again:", go_on)
        return
    output.show(*posterior_tables.verdict(result))
    content = _content(output, problem, fit, result)
    output.write_json(content)
    if output.out is not None:
        _write_run(request, output, problem, content, seed)
    if result.interrupted:
        _say_how_to_go_on(
            output, f"Interrupted; {result.steps} steps are safe in {chain_path}. To go on:", go_on
        )
    elif not result.valid:
        click.echo(f"weakmix: {result.message}", err=True)
        ctx.exit(EXIT_FELL_SHORT)


def _say_how_to_go_on(output: Output, what: str, go_on: str) -> None:
    """Print a command line unfolded, so that it can be copied."""
    if not output.quiet:
        click.echo(f"\n{what}\n  {go_on}", err=output.json_on_stdout)


def _content(output: Output, problem: Problem, fit: FitResult, result: SampleResult) -> dict[str, Any]:
    """Show the tables, and return the result as plain data."""
    from fitcore.commands import posterior_tables
    from fitcore.sampling.summary import summarise

    summary = summarise(result.chain)
    output.show(posterior_tables.summary(summary, fit.parameters if fit.valid else {}))
    output.show(posterior_tables.diagnostics(result.diagnostics))
    output.show(posterior_tables.PRIORS)
    return {
        **summary.to_dict(),
        "diagnostics": result.diagnostics.to_dict(),
        "valid": result.valid,
        "message": result.message,
        "flags": list(result.flags),
        "notices": list(result.notices),
        "stopped_because": result.stopped_because,
        "chain": str(result.path),
        "seed": result.seed,
        "evaluations": result.evaluations,
        "hypothesis": problem.hypothesis,
        "inputs": {"name": problem.inputs.name, "sha256": problem.inputs.sha256},
        "fingerprint": problem.fingerprint,
    }


def _write_run(
    request: ProblemRequest, output: Output, problem: Problem, content: dict[str, Any], seed: int | None
) -> None:
    from fitcore.commands import run_folder

    with run_folder.writing(
        "sample", problem.inputs.name, out=output.out, options=request.describe(), seed=seed
    ) as run:
        run.write_json("result.json", content)
        run.write_inputs(problem.inputs.name, problem.inputs.resolved_toml())
    output.show(f"\nWritten to {run.place}")


def resume_command(
    ctx: click.Context,
    request: ProblemRequest,
    chain_path: Path,
    until: int | None,
    effective: float | None,
    minutes: float | None,
) -> str:
    """Return the command line that goes on with the chain."""
    words = [ctx.command_path, request.inputs, "--chain", str(chain_path)]
    for option, values in (
        ("--only", request.only),
        ("--without", request.without),
        ("--set", request.settings),
        ("--hypothesis", request.hypothesis),
        ("--module", request.modules),
    ):
        for value in values:
            words += [option, value]
    if request.theory_errors != "as-given":
        words += ["--theory-errors", request.theory_errors]
    for option, number in (("--until", until), ("--effective", effective), ("--minutes", minutes)):
        if number is not None:
            words += [option, f"{number:g}" if isinstance(number, float) else str(number)]
    return f"{words[0]} {shlex.join(words[1:])}"
