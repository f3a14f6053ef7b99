"""`weakmix calibrate`: what it prints, writes, refuses, and how it survives Ctrl-C."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time

import pytest

from fitcore.commands import calibrate as command
from fitcore.studies import calibration

TREE = "averages-2026-tree"


def test_json_has_the_contracted_keys(weakmix):
    done = weakmix("calibrate", TREE, "--toys", 400, "--json", "-", "--seed", 7)
    assert done.exit_code == 0, done.output
    found = json.loads(done.stdout)
    assert found["toys"] == 400
    assert 0.0 < found["p_value"] <= 1.0
    assert found["p_value_error"] > 0.0
    assert abs(found["p_value"] - found["asymptotic"]) < 5 * found["p_value_error"]
    assert found["p_value_interval"][0] < found["p_value"] < found["p_value_interval"][1] + 1 / 400
    assert "calibrated with 400 pseudo-experiments" in done.stderr


def test_points_intervals_and_coverage_are_written_with_their_figures(weakmix, tmp_path):
    done = weakmix(
        *("calibrate", TREE, "angle_beta=22", "wolfenstein_A", "--toys", 100, "--cl", 0.683, "--cl", 0.9),
        *("--coverage", "wolfenstein_rhobar", "--out", "run", "--json", "out.json"),
    )
    assert done.exit_code == 0, done.output
    for words in (
        "Points tested",
        "angle_beta = 22 deg",
        "Interval of wolfenstein_A",
        "Coverage",
        "68.3 %",
        "90 %",
        "ends +-",
    ):
        assert words in done.stdout
    names = {path.name for path in (tmp_path / "run").iterdir()}
    for figure in ("goodness", "threshold-wolfenstein_A", "coverage"):
        assert {f"{figure}.pdf", f"{figure}.png", f"{figure}.csv"} <= names
    assert {"result.json", "inputs.toml", "toys.jsonl", "log.jsonl", "run.json"} <= names
    assert not (tmp_path / "run.toys.jsonl").exists()
    found = json.loads((tmp_path / "out.json").read_text())
    assert found["points"][0]["values"] == {"angle_beta": 22.0}
    assert [level["cl"] for level in found["regions"][0]["levels"]] == [0.683, 0.9]
    assert len(found["coverage"]) == 2
    header = (tmp_path / "run" / "threshold-wolfenstein_A.csv").read_text().splitlines()[0]
    assert header == "cl,wolfenstein_A,threshold_assumed,threshold_needed,needed_low,needed_high"


def test_two_values_are_one_point_and_two_names_one_region(weakmix):
    done = weakmix(
        *(
            "calibrate",
            TREE,
            "wolfenstein_rhobar=0.16",
            "wolfenstein_etabar=0.37",
            "--toys",
            50,
            "--json",
            "-",
        ),
    )
    [point] = json.loads(done.stdout)["points"]
    assert point["values"] == {"wolfenstein_rhobar": 0.16, "wolfenstein_etabar": 0.37}
    done = weakmix(
        *("calibrate", TREE, "wolfenstein_rhobar=0.1:0.25:3", "wolfenstein_etabar=0.3:0.45:3", "--toys", 50),
        *("--out", "plane", "--json", "-"),
    )
    assert done.exit_code == 0, done.output
    [region] = json.loads(done.stdout)["regions"]
    assert region["names"] == ["wolfenstein_rhobar", "wolfenstein_etabar"]
    assert [len(grid) for grid in region["grids"]] == [3, 3]


def test_same_numbers_for_any_number_of_jobs(weakmix):
    arguments = ("calibrate", TREE, "--toys", 1200, "--seed", 3, "--json", "-", "--quiet")
    one, two = (json.loads(weakmix(*arguments, "--jobs", jobs).stdout) for jobs in (1, 2))
    one.pop("provenance"), two.pop("provenance")
    assert one == two


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("--toys", 0), "--toys 0: at least one pseudo-experiment"),
        (("--toys", -3), "at least one pseudo-experiment"),
        (("angle_bta=20",), "did you mean angle_beta"),
        (("--coverage", "angle_bta"), "did you mean angle_beta"),
        (("V_ub",), "complex"),
        (("angle_beta=",), "write NAME, NAME=VALUE or NAME=LOW:HIGH:N"),
        (("angle_beta=twenty",), "is not a number"),
        (("angle_beta=nan",), "is not a number"),
        (("angle_beta=3:1:5",), "LOW below HIGH"),
        (("angle_beta=1:3",), "LOW below HIGH"),
        (("angle_beta=1:3:1",), "N at least 2"),
        (("side_Rb=-3:-2:3",), "no parameter point has any of the values"),
        (("angle_beta=20", "angle_gamma=70", "angle_alpha=90"), "test one quantity at several values"),
        (("angle_beta", "angle_gamma", "angle_alpha"), "interval of one quantity or the region of two"),
        (("angle_beta", "angle_gamma=60:70:3"), "grid for both quantities or for none"),
        (("--cl", 1.5), "confidence level 1.5"),
        (("--cluster", "tcp://127.0.0.1:9"), "cluster 'tcp://127.0.0.1:9': nobody answers there"),
        (("--cluster", "here"), "no address of a scheduler"),
    ],
)
def test_mistakes_have_a_message_and_exit_code_2(weakmix, tmp_path, arguments, message):
    done = weakmix("calibrate", TREE, "--toys", 20, *arguments, "--out", "run")
    assert done.exit_code == 2
    assert message in done.stderr
    assert "Traceback" not in done.stderr
    assert not list(tmp_path.iterdir())  # nothing is left behind


def test_a_point_out_of_reach_is_said(weakmix):
    done = weakmix("calibrate", TREE, "side_Rb=-3", "--toys", 20, "--json", "-")
    assert done.exit_code == 0
    assert json.loads(done.stdout)["points"][0]["p_value"] is None
    assert "no parameter point has these values" in done.stderr


def without_provenance(path):
    content = json.loads(path.read_text())
    content.pop("provenance")
    return content


@pytest.mark.parametrize("out", [("--out", "run"), ()])
def test_interrupted_and_repeated(weakmix, tmp_path, monkeypatch, out):
    monkeypatch.setattr(calibration, "BLOCK", 100)
    arguments = ("calibrate", TREE, "angle_beta=22", "--toys", 600, "--no-figures", "--json", "result.json")
    assert weakmix(*arguments, "--out", "whole").exit_code == 0
    expected = without_provenance(tmp_path / "result.json")

    run_tasks = calibration.run_tasks

    def interrupted(*args, **kwargs):
        for count, answer in enumerate(run_tasks(*args, **kwargs)):
            yield answer
            if count == 4:
                raise KeyboardInterrupt

    monkeypatch.setattr(calibration, "run_tasks", interrupted)
    done = weakmix(*arguments, *out)
    assert done.exit_code == 130
    assert "500 of 1,200 pseudo-experiments are done and kept in" in done.stderr
    sent = []

    def counted(executor, function, tasks, **kwargs):
        sent.append(len(tasks))
        return run_tasks(executor, function, tasks, **kwargs)

    monkeypatch.setattr(calibration, "run_tasks", counted)
    assert weakmix(*arguments, *out).exit_code == 0
    assert sent == [7]
    assert without_provenance(tmp_path / "result.json") == expected
    assert not list(tmp_path.rglob("*.toys.jsonl"))


def test_another_calibration_in_the_same_place_is_refused(weakmix, tmp_path, monkeypatch):
    monkeypatch.setattr(calibration, "BLOCK", 10)

    def interrupted(*_args, **_kwargs):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(calibration, "run_tasks", interrupted)
        assert weakmix("calibrate", TREE, "--toys", 20, "--out", "run").exit_code == 130
    done = weakmix("calibrate", TREE, "--toys", 20, "--out", "run", "--seed", 9)
    assert done.exit_code == 2
    assert "seed: 0 in the file, 9 asked for" in done.stderr
    assert (tmp_path / "run.toys.jsonl").exists()
    assert not (tmp_path / "run").exists()


@pytest.mark.skipif(os.name != "posix", reason="signals")
def test_ctrl_c_with_two_processes(tmp_path):
    """A real interrupt: exit code 130, whole lines in the store, no traceback, no worker left."""
    store = tmp_path / "run.toys.jsonl"
    process = subprocess.Popen(
        [
            *(sys.executable, "-c", "from fitcore.commands.main import main; main()"),
            *("calibrate", TREE, "--toys", "4000000", "--jobs", "2", "--out", "run", "--quiet"),
        ],
        cwd=tmp_path,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    try:
        deadline = time.monotonic() + 60
        while not (store.exists() and store.read_bytes().count(b"\n") >= 4):
            assert process.poll() is None, process.stderr.read()
            assert time.monotonic() < deadline
            time.sleep(0.05)
        os.killpg(process.pid, signal.SIGINT)  # as a terminal sends it: to the workers too
        _, errors = process.communicate(timeout=30)
    finally:
        if process.poll() is None:
            process.kill()
            process.wait()
    assert process.returncode == 130
    assert "the same command goes on" in errors
    assert "Traceback" not in errors
    content = store.read_bytes()
    assert content.endswith(b"\n")
    for line in content.splitlines():
        json.loads(line)
    assert _gone(process.pid), "a worker was left behind"


def _gone(group):
    """Whether every process of a group ends within some seconds."""
    deadline = time.monotonic() + 10
    while time.monotonic() < deadline:
        try:
            os.killpg(group, 0)
        except ProcessLookupError:
            return True
        time.sleep(0.05)
    return False


def test_progress_lines_where_there_is_no_terminal(monkeypatch, capsys):
    from fitcore.commands.output import Output

    monkeypatch.setattr(command, "LINE_EVERY", 0.0)
    with command.progress(Output()) as report:
        report(0, 1000)
        report(500, 1000)
        report(1000, 1000)
    lines = capsys.readouterr().err.splitlines()
    assert "500 of 1,000 pseudo-experiments" in lines[-1]


def test_help_names_the_command(weakmix):
    assert "calibrate" in weakmix("--help").stdout
    assert "--cluster" in weakmix("calibrate", "--help").stdout


def test_a_wrong_level_is_said_before_anything_else(weakmix):
    done = weakmix("calibrate", TREE, "--cl", 1.5)
    assert (done.exit_code, done.stdout) == (2, "")
    assert "confidence level 1.5 is not between 0 and 1" in done.stderr


def test_a_calibrated_p_value_shows_two_digits_of_its_error():
    from fitcore.commands.calibration_tables import p_value

    assert p_value(0.213, 0.013) == "0.213 +- 0.013"
    assert p_value(0.218, 0.0203) == "0.218 +- 0.020"
