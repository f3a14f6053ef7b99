"""rerun: the same numbers again, differences found, edited folders refused."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from click.testing import Result

from fitcore.commands.rerun import compare

Run = Callable[..., Result]


@pytest.fixture
def made(weakmix: Run, template: Path) -> Path:
    """A run with selections and options."""
    options = ("--without", "beta", "--set", "gamma.error=1.5", "--derived", "sine_theta13", "--seed", 3)
    assert weakmix("fit", template, *options, "--no-figures", "--quiet", "--out", "run").exit_code == 0
    template.unlink()  # the folder alone must do
    return Path("run")


def test_the_same_numbers_again(weakmix: Run, made: Path) -> None:
    before = {path.name: path.read_bytes() for path in made.iterdir()}
    done = weakmix("rerun", made, "--json", "rerun.json")
    assert done.exit_code == 0, done.output
    content = json.loads(Path("rerun.json").read_text())
    assert content["same"] is True
    assert content["differences"] == []
    assert content["compared"] > 50
    assert "numbers agree" in done.stdout
    assert {path.name: path.read_bytes() for path in made.iterdir()} == before
    assert not list(Path().glob("*weakmix-runs*"))


def test_a_changed_number_is_found(weakmix: Run, made: Path) -> None:
    path = made / "result.json"
    content = json.loads(path.read_text())
    row = content["parameters"]["wolfenstein_lambda"]
    row["value"] += 1e-5 * row["error"]
    path.write_text(json.dumps(content))
    done = weakmix("rerun", made, "--json", "-")
    assert done.exit_code == 1
    report = json.loads(done.stdout)
    assert [one["where"] for one in report["differences"]] == ["parameters.wolfenstein_lambda.value"]
    assert report["differences"][0]["ratio"] == pytest.approx(10.0, rel=1e-3)
    assert report["result_edited"]
    assert "not reproduced" in done.stderr
    row["value"] -= 0.9999e-5 * row["error"]  # a tenth of the tolerance
    path.write_text(json.dumps(content))
    assert weakmix("rerun", made).exit_code == 0


FUTURE = """
title = "Twice the data"
[future]
"gamma" = { factor = 0.5 }
"""


@pytest.mark.parametrize(
    "arguments",
    [
        ("profile", "template.toml", "wolfenstein_rhobar", "--seed", "4"),
        ("indirect", "template.toml", "angle_gamma"),
        ("budget", "template.toml", "wolfenstein_etabar"),
        ("outlook", "template.toml", "future.toml", "wolfenstein_etabar"),
        ("calibrate", "template.toml", "--toys", "20", "--seed", "4"),
        ("fit", "template.toml", "--theory-errors", "flat", "--without", "element-ub"),
        ("demo",),
    ],
    ids=lambda arguments: arguments[0],
)
def test_every_repeatable_command(weakmix: Run, template: Path, arguments: tuple[str, ...]) -> None:
    Path("future.toml").write_text(FUTURE)
    done = weakmix(*arguments, "--no-figures", "--quiet", "--out", "run")
    assert Path("run").is_dir(), done.output
    template.unlink()
    Path("future.toml").unlink()
    again = weakmix("rerun", "run", "--json", "-")
    assert again.exit_code == 0, again.stderr
    assert json.loads(again.stdout)["compared"] > 5


@pytest.mark.parametrize(
    ("spoil", "words"),
    [
        (lambda run: (run / "inputs.toml").unlink(), "inputs.toml: is missing"),
        (
            lambda run: (run / "inputs.toml").write_text("title = 'x'\n"),
            "inputs.toml: was changed after the run",
        ),
        (lambda run: (run / "result.json").unlink(), "result.json: is missing"),
        (lambda run: (run / "result.json").write_text("{"), "result.json: is not readable JSON"),
        (lambda run: (run / "result.json").write_text("[]"), "result.json: does not hold a result"),
        (lambda run: (run / "run.json").unlink(), "is not a weakmix run folder"),
        (lambda run: (run / "run.json").write_text("{}"), "is not a weakmix run folder"),
        (lambda run: _record(run, command="compute"), "only fit, demo"),
        (lambda run: _record(run, format_version=99), "newer weakmix"),
        (lambda run: _record(run, files=None), "is incomplete"),
        (lambda run: _record(run, command_line=["weakmix"]), "does not name the command"),
        (
            lambda run: _record(run, command_line=["weakmix", "fit", "x", "--wrong"]),
            "options are not understood",
        ),
    ],
)
def test_unusable_folders(weakmix: Run, made: Path, spoil: Callable[[Path], Any], words: str) -> None:
    spoil(made)
    done = weakmix("rerun", made)
    assert done.exit_code == 2
    assert words in done.stderr
    assert "Traceback" not in done.output


def _record(run: Path, **changes: Any) -> None:
    content = json.loads((run / "run.json").read_text())
    (run / "run.json").write_text(json.dumps(content | changes))


def test_no_folder_at_all(weakmix: Run) -> None:
    done = weakmix("rerun", "nowhere")
    assert done.exit_code == 2
    assert "is not a weakmix run folder" in done.stderr


def test_compare_knows_the_scale_of_each_number() -> None:
    def result(**changes: Any) -> dict[str, Any]:
        matrix = [[4.0, 0.2], [0.2, 1.0]]
        plain: dict[str, Any] = {
            "chi2": 12.0,
            "parameters": {"a": {"value": 1.0, "error": 2.0}, "b": {"value": 5.0, "error": None}},
            "measurements": [{"id": "m", "fitted": 3.0, "fitted_error": 0.5, "pull": 0.1}],
            "covariance": {"names": ["a", "b"], "matrix": matrix},
            "provenance": {"created": 1},
        }
        return plain | changes

    def where(**changes: Any) -> list[str]:
        return [one.where for one in compare(result(), result(**changes))[0]]

    assert where() == []
    assert where(provenance={"created": 2}) == []
    assert where(chi2=12.0 + 0.9e-6) == []
    assert where(chi2=12.0 + 1.1e-6) == ["chi2"]
    assert (
        where(parameters={"a": {"value": 1.0 + 1.9e-6, "error": 2.0}, "b": {"value": 5.0, "error": None}})
        == []
    )
    assert where(
        parameters={"a": {"value": 1.0, "error": 2.0}, "b": {"value": 5.0 + 1e-7, "error": None}}
    ) == ["parameters.b.value"]
    assert where(parameters={"a": {"value": 1.0, "error": 2.0}}) == [
        "parameters.b.value",
        "parameters.b.error",
    ]
    swapped = {"names": ["b", "a"], "matrix": [[1.0, 0.2], [0.2, 4.0]]}
    assert where(covariance=swapped) == []
    assert where(covariance={"names": ["a", "b"], "matrix": [[4.0, 0.3], [0.3, 1.0]]}) == ["covariance[a][b]"]
    row = {"id": "m", "fitted": 3.0 + 1e-6, "fitted_error": 0.5, "pull": 0.1}
    assert where(measurements=[row]) == ["measurements[m].fitted"]
