"""The examples of the README: its Python runs, its commands are understood."""

from __future__ import annotations

import re
import shlex
from pathlib import Path

import click
import numpy as np
import pytest

from fitcore.commands.main import cli

TEXT = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")
SHELL = "\n".join(re.findall(r"```bash\n(.*?)```", TEXT, re.DOTALL))
COMMANDS = [line for line in SHELL.splitlines() if line.startswith("weakmix ")]


def test_python_example_runs(capsys: pytest.CaptureFixture[str]) -> None:
    (code,) = re.findall(r"```python\n(.*?)```", TEXT, re.DOTALL)
    known: dict[str, object] = {}
    exec(compile(code, "README.md", "exec"), known)
    said = re.search(r"# (\d\S+ \+- \S+ deg)", code)
    assert said is not None
    assert said[1] in capsys.readouterr().out  # the number that the comment promises
    assert np.all(np.isfinite(known["problem"].chi2(known["points"])))  # type: ignore[attr-defined]


@pytest.mark.parametrize("line", COMMANDS)
def test_commands_are_understood(line: str) -> None:
    words = shlex.split(line, comments=True)[1:]
    command = cli.get_command(click.Context(cli), words[0])
    assert command is not None
    command.make_context(words[0], words[1:])


def test_the_change_that_the_readme_makes_is_the_one_it_means() -> None:
    from likelihoods import load_inputs

    (change,) = re.findall(r'--set "([^"]+)"', SHELL)
    (behind,) = re.findall(r'\(`"([^"]+)"`\)', TEXT)
    before = load_inputs("tidewater")
    for setting in (change, behind):
        name = setting.partition(".")[0]
        after = before.with_settings([setting])
        assert 0.1 < after[name].plus / before[name].plus < 10
        assert not any("CAUTION" in notice.text for notice in after.notices)
