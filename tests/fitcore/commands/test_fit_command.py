"""fit, demo and compute --from, from the command line to the files."""

from __future__ import annotations

import csv
import hashlib
import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import Result

from fitcore import FitResult, Problem
from fitcore.commands.demo import against_truth
from fitcore.commands.run_folder import read_record
from fitcore.result import Estimate

Run = Callable[..., Result]


def test_template_fits_and_writes_a_run_folder(weakmix: Run, template: Path, tmp_path: Path) -> None:
    done = weakmix("fit", template, "--derived", "sine_theta13", "--seed", 5)
    assert done.exit_code == 0, done.output
    first = done.stdout.splitlines()[0]
    assert first.startswith("weakmix ")
    assert "quark mixing fit - template revision 1" in first
    assert "Converged." in done.stdout
    assert "Wilks" in done.stdout
    (place,) = (tmp_path / "weakmix-runs").iterdir()
    assert place.name.startswith("fit-template-")
    assert f"Written to weakmix-runs/{place.name}" in done.stdout.replace("\n", "")
    record = read_record(place)
    assert record is not None
    assert record["seed"] == 5
    assert record["options"]["derived"] == ["sine_theta13"]
    names = {path.name for path in place.iterdir()}
    figures = {
        f"{name}.{end}"
        for name in ("measured-against-fitted", "correlation")
        for end in ("pdf", "png", "csv")
    }
    assert names == {"result.json", "inputs.toml", "run.json", "log.jsonl", *figures}
    for name, digest in record["files"].items():
        assert hashlib.sha256((place / name).read_bytes()).hexdigest() == digest
    result = FitResult.from_json((place / "result.json").read_text())
    assert result.valid
    assert "sine_theta13" in result.derived
    assert "jarlskog" in result.derived
    again = Problem.load(place / "inputs.toml").fit()
    assert again.chi2 == pytest.approx(result.chi2, abs=1e-9)


def test_json_on_stdout_is_alone_and_writes_no_folder(weakmix: Run, template: Path, tmp_path: Path) -> None:
    done = weakmix("fit", template, "--json", "-")
    content = json.loads(done.stdout)
    assert set(content) >= {
        *(
            "chi2",
            "degrees_of_freedom",
            "p_value",
            "converged",
            "hypothesis",
            "inputs",
            "parameters",
            "derived",
        ),
        *("measurements", "correlation", "other_minima"),
    }
    assert content["converged"] is True
    assert content["degrees_of_freedom"] == 1
    assert "quark mixing" in done.stderr
    assert not (tmp_path / "weakmix-runs").exists()
    quiet = weakmix("fit", template, "--json", "-", "--quiet")
    assert quiet.stderr == ""
    assert json.loads(quiet.stdout)["chi2"] == content["chi2"]


def test_out_names_the_folder_and_json_the_file(weakmix: Run, template: Path, tmp_path: Path) -> None:
    done = weakmix("fit", template, "--out", "mine", "--json", "mine.json", "--no-figures", "--quiet")
    assert (done.exit_code, done.stdout, done.stderr) == (0, "", "")
    assert json.loads((tmp_path / "mine.json").read_text()) == json.loads(
        (tmp_path / "mine" / "result.json").read_text()
    )
    assert not list((tmp_path / "mine").glob("*.png"))
    assert weakmix("fit", template, "--out", "mine", "--no-figures", "--json", "-").exit_code == 0  # replaced
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "file").write_text("x")
    refused = weakmix("fit", template, "--out", "other")
    assert refused.exit_code == 2
    assert "other" in refused.stderr
    for place, words in (("no/such/place.json", "no/such does not exist"), ("mine", "is a folder")):
        refused = weakmix("fit", template, "--json", place, "--out", "another")
        assert refused.exit_code == 2
        assert words in refused.stderr
        assert not (tmp_path / "another").exists()  # found out before the fit


def test_selections_change_the_fit(weakmix: Run, template: Path) -> None:
    def chi2(*options: str) -> tuple[float, int]:
        content = json.loads(weakmix("fit", template, *options, "--json", "-").stdout)
        return content["chi2"], content["degrees_of_freedom"]

    assert chi2("--without", "beta") == (pytest.approx(0.0, abs=1e-6), 0)
    tighter, _ = chi2("--set", "gamma.error=1.0")
    assert tighter > chi2()[0]


def test_a_fit_that_is_not_valid_exits_1_and_says_why(
    weakmix: Run, template: Path, tmp_path: Path, result: FitResult, monkeypatch: pytest.MonkeyPatch
) -> None:
    broken = replace(
        result, valid=False, message="the two minimisers disagree", flags=("minimisers-disagree",)
    )
    monkeypatch.setattr(Problem, "fit", lambda *_arguments, **_options: broken)
    done = weakmix("fit", template, "--json", "-")
    assert done.exit_code == 1
    assert json.loads(done.stdout)["converged"] is False
    assert "the fit did not converge: the two minimisers disagree" in done.stderr
    done = weakmix("fit", template, "--out", "run")
    assert done.exit_code == 1
    assert "NOT CONVERGED: the two minimisers disagree" in done.stdout
    assert json.loads((tmp_path / "run" / "result.json").read_text())["converged"] is False


@pytest.mark.parametrize(
    ("name", "words"),
    [("jarlskgo", "jarlskog"), ("V_ub", "complex"), ("mixing_frequency_Bd", "mixing_matrix_element_Bs")],
)
def test_derived_quantities_that_cannot_be(
    weakmix: Run, template: Path, tmp_path: Path, name: str, words: str
) -> None:
    done = weakmix("fit", template, "--derived", name)
    assert done.exit_code == 2
    assert words in done.stderr
    assert not (tmp_path / "weakmix-runs").exists()


def test_compute_from_run_and_from_inputs(weakmix: Run, template: Path) -> None:
    assert weakmix("fit", template, "--out", "run", "--no-figures", "--quiet").exit_code == 0
    fit = json.loads(Path("run/result.json").read_text())
    names = ["angle_alpha", "jarlskog", "wolfenstein_A", "V_ub"]
    from_run = json.loads(weakmix("compute", *names, "--from", "run", "--json", "-").stdout)
    from_inputs = json.loads(weakmix("compute", *names, "--from", template, "--json", "-").stdout)
    for name in ("angle_alpha", "jarlskog"):
        assert from_run["values"][name] == pytest.approx(fit["derived"][name]["value"], rel=1e-9)
        assert from_inputs["values"][name] == pytest.approx(from_run["values"][name], rel=1e-6)
    assert set(from_run["errors"]) == {"angle_alpha", "jarlskog", "wolfenstein_A"}
    low, high = from_run["intervals_68"]["jarlskog"]
    assert high - low == pytest.approx(2 * from_run["errors"]["jarlskog"])
    assert "68.27 % interval" in weakmix("compute", "jarlskog", "--from", "run").stdout
    # the errors equal those of the exact derivatives with the stored covariance
    problem = Problem.load(str(template))
    stored = FitResult.from_json(Path("run/result.json").read_text())
    point = np.array([stored.parameters[name].value for name in problem.parameter_names])
    _, gradient = problem.linearise_quantities(point, ("angle_alpha", "jarlskog", "wolfenstein_A"))
    covariance = np.array(stored.covariance_matrix)
    exact = np.sqrt(np.einsum("qi,ij,qj->q", gradient, covariance, gradient))
    assert [from_run["errors"][n] for n in ("angle_alpha", "jarlskog", "wolfenstein_A")] == pytest.approx(
        exact, rel=1e-5
    )


def test_compute_from_run_moved_by_hand_has_no_intervals(weakmix: Run, template: Path) -> None:
    weakmix("fit", template, "--out", "run", "--no-figures", "--quiet")
    done = weakmix("compute", "jarlskog", "--from", "run", "--at", "wolfenstein_A=0.8", "--json", "-")
    assert "errors" not in json.loads(done.stdout)
    assert "No intervals: --at moved wolfenstein_A" in done.stderr


def test_compute_takes_the_hypothesis_of_the_run(weakmix: Run, template: Path) -> None:
    weakmix("fit", template, "--out", "run", "--no-figures", "--quiet")
    path = Path("run/result.json")
    path.write_text(path.read_text().replace('"hypothesis": "standard"', '"hypothesis": "of-the-run"'))
    assert "'of-the-run'" in weakmix("compute", "jarlskog", "--from", "run").stderr
    assert weakmix("compute", "jarlskog", "--from", "run", "--hypothesis", "standard").exit_code == 0


def test_a_chain_file_is_named_as_one(weakmix: Run, tmp_path: Path) -> None:
    (tmp_path / "chain.h5").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(64))
    for arguments in (
        ("compute", "jarlskog", "--from", "chain.h5"),
        ("fit", "chain.h5"),
        ("show", "chain.h5"),
    ):
        done = weakmix(*arguments)
        assert done.exit_code == 2
        assert "is a chain file" in done.stderr
        assert "weakmix chain derive chain.h5" in done.stderr


def test_flat_theory_errors_from_fit_to_compute(weakmix: Run, tmp_path: Path) -> None:
    done = weakmix("fit", "averages-2026", "--theory-errors", "flat", "--out", "run")
    assert done.exit_code == 0, done.output
    assert "range [0.7442, 0.7624]" in done.stdout  # bag_K: 0.7533(91)
    assert "(unconstrained)" not in done.stdout
    assert "flat theory errors are ranges" in " ".join(done.stdout.split())
    rows = json.loads((tmp_path / "run" / "result.json").read_text())
    assert rows["parameters"]["bag_K"]["method"] == "range"
    assert (tmp_path / "run" / "measured-against-fitted.csv").exists()
    assert not (tmp_path / "run" / "correlation.csv").exists()  # nothing is left to correlate
    done = weakmix("compute", "jarlskog", "--from", "run")
    assert done.exit_code == 0, done.output
    assert "No intervals: the fit has no covariance matrix" in done.stdout


def test_result_and_figure_data_carry_sources(weakmix: Run, template: Path, tmp_path: Path) -> None:
    assert weakmix("fit", template, "--out", "run", "-q").exit_code == 0
    rows = json.loads((tmp_path / "run" / "result.json").read_text())["measurements"]
    assert {row["source"] for row in rows} == {"invented"}
    table = list(csv.DictReader((tmp_path / "run" / "measured-against-fitted.csv").read_text().splitlines()))
    assert {row["source"] for row in table} == {"invented"}


def test_one_entry_is_not_entries(weakmix: Run, template: Path) -> None:
    shown = weakmix("show", template, "--only", "gamma").stdout
    assert " 1 entry, " in shown
    assert "1 entries" not in shown


def test_compute_from_something_else(weakmix: Run, tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    done = weakmix("compute", "jarlskog", "--from", "empty")
    assert done.exit_code == 2
    assert "takes a run folder" in done.stderr
    for text in ("{", "[]", "{}"):
        (tmp_path / "empty" / "result.json").write_text(text)
        done = weakmix("compute", "jarlskog", "--from", "empty")
        assert done.exit_code == 2
        assert "result.json" in done.stderr
    assert weakmix("compute", "jarlskog", "--from", "nothing-of-that-name").exit_code == 2


def test_compute_writes_a_run_folder_when_asked(weakmix: Run) -> None:
    done = weakmix("compute", "jarlskog", "--start-values", "--out", "run")
    assert done.exit_code == 0
    record = read_record(Path("run"))
    assert record is not None
    assert record["command"] == "compute"
    assert json.loads(Path("run/result.json").read_text())["units"] == {"jarlskog": "1"}


def test_demo_holds_every_interval_against_the_truth(weakmix: Run, tmp_path: Path) -> None:
    done = weakmix("demo", "--json", "demo.json")
    assert done.exit_code == 0, done.output
    assert "Where the truth lies" in done.stdout
    assert "intervals at 68.27 % hold the truth" in done.stdout.replace("\n", " ")
    content = json.loads((tmp_path / "demo.json").read_text())
    assert content["truth"]["wolfenstein_lambda"]["truth"] == 0.2310
    for name, row in content["truth"].items():
        estimate = content["parameters"].get(name) or content["derived"][name]
        low, high = estimate["interval_68"]
        assert row["in_68"] == (low <= row["truth"] <= high)
        assert row["in_95"] or not row["in_68"]
    (place,) = (tmp_path / "weakmix-runs").iterdir()
    assert (place / "measured-against-fitted.png").stat().st_size > 20_000


def test_truth_is_compared_on_the_side_where_it_lies(result: FitResult) -> None:
    one: dict[str, Any] = {"x": Estimate(1.0, 0.15, (0.9, 1.2), (0.8, 1.4), "profile")}
    rows = against_truth(replace(result, parameters=one, derived={}), {"x": 1.3, "absent": 2.0})
    assert rows["x"]["distance"] == pytest.approx(1.5)
    assert (rows["x"]["in_68"], rows["x"]["in_95"]) == (False, True)
    assert set(rows) == {"x"}
    rows = against_truth(replace(result, parameters=one, derived={}), {"x": 0.95})
    assert rows["x"]["distance"] == pytest.approx(-0.5)


def test_seed_reaches_the_fit_and_jobs_is_offered_only_where_it_works(
    weakmix: Run, template: Path, result: FitResult, monkeypatch: pytest.MonkeyPatch
) -> None:
    seen: list[Any] = []

    def fit(*_arguments: Any, **options: Any) -> FitResult:
        seen.append(options["rng"])
        return result

    monkeypatch.setattr(Problem, "fit", fit)
    assert weakmix("fit", template, "--seed", 7, "--json", "-").exit_code == 0
    assert weakmix("fit", template, "--seed", 8, "--out", "run", "--no-figures").exit_code == 0
    assert seen == [7, 8]
    for command in ("fit", "demo"):
        assert "--jobs" not in weakmix(command, "--help").stdout
    assert "--jobs" in weakmix("calibrate", "--help").stdout


def test_the_verdict_comes_first(weakmix: Run) -> None:
    lines = weakmix("fit", "averages-2026", "--no-figures").stdout.splitlines()
    assert "quark mixing fit" in lines[0]
    assert lines[1].startswith("Converged. chi-square")
    assert lines[2].split()[0] == "recalled"


def test_intervals_by_profile_where_asked(weakmix):
    told = weakmix("fit", "averages-2026-tree", "--derived", "angle_beta", "--json", "-")
    content = json.loads(told.stdout)
    assert content["derived"]["angle_beta"]["method"] == "profile"
    assert content["derived"]["jarlskog"]["method"] == "linear"
    every = json.loads(weakmix("fit", "averages-2026-tree", "--profile-intervals", "--json", "-").stdout)
    assert {one["method"] for one in every["derived"].values()} == {"profile"}
    # the parabola of |V_ub| is a good one: its own measurement dominates
    linear, profiled = content["derived"]["magnitude_V_ub"], every["derived"]["magnitude_V_ub"]
    assert profiled["interval_68"] == pytest.approx(linear["interval_68"], rel=0.005)
