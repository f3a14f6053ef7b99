"""--module: a user's own quantities and hypotheses on the command line."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from click.testing import Result

from fitcore.commands.run_folder import read_record
from observables import catalogue

Run = Callable[..., Result]

OWN = """
from observables import Complex, Real, catalogue, quantity

@quantity(unit="1", title="Ratio of our own", source="invented")
def own_ratio(magnitude_V_ub, magnitude_V_cb) -> Real:
    return magnitude_V_ub / magnitude_V_cb

own_twist = catalogue.hypothesis("own-twist", title="A shift of our own", source="invented")
own_twist.parameter("own_shift", unit="1", start=0.0, scale=0.1, title="our shift")

@own_twist.replaces("own_ratio")
def own_ratio_shifted(standard, own_shift) -> Real:
    return standard * (1 + own_shift)
"""

INPUTS = """
title = "Ours"
include = ["{template}"]

[[measurement]]
id = "ours"
quantity = "own_ratio"
value = 9.1
error = 0.3
unit = "%"
source = "invented"
"""


@pytest.fixture(autouse=True)
def catalogue_put_back() -> Iterator[None]:
    """Forget what a test declared."""
    nodes, hypotheses = dict(catalogue._nodes), dict(catalogue._hypotheses)
    yield
    catalogue._nodes, catalogue._hypotheses = nodes, hypotheses
    for name in [name for name in sys.modules if name.startswith("weakmix_module_")]:
        del sys.modules[name]


@pytest.fixture
def module(tmp_path: Path) -> Path:
    path = tmp_path / "my_quantities.py"
    path.write_text(OWN)
    return path


def test_own_quantity_is_found_explained_computed_and_fitted(
    weakmix: Run, module: Path, template: Path
) -> None:
    assert weakmix("find", "own_ratio").exit_code == 2
    assert "own_ratio" in weakmix("find", "own_ratio", "--module", module).stdout
    assert (
        "return magnitude_V_ub / magnitude_V_cb" in weakmix("recipe", "own_ratio", "--module", module).stdout
    )
    done = weakmix(
        *("compute", "own_ratio", "magnitude_V_ub", "magnitude_V_cb", "--module", module),
        *("--start-values", "--json", "-"),
    )
    values = json.loads(done.stdout)["values"]
    assert values["own_ratio"] == pytest.approx(values["magnitude_V_ub"] / values["magnitude_V_cb"])

    own = Path("own.toml")
    own.write_text(INPUTS.format(template=template.name))
    done = weakmix("fit", own, "--module", module, "--out", "run", "--no-figures")
    assert done.exit_code == 0, done.output
    record = read_record(Path("run"))
    assert record is not None
    assert record["options"]["modules"] == [str(module)]
    assert Path("run/my_quantities.py").read_text() == OWN
    assert "my_quantities.py" in record["files"]
    rows = json.loads(Path("run/result.json").read_text())["measurements"]
    assert any(row["id"] == "ours" and row["measured"] == pytest.approx(0.091) for row in rows)
    shown = weakmix("show", own, "--module", module)
    assert shown.exit_code == 0


def test_run_folder_carries_its_module(weakmix: Run, module: Path, template: Path) -> None:
    own = Path("own.toml")
    own.write_text(INPUTS.format(template=template.name))
    assert weakmix("fit", own, "--module", module, "--out", "run", "--no-figures", "-q").exit_code == 0
    module.unlink()
    command = [sys.executable, "-m", "fitcore.commands.main"]
    code = "from fitcore.commands.main import main; main()"
    command = [sys.executable, "-c", code, "rerun", "run"]
    done = subprocess.run(command, capture_output=True, text=True, env=os.environ)
    assert done.returncode == 0, done.stderr
    Path("run/my_quantities.py").write_text(OWN.replace("1 + own", "2 + own"))
    done = subprocess.run(command, capture_output=True, text=True, env=os.environ)
    assert done.returncode == 2
    assert "my_quantities.py: was changed after the run" in done.stderr


def test_own_hypothesis(weakmix: Run, module: Path) -> None:
    options = ("--module", module, "--start-values", "--hypothesis", "own-twist", "--json", "-")
    plain = json.loads(weakmix("compute", "own_ratio", *options).stdout)["values"]["own_ratio"]
    done = weakmix("compute", "own_ratio", *options, "--at", "own_shift=0.5")
    assert json.loads(done.stdout)["values"]["own_ratio"] == pytest.approx(1.5 * plain)


def test_unknown_hypothesis_says_what_there_is_and_how_to_add_one(
    weakmix: Run, module: Path, template: Path
) -> None:
    for command in (("fit", template), ("recipe", "jarlskog"), ("compute", "jarlskog", "--start-values")):
        done = weakmix(*command, "--hypothesis", "mistyped")
        assert done.exit_code == 2
        assert "unknown hypothesis 'mistyped': none is registered" in done.stderr
        assert "--module FILE.py" in done.stderr
    done = weakmix("recipe", "jarlskog", "--module", module, "--hypothesis", "own-twits")
    assert "the registered ones are own-twist" in done.stderr


def test_a_run_stands_for_its_inputs_and_brings_its_module(
    weakmix: Run, module: Path, template: Path
) -> None:
    own = Path("own.toml")
    own.write_text(INPUTS.format(template=template.name))
    options = ("--no-figures", "-q", "--without", "gamma")
    assert weakmix("fit", own, "--module", module, "--out", "run", *options).exit_code == 0
    module.unlink()

    def fresh(*arguments: str) -> subprocess.CompletedProcess[str]:
        code = "from fitcore.commands.main import main; main()"
        return subprocess.run([sys.executable, "-c", code, *arguments], capture_output=True, text=True)

    done = fresh("compute", "own_ratio", "--from", "run", "--json", "-")
    assert done.returncode == 0, done.stderr
    assert json.loads(done.stdout)["errors"]["own_ratio"] > 0
    done = fresh("fit", "run", "--out", "again", "--no-figures")
    assert done.returncode == 0, done.stderr
    assert "quark mixing fit - own" in done.stdout.splitlines()[0]
    first, second = (json.loads(Path(name, "result.json").read_text()) for name in ("run", "again"))
    assert second["chi2"] == pytest.approx(first["chi2"], rel=1e-9)
    assert [row["id"] for row in second["measurements"]] == [row["id"] for row in first["measurements"]]
    done = fresh("rerun", "again")
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("x = 1\ny = (\n", "my_quantities.py:2: the module cannot be imported: SyntaxError"),
        (
            "import no_such_module_anywhere\n",
            "my_quantities.py:1: the module cannot be imported: ModuleNotFoundError",
        ),
        ("x = 1\n\ny = 1 / 0\n", "my_quantities.py:3: the module cannot be imported: ZeroDivisionError"),
        ("raise SystemExit(0)\n", "my_quantities.py:1: the module cannot be imported: SystemExit"),
        (OWN.replace("own_ratio(", "jarlskog("), "two owners of the name 'jarlskog'"),
        (OWN.replace(" -> Real", "", 1), "must say '-> Real' or '-> Complex'"),
        (
            OWN.replace("magnitude_V_ub, magnitude_V_cb", "magnitude_V_ub, magnitude_V_xx"),
            "'magnitude_V_xx', which nobody",
        ),
    ],
)
def test_faults_of_a_module(weakmix: Run, module: Path, template: Path, text: str, words: str) -> None:
    module.write_text(text)
    done = weakmix("fit", template, "--module", module)
    assert done.exit_code == 2
    assert words in done.stderr
    assert "Traceback" not in done.output
    assert not Path("weakmix-runs").exists()


def test_modules_that_are_no_modules(weakmix: Run, module: Path, tmp_path: Path) -> None:
    missing = weakmix("find", "x", "--module", "nowhere.py")
    assert missing.exit_code == 2
    assert "nowhere.py: cannot be read" in missing.stderr
    (tmp_path / "text.txt").write_text("")
    other = weakmix("find", "x", "--module", "text.txt")
    assert other.exit_code == 2
    assert "must end in .py" in other.stderr
    (tmp_path / "twin").mkdir()
    twin = tmp_path / "twin" / module.name
    twin.write_text("")
    both = weakmix("find", "x", "--module", module, "--module", twin)
    assert both.exit_code == 2
    assert "rename one of the two" in both.stderr
