"""The group: help, lazy loading, exit codes and streams."""

from __future__ import annotations

import importlib
import os
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import click
import pytest
from click.testing import CliRunner, Result

from fitcore.commands.main import COMMANDS, LazyGroup, cli
from observables.errors import CatalogueError, ConvergenceError, InputError, StoreError, UnknownNameError

HEAVY = (
    "numpy",
    "scipy",
    "matplotlib",
    "rich",
    "iminuit",
    "emcee",
    "h5py",
    "pint",
    "msgspec",
    "jinja2",
    "observables",
)
START = "import sys; from fitcore.commands.main import main; "


def process(code: str, *arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[3])}
    return subprocess.run(
        [sys.executable, "-c", code, *arguments],
        capture_output=True,
        text=True,
        timeout=60,
        cwd=cwd,
        env=environment,
        check=False,
    )


@pytest.mark.parametrize(
    "arguments", [["--help"], ["--version"], ["fit", "--help"], ["compute", "--help"], ["new", "--help"]]
)
def test_help_imports_nothing_heavy(arguments: list[str]) -> None:
    code = (
        START + "\ntry:\n    main()\nfinally:\n"
        f"    print('HEAVY', [name for name in {HEAVY!r} if name in sys.modules], file=sys.stderr)"
    )
    done = process(code, *arguments)
    assert done.returncode == 0, done.stderr
    assert done.stderr.strip() == "HEAVY []"


def test_help_lists_every_command_under_its_section(weakmix: Callable[..., Result]) -> None:
    shown = weakmix("--help").output
    for section, commands in COMMANDS.items():
        assert f"{section}:" in shown
        for name in commands:
            assert f"\n  {name} " in shown


@pytest.mark.parametrize("name", [name for commands in COMMANDS.values() for name in commands])
def test_every_command_loads_and_explains_itself(name: str) -> None:
    command = importlib.import_module(f"fitcore.commands.{name.replace('-', '_')}").command
    assert isinstance(command, click.Command)
    assert command.name == name
    assert command.help
    shown = CliRunner().invoke(cli, [name, "--help"])
    assert shown.exit_code == 0
    for parameter in command.params:
        if isinstance(parameter, click.Option):
            assert parameter.help, f"{name} {parameter.opts}"


@pytest.mark.parametrize(
    "arguments",
    [["nonsense"], ["fitt"], ["fit"], ["fit", "x", "--nonsense"], ["fit", "x", "--theory-errors", "big"]],
)
def test_wrong_use_exits_2_on_stderr(weakmix: Callable[..., Result], arguments: list[str]) -> None:
    done = weakmix(*arguments)
    assert done.exit_code == 2
    assert done.stdout == ""
    assert done.stderr.startswith("Usage:")


def test_a_mistyped_command_gets_a_proposal(weakmix: Callable[..., Result]) -> None:
    assert "Did you mean fit" in weakmix("fitt", "tidewater").stderr


@pytest.mark.parametrize(
    ("error", "code", "words"),
    [
        (
            InputError("file.toml:3: [measurement 1] no unit; add one"),
            2,
            "weakmix: unusable input: file.toml:3",
        ),
        (InputError(["one", "two"]), 2, "weakmix: unusable input:\none\ntwo"),
        (UnknownNameError("foo", "quantity", ["food"]), 2, "unknown quantity 'foo'; did you mean food?"),
        (CatalogueError("two owners"), 2, "two owners"),
        (StoreError("run: cannot be written"), 2, "cannot read or write: run: cannot be written"),
        (ConvergenceError("flat direction"), 1, "did not converge: flat direction"),
        (KeyboardInterrupt(), 130, "interrupted"),
    ],
)
def test_errors_become_messages_and_exit_codes(error: BaseException, code: int, words: str) -> None:
    @click.command("raise")
    def raising() -> None:
        raise error

    class Group(LazyGroup):
        def list_commands(self, ctx: click.Context) -> list[str]:
            return ["raise"]

        def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command:
            return raising

    done = CliRunner().invoke(Group("weakmix"), ["raise"])
    assert done.exit_code == code
    assert words in done.stderr
    assert done.stdout == ""
    assert "Traceback" not in done.stderr


def test_a_fault_of_the_program_is_not_hidden() -> None:
    code = START + "import fitcore.commands.find as f; f.search = lambda *a: 1 / 0; main()"
    done = process(code, "find", "beta")
    assert done.returncode == 1
    assert "ZeroDivisionError" in done.stderr


@pytest.mark.skipif(os.name != "posix", reason="sends a signal")
def test_interrupt_exits_130_and_leaves_nothing(tmp_path: Path) -> None:
    code = (
        START + "import os, signal; from fitcore import problem\n"
        f"problem.Problem.fit = lambda *a, **k: os.kill(os.getpid(), {int(signal.SIGINT)})\n"
        "main()"
    )
    done = process(code, "fit", "tidewater", cwd=tmp_path)
    assert done.returncode == 130, done.stderr
    assert "Traceback" not in done.stderr
    assert list(tmp_path.iterdir()) == []


def test_streams_of_a_process(tmp_path: Path) -> None:
    good = process(START + "main()", "find", "jarlskog", "--json", "-", cwd=tmp_path)
    assert good.returncode == 0
    assert good.stdout.startswith("{")
    assert good.stderr.startswith("weakmix ")
    bad = process(START + "main()", "show", "no-such-file.toml", cwd=tmp_path)
    assert (bad.returncode, bad.stdout) == (2, "")
    assert "no-such-file.toml" in bad.stderr
    assert "Traceback" not in bad.stderr


def complete(words: str) -> list[str]:
    """What bash is offered for the last of some words."""
    parts = words.split(" ")
    environment = {
        **os.environ,
        "_WEAKMIX_COMPLETE": "bash_complete",
        "COMP_WORDS": words,
        "COMP_CWORD": str(len(parts) - 1),
    }
    code = "from fitcore.commands.main import main; main()"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment)
    assert done.stderr == ""
    return [line.partition(",")[2] for line in done.stdout.splitlines()]


@pytest.mark.parametrize(
    ("words", "offered"),
    [
        ("weakmix fi", ["find", "fit"]),
        ("weakmix fit aver", ["averages-2026", "averages-2026-tree", "aver"]),
        ("weakmix fit averages-2026 --theory", ["--theory-errors"]),
        ("weakmix fit averages-2026-tree --without V-u", ["V-ud", "V-us", "V-ub"]),
        ("weakmix show averages-2026-tree --only tre", ["tree", "tree-phase"]),
        ("weakmix show averages-2026 --only the", ["theory"]),
        ("weakmix show no-such-file.toml --only t", [""]),
        ("weakmix recipe mixing_frequency_B", ["mixing_frequency_Bd", "mixing_frequency_Bs"]),
    ],
)
def test_shell_completion(words: str, offered: list[str]) -> None:
    assert complete(words) == offered


def test_shell_completion_script() -> None:
    environment = {**os.environ, "_WEAKMIX_COMPLETE": "bash_source"}
    code = "from fitcore.commands.main import main; main()"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment)
    if done.returncode:  # click needs bash 4.4 to write it
        assert "bash" in done.stderr.lower()
    else:
        assert "_WEAKMIX_COMPLETE=bash_complete" in done.stdout
