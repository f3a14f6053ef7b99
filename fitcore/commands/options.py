"""Options shared by the commands, and the small objects that commands receive from them.

Decorators, to be put under `@click.command(...)`; each adds its options and passes *one* object:

- `@problem_options`: INPUTS, --only, --without, --set, --hypothesis, --theory-errors, --module
  -> `request: ProblemRequest`
- `@output_options`: --json, --out, --quiet -> `output: Output`
- `@work_options`: --seed, --jobs -> `work: Work`; `@seed_options` is --seed alone
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from fitcore.commands.completion import complete_entries, complete_inputs
from fitcore.commands.output import Output

if TYPE_CHECKING:
    from fitcore.problem import Problem

Command = TypeVar("Command", bound=Callable[..., Any])

THEORY_ERRORS = ("gaussian", "flat", "as-given")


@dataclass(frozen=True)
class ProblemRequest:
    """What the command line asks to be fitted."""

    inputs: str
    only: tuple[str, ...] = ()
    without: tuple[str, ...] = ()
    settings: tuple[str, ...] = ()
    hypothesis: tuple[str, ...] = ()
    theory_errors: str = "as-given"
    modules: tuple[str, ...] = ()
    name: str = ""

    @classmethod
    def of(cls, **options: Any) -> ProblemRequest:
        """Make the request; a run folder as INPUTS stands for its exact inputs and its modules."""
        from fitcore.commands.run_folder import read_record

        place = Path(options["inputs"])
        folder = place.parent if place.name == "inputs.toml" else place
        record = read_record(folder) if place.name else None
        if record is not None:
            from fitcore.commands.errors import input_error
            from fitcore.commands.modules import modules_of_run

            if not (folder / "inputs.toml").is_file():
                raise input_error(
                    f"{folder}: is a run folder without inputs.toml; give inputs or another run"
                )
            options["inputs"] = str(folder / "inputs.toml")
            options["name"] = str(record.get("inputs", {}).get("name", ""))
            options["modules"] = (*options["modules"], *modules_of_run(folder, options["modules"]))
        return cls(**options)

    def load(self) -> Problem:
        """Read the user's modules and the inputs, and compile the problem.

        Raises
        ------
        InputError, UnknownNameError
            As `Problem.load` and `load_modules` do.
        """
        from dataclasses import replace

        from fitcore.commands.modules import check_hypotheses, load_modules
        from fitcore.problem import Problem
        from likelihoods import load_inputs

        refuse_chain(self.inputs)
        load_modules(self.modules)
        check_hypotheses(self.hypothesis)
        inputs = load_inputs(self.inputs, only=self.only, without=self.without, settings=self.settings)
        if self.name:
            inputs = replace(inputs, name=self.name)
        return Problem(inputs, "+".join(self.hypothesis) or "standard", theory_errors=self.theory_errors)

    def describe(self) -> dict[str, Any]:
        """Return the request as plain data, for the record of a run."""
        return {
            "inputs": self.inputs,
            "only": list(self.only),
            "without": list(self.without),
            "set": list(self.settings),
            "hypothesis": list(self.hypothesis),
            "theory_errors": self.theory_errors,
            "modules": list(self.modules),
        }


def refuse_chain(source: str) -> None:
    """Say what to do with a chain file where inputs or a run are wanted.

    Raises
    ------
    InputError
        If `source` is an HDF5 file.
    """
    try:
        if not Path(source).is_file():  # a pipe would wait for ever
            return
        with Path(source).open("rb") as stream:
            found = stream.read(8)
    except (OSError, ValueError):  # told better by whoever reads the inputs
        return
    if found == b"\x89HDF\r\n\x1a\n":
        from fitcore.commands.errors import input_error

        raise input_error(
            f"{source}: is a chain file, not inputs or a run folder; `weakmix chain derive {source} NAME...` computes "
            "quantities at its points, `weakmix chain summary` tabulates it"
        )


@dataclass(frozen=True)
class Work:
    """How the work is done: seed of the random numbers and number of processes."""

    seed: int = 0
    jobs: int = 1


def _gathered(name: str, build: Callable[..., Any], keys: tuple[str, ...]) -> Callable[[Command], Command]:
    """Replace the keyword arguments `keys` of a command by one object called `name`."""

    def decorate(function: Command) -> Command:
        @functools.wraps(function)
        def wrapped(*args: Any, **kwargs: Any) -> Any:
            gathered = build(**{key: kwargs.pop(key) for key in keys})
            return function(*args, **{name: gathered}, **kwargs)

        return wrapped  # type: ignore[return-value]

    return decorate


def _chain(function: Command, decorators: list[Callable[[Any], Any]]) -> Command:
    for decorator in reversed(decorators):
        function = decorator(function)
    return function


def _split_hypotheses(
    _ctx: click.Context, _parameter: click.Parameter, value: tuple[str, ...]
) -> tuple[str, ...]:
    return tuple(part.strip() for item in value for part in item.split("+") if part.strip())


hypothesis_option = click.option(
    "--hypothesis",
    multiple=True,
    metavar="NAME",
    callback=_split_hypotheses,
    help="New-physics hypothesis; repeat it or join names by + to combine.  [default: standard]",
)


module_option = click.option(
    "--module",
    "modules",
    multiple=True,
    metavar="FILE.py",
    type=click.Path(),
    help="Python file that declares quantities or hypotheses of your own; repeatable.",
)


def problem_options(function: Command) -> Command:
    """Add INPUTS and the options that choose and change its entries; passes `request`."""
    keys = ("inputs", "only", "without", "settings", "hypothesis", "theory_errors", "modules")
    return _chain(
        _gathered("request", ProblemRequest.of, keys)(function),
        [
            click.argument("inputs", metavar="INPUTS", shell_complete=complete_inputs),
            click.option(
                "--only",
                multiple=True,
                metavar="ID-OR-GROUP",
                shell_complete=complete_entries,
                help="Keep only these entries, or those of a kind (theory, experiment); repeatable.",
            ),
            click.option(
                "--without",
                multiple=True,
                metavar="ID-OR-GROUP",
                shell_complete=complete_entries,
                help="Leave these entries out, or those of a kind; repeatable.",
            ),
            click.option(
                "--set",
                "settings",
                multiple=True,
                metavar="ID.KEY=NUMBER",
                help="Change an entry for this run, e.g. gamma-average.error=2, 'gamma-average.error=[2, 3]' or "
                "'V-ub.error=1e-4 1': in the unit of its file, or the one written behind; repeatable.",
            ),
            hypothesis_option,
            click.option(
                "--theory-errors",
                type=click.Choice(THEORY_ERRORS),
                default="as-given",
                show_default=True,
                help="Treat theory errors as Gaussian, as flat ranges, or as the file says.",
            ),
            module_option,
        ],
    )


json_option = click.option(
    "--json", "json", metavar="FILE", help="Write the result as JSON; - is stdout, tables then go to stderr."
)
quiet_option = click.option("--quiet", "-q", is_flag=True, help="Print no tables.")
out_option = click.option(
    "--out",
    metavar="DIR",
    type=click.Path(path_type=Path, file_okay=True, dir_okay=True),
    help="Run folder to write (an earlier run folder there is replaced).",
)


def output_options(function: Command) -> Command:
    """Add --json, --out and --quiet; passes `output`."""
    return _chain(
        _gathered("output", Output, ("json", "out", "quiet"))(function),
        [json_option, out_option, quiet_option],
    )


def reading_options(function: Command) -> Command:
    """Add --json and --quiet for commands that only look things up; passes `output`."""
    return _chain(_gathered("output", Output, ("json", "quiet"))(function), [json_option, quiet_option])


seed_option = click.option(
    "--seed",
    type=click.IntRange(min=0),
    default=0,
    show_default=True,
    help="Seed of all random numbers.",
)
jobs_option = click.option(
    "--jobs", type=click.IntRange(min=1), default=1, show_default=True, help="Number of processes."
)


def seed_options(function: Command) -> Command:
    """Add --seed, for commands whose work runs in one process; passes `work`."""
    return _chain(_gathered("work", Work, ("seed",))(function), [seed_option])


def work_options(function: Command) -> Command:
    """Add --seed and --jobs; passes `work`."""
    return _chain(_gathered("work", Work, ("seed", "jobs"))(function), [seed_option, jobs_option])
