"""The command `weakmix`: a group whose subcommands are imported only when they run.

To add a command, write `fitcore/commands/NAME.py` with a click command called `command`, and add
one line to `COMMANDS`. Nothing heavy may be imported at the top of this module, of `options.py`
or of a command's module: `weakmix --help` reads only this file.
"""

from __future__ import annotations

import importlib
import sys
from typing import Any

import click

from fitcore.commands.errors import ARGUMENTS, report_errors

#: Section of `weakmix --help` -> command -> its one line there.
COMMANDS: dict[str, dict[str, str]] = {
    "Look up": {
        "find": "Search the catalogue of quantities, parameters and constants.",
        "recipe": "Print how a quantity is made: formula, ingredients, parameters, sources.",
        "compute": "Compute quantities at a point, or at the best fit of a run.",
    },
    "Inputs": {
        "show": "List the entries of an inputs file, with ids, groups and sources.",
        "new": "Write a commented inputs file to start from.",
    },
    "Fit": {
        "fit": "Find the best fit, its intervals and its pulls.",
        "profile": "Scan one or two quantities: intervals, regions, each constraint as a band.",
        "sample": "Sample the posterior into a chain file that can be stopped and resumed.",
        "chain": "Look into chain files: verify, summary, derive, export.",
    },
    "Study": {
        "calibrate": "p-values, intervals and coverage by refitted pseudo-experiments.",
        "indirect": "What everything else says about a quantity, and the tension with its measurement.",
        "budget": "Which input makes which part of an uncertainty.",
        "outlook": "Expected intervals when some uncertainties shrink.",
    },
    "Share": {
        "rerun": "Compute a run folder again and compare the numbers.",
        "demo": "Fit the invented Tidewater inputs and compare with their known truth.",
    },
}


class LazyGroup(click.Group):
    """A click group that knows its subcommands by name and imports them on demand."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return [name for section in COMMANDS.values() for name in section]

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in self.list_commands(ctx):
            return None
        module = importlib.import_module(f"fitcore.commands.{cmd_name.replace('-', '_')}")
        command: click.Command = module.command
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        name = args[0] if args else ""
        names = self.list_commands(ctx)
        if name and not name.startswith("-") and name not in names:
            import difflib

            close = difflib.get_close_matches(name, names, n=3, cutoff=0.5)
            hint = f" Did you mean {' or '.join(close)}?" if close else ""
            raise click.UsageError(f"There is no command {name!r}.{hint} See `weakmix --help`.", ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        for title, commands in COMMANDS.items():
            with formatter.section(title):
                formatter.write_dl(list(commands.items()))

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        ctx.meta[ARGUMENTS] = tuple(args)
        return super().parse_args(ctx, args)

    def invoke(self, ctx: click.Context) -> Any:
        with report_errors():
            return super().invoke(ctx)


def _print_version(ctx: click.Context, _parameter: click.Parameter, asked: bool) -> None:
    if asked and not ctx.resilient_parsing:
        from fitcore.commands.output import weakmix_version

        click.echo(f"weakmix {weakmix_version()}")
        ctx.exit()


@click.group(
    cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}
)
@click.option(
    "--version",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=_print_version,
    help="Print the version.",
)
def cli() -> None:
    """Global fits of quark-mixing parameters.

    INPUTS is the name of a bundled set of inputs (averages-2026, world-2026, tidewater, ...) or the path of
    an inputs file. Every command explains itself with --help.

    Exit codes: 0 done; 1 the computation did not converge or a check fell short; 2 unusable input.
    """


def main() -> None:
    """Run the command line and leave with its exit code."""
    try:
        cli.main(prog_name="weakmix")
    except KeyboardInterrupt:  # before a command took over
        sys.exit(130)
