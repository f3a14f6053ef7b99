"""`weakmix calibrate`: p-values, intervals and coverage by pseudo-experiments."""

from __future__ import annotations

import hashlib
import json
import math
import shutil
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.errors import EXIT_FELL_SHORT, EXIT_INTERRUPTED, fail, input_error
from fitcore.commands.options import ProblemRequest, Work, output_options, problem_options, work_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.commands.run_folder import RunFolder
    from fitcore.problem import Problem
    from fitcore.studies.calibration_result import CalibrationResult

TOYS_FILE = "toys.jsonl"
#: Seconds between lines of progress where there is no terminal.
LINE_EVERY = 10.0


@click.command("calibrate")
@problem_options
@click.argument("targets", metavar="[NAME[=VALUE]...]", nargs=-1)
@click.option("--toys", type=int, default=1000, show_default=True, help="Pseudo-experiments per point.")
@click.option(
    "--cl",
    type=float,
    multiple=True,
    metavar="CL",
    help="Confidence level of intervals and coverage; repeatable.  [default: 0.683]",
)
@click.option(
    "--coverage",
    multiple=True,
    metavar="NAME",
    help="Report coverage and pulls of this quantity; repeatable; `all` for every parameter.",
)
@click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Run on the dask cluster whose scheduler has this address, in place of --jobs.",
)
@click.option("--no-figures", is_flag=True, help="Draw nothing.")
@output_options
@work_options
@click.pass_context
def command(
    ctx: click.Context,
    request: ProblemRequest,
    targets: tuple[str, ...],
    toys: int,
    cl: tuple[float, ...],
    coverage: tuple[str, ...],
    cluster: str | None,
    no_figures: bool,
    output: Output,
    work: Work,
) -> None:
    """Calibrate the p-value of INPUTS, and chosen points and intervals, with refitted pseudo-experiments.

    NAME=VALUE tests that value (two names: both together), in the catalogue's unit. NAME asks for the interval at
    --cl, two names for the region of both; NAME=LOW:HIGH:N says where pseudo-experiments are thrown. Everything is
    given beside its asymptotic counterpart.

    Finished pseudo-experiments are kept in DIR.toys.jsonl until the run folder DIR is written: interrupted with
    Ctrl-C, the same command goes on from there. The same seed gives the same numbers with any --jobs or --cluster.

    \b
      weakmix calibrate averages-2026 --toys 10000 --jobs 2
      weakmix calibrate averages-2026 wolfenstein_rhobar --cl 0.683 --cl 0.954 --out rhobar
      weakmix calibrate averages-2026 wolfenstein_rhobar=0.15 wolfenstein_etabar=0.36
      weakmix calibrate averages-2026 --coverage all --toys 1000 --json coverage.json
    """
    from fitcore.commands import calibration_tables
    from fitcore.commands.fit import announce

    wanted = Wanted.parse(targets, cl, coverage, toys)
    problem = request.load()
    announce(output, "calibration", problem)
    result, place = calibrate_and_store(
        problem, request, wanted, output, work, cluster, figures=not no_figures
    )
    calibration_tables.show(output, result)
    if place is not None:
        output.show(f"\nWritten to {place}")
    output.write_json(result.to_dict())
    if not result.valid:
        click.echo(
            f"weakmix: the calibration cannot be trusted: {result.message or 'no reason recorded'}", err=True
        )
        ctx.exit(EXIT_FELL_SHORT)


@dataclass(frozen=True)
class Wanted:
    """What is to be calibrated.

    Attributes
    ----------
    toys : int
    points : tuple of dict
    intervals : dict of names to grids (or None)
    cl : tuple of float
    coverage : tuple of str
    targets : tuple of str
        As typed.
    """

    toys: int
    points: tuple[dict[str, float], ...]
    intervals: dict[tuple[str, ...], Any]
    cl: tuple[float, ...]
    coverage: tuple[str, ...]
    targets: tuple[str, ...]

    @classmethod
    def parse(
        cls, targets: tuple[str, ...], cl: tuple[float, ...], coverage: tuple[str, ...], toys: int
    ) -> Wanted:
        """Read the command line's targets.

        Raises
        ------
        InputError
            Text that is neither NAME, NAME=VALUE nor NAME=LOW:HIGH:N; more than two quantities at once; no toys.
        """
        if toys < 1:
            raise input_error(
                f"--toys {toys}: at least one pseudo-experiment is needed; 1000 give a p-value to 0.016"
            )
        for level in cl:
            if not 0.0 < level < 1.0:
                raise input_error(
                    f"--cl: confidence level {level:g} is not between 0 and 1; give for example 0.683"
                )
        values: list[tuple[str, float]] = []
        scanned: dict[str, Any] = {}
        for target in targets:
            name, equals, text = target.partition("=")
            if not name or (equals and not text):
                raise input_error(f"{target!r}: write NAME, NAME=VALUE or NAME=LOW:HIGH:N")
            if not equals:
                scanned[name] = None
            elif ":" in text:
                scanned[name] = _grid(target, text)
            else:
                values.append((name, _number(target, text)))
        names = list(dict.fromkeys(name for name, _ in values))
        if len(names) == 1:
            points = tuple({name: value} for name, value in values)
        elif len(names) == len(values) <= 2:
            points = (dict(values),) if values else ()
        else:
            raise input_error(
                f"{', '.join(targets)}: test one quantity at several values, or two quantities at one pair of values"
            )
        if len(scanned) > 2:
            raise input_error(
                f"{', '.join(scanned)}: ask for the interval of one quantity or the region of two"
            )
        grids = tuple(scanned.values())
        if len(scanned) == 2 and (grids[0] is None) != (grids[1] is None):
            raise input_error(f"{', '.join(targets)}: give a grid for both quantities or for none")
        intervals = {tuple(scanned): None if grids[0] is None else grids} if scanned else {}
        return cls(toys, points, intervals, cl or (0.683,), coverage, targets)


def _number(target: str, text: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise input_error(f"{target!r}: {text!r} is not a number; write NAME=VALUE in the catalogue's unit")
    return value


def _grid(target: str, text: str) -> Any:
    parts = text.split(":")
    try:
        low, high, count = float(parts[0]), float(parts[1]), int(parts[2]) if len(parts) == 3 else 0
    except (ValueError, IndexError):
        low, high, count = math.nan, math.nan, 0
    if len(parts) != 3 or not (math.isfinite(low) and math.isfinite(high) and low < high) or count < 2:
        raise input_error(f"{target!r}: a grid is NAME=LOW:HIGH:N with LOW below HIGH and N at least 2")
    import numpy as np

    return np.linspace(low, high, count)


def calibrate_and_store(
    problem: Problem,
    request: ProblemRequest,
    wanted: Wanted,
    output: Output,
    work: Work,
    cluster: str | None,
    *,
    figures: bool,
) -> tuple[CalibrationResult, Path | None]:
    """Calibrate, keeping finished blocks, and write the run folder unless only JSON on stdout is wanted."""
    from fitcore.commands import run_folder

    if output.json_on_stdout and output.out is None:
        return run(problem, wanted, output, work, cluster, store=None), None
    options = {
        **request.describe(),
        "targets": list(wanted.targets),
        "toys": wanted.toys,
        "cl": list(wanted.cl),
        "coverage": list(wanted.coverage),
        "figures": figures,
    }
    store = store_place(output.out, problem, options, work.seed)
    with run_folder.writing(
        "calibrate", problem.inputs.name, out=output.out, options=options, seed=work.seed
    ) as folder:
        result = run(problem, wanted, output, work, cluster, store=store)
        write_run(folder, problem, result, figures=figures)
        shutil.copyfile(store, folder.building / TOYS_FILE)
    store.unlink(missing_ok=True)
    return result, folder.place


def store_place(out: Path | None, problem: Problem, options: dict[str, Any], seed: int) -> Path:
    """Where blocks are kept until the run folder exists: the same place for the same command."""
    if out is not None:
        return out.with_name(f"{out.name}.{TOYS_FILE}")
    from fitcore.commands.run_folder import DEFAULT_PARENT

    what = json.dumps([problem.fingerprint, options["targets"], options["cl"], options["coverage"], seed])
    return (
        DEFAULT_PARENT
        / f"calibrate-{problem.inputs.name}-{hashlib.sha256(what.encode()).hexdigest()[:8]}.{TOYS_FILE}"
    )


def run(
    problem: Problem, wanted: Wanted, output: Output, work: Work, cluster: str | None, *, store: Path | None
) -> CalibrationResult:
    """Calibrate with progress on stderr."""
    from fitcore.scaleout import open_executor
    from fitcore.studies.calibration import calibrate

    spec = problem.spec if work.jobs > 1 and cluster is None else None
    done = [0, 0]
    try:
        with (
            open_executor(jobs=work.jobs, cluster=cluster, spec=spec) as executor,
            progress(output) as report,
        ):

            def note(now: int, total: int) -> None:
                done[:] = now, total
                report(now, total)

            return calibrate(
                problem,
                wanted.toys,
                rng=work.seed,
                executor=executor,
                store=store,
                points=wanted.points,
                intervals=wanted.intervals,
                cl=wanted.cl,
                coverage=wanted.coverage,
                progress=note,
            )
    except KeyboardInterrupt:
        kept = f"{done[0]:,} of {done[1]:,} pseudo-experiments are done"
        if store is None or not store.exists():
            fail(f"\nweakmix: interrupted; {kept} and lost: give --out DIR to keep them.", EXIT_INTERRUPTED)
        fail(
            f"\nweakmix: interrupted; {kept} and kept in {store}: the same command goes on.", EXIT_INTERRUPTED
        )


@contextmanager
def progress(output: Output) -> Iterator[Callable[[int, int], None]]:
    """A bar on a terminal, a line every ten seconds elsewhere."""
    import sys

    from fitcore.commands.progress_bar import progress_bar

    if output.quiet or sys.stderr.isatty():
        with progress_bar("pseudo-experiments", quiet=output.quiet) as report:
            yield report
        return
    began = last = time.monotonic()
    first: list[int] = []

    def line(done: int, total: int) -> None:
        nonlocal last
        first.append(done)
        now = time.monotonic()
        if now - last >= LINE_EVERY and done < total:
            last = now
            left = (now - began) * (total - done) / max(done - first[0], 1)
            click.echo(
                f"weakmix: {done:,} of {total:,} pseudo-experiments, about {left:.0f} s to go", err=True
            )

    yield line


def write_run(folder: RunFolder, problem: Problem, result: CalibrationResult, *, figures: bool) -> None:
    """Fill a run folder with a calibration: result, exact inputs and figures."""
    folder.write_json("result.json", result.to_dict())
    folder.write_inputs(problem.inputs.name, problem.inputs.resolved_toml())
    folder.log(
        "calibrated", converged=result.valid, p_value=result.p_value, toys=result.thrown, failed=result.failed
    )
    if not figures:
        return
    from fitcore.figures import calibration

    revision = f" revision {problem.inputs.revision}" if problem.inputs.revision else ""
    footer = f"{problem.inputs.name}{revision} - {problem.inputs.sha256[:8]} - seed {result.seed}"
    folder.write_figure("goodness", calibration.draw_goodness(result, footer=footer))
    named = {name for region in result.regions for name in region.names} | {
        row.name for row in result.coverage
    }
    latex = {name: problem.latex_of(name) for name in named}
    for region in result.regions:
        name = "threshold-" + "-".join(region.names)
        folder.write_figure(name, calibration.draw_thresholds(region, latex=latex, footer=footer))
    if result.coverage:
        folder.write_figure("coverage", calibration.draw_coverage(result, latex=latex, footer=footer))
