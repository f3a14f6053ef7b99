"""`weakmix chain`: look at chain files - verify, summarise, derive, export."""

from __future__ import annotations

import dataclasses
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from fitcore.commands.options import module_option, out_option, reading_options
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.commands.posterior_comparison import Comparison
    from fitcore.problem import Problem
    from fitcore.sampling.evidence import Evidence

#: What exported files are called.
ENDINGS = {"netcdf": ".nc", "csv": ".csv", "npz": ".npz"}

file_argument = click.argument("file", metavar="FILE", type=click.Path(path_type=Path))


@click.group("chain")
def command() -> None:
    """Look at chain files: verify, summarise, derive quantities, export.

    A chain file holds the exact inputs that it was sampled from, so none of these needs INPUTS.
    """


@command.command("verify")
@file_argument
@reading_options
def verify_command(file: Path, output: Output) -> None:
    """Check a chain file completely: header, tables, and every block against its checksum."""
    from fitcore.sampling.verify import verify

    found = verify(file)
    output.show(
        f"{file}: sound - {found.steps} steps of {found.walkers} walkers, {found.parameters} parameters, "
        f"{found.blocks} blocks, hypothesis {found.hypothesis}, made {found.created}"
    )
    for name, steps in found.derived.items():
        output.show(f"  derived {name}: {steps} steps")
    for notice in found.notices:
        output.show(f"  note: {notice}")
    output.write_json(
        {
            "sound": True,
            "steps": found.steps,
            "walkers": found.walkers,
            "parameters": found.parameters,
            "blocks": found.blocks,
            "derived": found.derived,
            "notices": list(found.notices),
            "fingerprint": found.fingerprint,
        }
    )


@command.command("summary")
@file_argument
@click.option(
    "--against",
    metavar="RUN",
    type=click.Path(path_type=Path, exists=True, file_okay=False),
    help="Run folder of a fit or a profile: its intervals stand beside the credible ones, its contours go into a "
    "figure with them.",
)
@click.option(
    "--name",
    "names",
    multiple=True,
    metavar="NAME",
    help="Parameter or derived quantity to show; repeatable.  [default: all]",
)
@click.option(
    "--cl",
    type=click.FloatRange(min=0, max=1, min_open=True, max_open=True),
    multiple=True,
    default=(0.683, 0.954),
    show_default=True,
    help="Share of the posterior inside an interval; repeatable.",
)
@click.option("--equal-tailed", is_flag=True, help="Equal-tailed intervals instead of highest density.")
@click.option(
    "--discard", type=click.IntRange(min=0), default=0, show_default=True, help="First steps to leave out."
)
@click.option(
    "--evidence",
    "with_evidence",
    is_flag=True,
    help="Estimate the evidence (marginal likelihood) by importance sampling; every prior must be proper.",
)
@out_option
@module_option
@reading_options
def summary_command(
    file: Path,
    against: Path | None,
    names: tuple[str, ...],
    cl: tuple[float, ...],
    equal_tailed: bool,
    discard: int,
    with_evidence: bool,
    out: Path | None,
    modules: tuple[str, ...],
    output: Output,
) -> None:
    """Summarise a chain: means, credible intervals, convergence; figures with --out.

    \b
      weakmix chain summary world.h5 --against fit-run --out figures
      weakmix chain summary world.h5 --evidence --json -
    """
    from fitcore.commands import posterior_tables
    from fitcore.commands.modules import load_modules
    from fitcore.commands.posterior_comparison import Comparison, read_comparison
    from fitcore.sampling.chain_file import ChainFile
    from fitcore.sampling.diagnostics import diagnose
    from fitcore.sampling.summary import summarise

    load_modules(modules)
    other = Comparison() if against is None else read_comparison(against)
    with ChainFile.open(file) as chain:
        made = summarise(
            chain,
            names=names or None,
            cl=cl,
            kind="equal-tailed" if equal_tailed else "highest-density",
            start=discard,
        )
        diagnostics = diagnose(chain)
        header, notices = chain.header, list(chain.notices)
        if against is not None:
            notices += [f"{against} differs from the chain in {what}" for what in other.differences(header)]
        if other.plane and out is None:
            notices.append(f"{against} is a profile in a plane: give --out to draw it over the posterior")
        found = evidence_of(chain, file) if with_evidence else None
        if out is not None:
            write_figures(chain, out, [row.name for row in made.rows], other, discard)
    output.headline(
        "posterior", str(file), f"{made.steps} steps of {made.walkers} walkers", header.hypothesis
    )
    for notice in notices:
        output.show(f"note: {notice}")
    output.show(diagnostics.verdict, *(f"  - {line}" for line in diagnostics.advice))
    output.show(posterior_tables.summary(made, other.estimates))
    output.show(posterior_tables.diagnostics(diagnostics), posterior_tables.PRIORS)
    content = {**made.to_dict(), "diagnostics": diagnostics.to_dict(), "notices": notices}
    if found is not None:
        output.show(*posterior_tables.evidence(found))
        content["evidence"] = dataclasses.asdict(found)
    output.write_json(content)


def evidence_of(chain: Any, file: Path) -> Evidence:
    """Estimate the evidence of the problem that a chain was sampled from; the same chain gives the same number."""
    from fitcore.sampling.evidence import evidence

    problem = problem_of_chain(file)
    chain.check_problem(problem)
    return evidence(problem, chain, rng=0)


def write_figures(chain: Any, folder: Path, names: list[str], other: Comparison, discard: int) -> None:
    """Draw one parameter at a time, a triangle of pairs, and the plane of a profile into a folder."""
    from fitcore.figures import posterior
    from fitcore.figures.style import save
    from observables.errors import StoreError

    try:
        folder.mkdir(parents=True, exist_ok=True)
        drawing = posterior.densities(chain, names, fit=other.estimates, start=discard)
        save(drawing, folder, "posterior-densities")
        if len(names) > 1:
            save(posterior.triangle(chain, names, start=discard), folder, "posterior-triangle")
        if other.plane:
            x, y = other.plane
            drawing = posterior.plane(chain, x, y, profile=other.contours, start=discard)
            save(drawing, folder, "posterior-plane")
    except OSError as error:
        if isinstance(error, StoreError):
            raise
        message = f"{folder}: cannot be written ({error.strerror}); give --out another folder"
        raise StoreError(message) from error


@command.command("derive")
@file_argument
@click.argument("names", nargs=-1, required=True, metavar="NAME...")
@module_option
@reading_options
def derive_command(file: Path, names: tuple[str, ...], modules: tuple[str, ...], output: Output) -> None:
    """Compute catalogue quantities over a stored chain and keep them beside the samples.

    \b
      weakmix chain derive world.h5 angle_gamma jarlskog
    """
    from fitcore.commands.modules import load_modules
    from fitcore.sampling.derive import derive

    load_modules(modules)
    problem = problem_of_chain(file)
    for name in names:
        problem.unit_of(name)  # an unknown name is an error before anything is written
    computed = derive(file, problem, names)
    for name, steps in computed.items():
        output.show(f"{name}: {steps} steps computed" if steps else f"{name}: was there already")
    output.write_json({"computed": computed})


def problem_of_chain(file: Path) -> Problem:
    """Compile the problem that a chain was sampled from, from the inputs stored in it.

    Raises
    ------
    StoreError
        If the file cannot be used.
    """
    from fitcore.problem import Problem
    from fitcore.sampling.chain_file import ChainFile

    with ChainFile.open(file) as chain:
        header = chain.header
    with tempfile.TemporaryDirectory() as folder:
        inputs = Path(folder) / "inputs.toml"
        inputs.write_text(header.inputs_toml, encoding="utf-8")
        return Problem.load(inputs, hypothesis=header.hypothesis, theory_errors=header.theory_errors)


@command.command("export")
@file_argument
@click.option(
    "--format",
    "format_",
    type=click.Choice(tuple(ENDINGS)),
    help="What to write.  [default: by the ending of --to: .nc, .csv or .npz]",
)
@click.option(
    "--to",
    metavar="FILE",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Name of the new file.  [default: beside the chain]",
)
@click.option(
    "--thin", type=click.IntRange(min=1), default=1, show_default=True, help="Keep every so many-th step."
)
@click.option(
    "--discard", type=click.IntRange(min=0), default=0, show_default=True, help="First steps to leave out."
)
@click.option("--overwrite", is_flag=True, help="Replace an existing file.")
@reading_options
def export_command(
    file: Path, format_: str | None, to: Path | None, thin: int, discard: int, overwrite: bool, output: Output
) -> None:
    """Write a chain for other programs: netCDF (readable by ArviZ), CSV, or a NumPy archive.

    A complex derived quantity becomes two columns, NAME_re and NAME_im; the NumPy archive keeps it complex.

    \b
      weakmix chain export world.h5 --to world.nc
      weakmix chain export world.h5 --format csv --thin 10
    """
    from typing import cast

    from fitcore.sampling.chain_file import ChainFile
    from fitcore.sampling.export import Format, export

    format_ = _export_format(format_, to)
    to = file.with_suffix(ENDINGS[format_]) if to is None else to
    with ChainFile.open(file) as chain:
        export(chain, to, format=cast("Format", format_), thin=thin, start=discard, overwrite=overwrite)
    output.show(f"written to {to}")
    output.write_json({"written": str(to), "format": format_})


def _export_format(format_: str | None, to: Path | None) -> str:
    """Format asked for, or the one that the ending of the new file's name says."""
    by_ending = {ending: name for name, ending in ENDINGS.items()}
    said = None if to is None else by_ending.get(to.suffix.lower())
    if format_ is None and said is None:
        raise click.UsageError(
            "say what to write: --format netcdf, csv or npz, or --to a name in .nc, .csv or .npz"
        )
    if format_ is not None and said is not None and format_ != said:
        raise click.UsageError(
            f"--format {format_} and --to {to} ask for different formats; drop one of them"
        )
    return format_ or str(said)
