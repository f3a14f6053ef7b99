"""`weakmix profile` as a user meets it."""

from __future__ import annotations

import csv
import json

import numpy as np
import pytest

from fitcore.commands import scan_axes, scan_report
from observables.errors import InputError


def run_json(weakmix, *arguments):
    result = weakmix(*arguments, "--json", "-")
    assert result.exit_code == 0, result.stderr
    return json.loads(result.stdout), result


def test_one_quantity(weakmix):
    content, result = run_json(weakmix, "profile", "averages-2026", "wolfenstein_lambda")
    assert set(content) >= {"names", "grids", "chi2", "minimum", "regions"}
    assert content["names"] == ["wolfenstein_lambda"]
    assert len(content["chi2"]) == len(content["grids"][0]) == 201
    inner, outer = content["regions"]
    assert (inner["cl"], inner["dof"], inner["delta_chi2"]) == (0.683, 1, pytest.approx(1.0))
    assert outer["delta_chi2"] == pytest.approx(4.0)
    ((low, high),) = inner["intervals"]
    # an independent calculation of these inputs gives .22519(68)
    assert (low, high) == pytest.approx((0.22451, 0.22587), abs=0.08 * 0.00068)
    assert content["minimum"] == pytest.approx(min(content["chi2"]), abs=0.01)
    assert "quark mixing" in result.stderr
    assert "68.27 %" in result.stderr
    assert "Wilks" in result.stderr


def test_plane(weakmix):
    content, result = run_json(
        weakmix,
        *("profile", "averages-2026", "wolfenstein_rhobar=0.11:0.21:21", "wolfenstein_etabar=0.31:0.40:23"),
        *("--cl", "0.683", "--cl", "0.95"),
    )
    assert np.array(content["chi2"]).shape == (21, 23)
    assert [len(grid) for grid in content["grids"]] == [21, 23]
    assert [region["cl"] for region in content["regions"]] == [0.683, 0.95]
    assert [region["delta_chi2"] for region in content["regions"]] == pytest.approx([2.296, 5.991], abs=1e-3)
    (outline,) = content["regions"][0]["polylines"]
    assert content["regions"][0]["closed"] == [True]
    outline = np.array(outline)
    assert outline[0] == pytest.approx(outline[-1])
    # two parameters: sqrt(2.296) of the standard deviations .0092 and .0070
    assert np.ptp(outline[:, 0]) == pytest.approx(2 * 1.515 * 0.0092, rel=0.02)
    assert np.ptp(outline[:, 1]) == pytest.approx(2 * 1.515 * 0.00705, rel=0.02)
    assert "closed" in result.stderr


def test_run_folder(weakmix, tmp_path):
    result = weakmix("profile", "averages-2026", "angle_gamma=58:74:33", "--out", tmp_path / "run")
    assert result.exit_code == 0, result.output
    present = {path.name for path in (tmp_path / "run").iterdir()}
    assert present >= {
        "result.json",
        "run.json",
        "inputs.toml",
        "log.jsonl",
        "profile.png",
        "profile.pdf",
        "profile.csv",
    }
    rows = list(csv.DictReader((tmp_path / "run" / "profile.csv").read_text().splitlines()))
    content = json.loads((tmp_path / "run" / "result.json").read_text())
    assert [float(row["angle_gamma"]) for row in rows] == content["grids"][0]
    assert [float(row["delta_chi2"]) for row in rows] == pytest.approx(
        np.array(content["chi2"]) - content["minimum"], abs=1e-9
    )


def test_each_constraint(weakmix, tmp_path):
    result = weakmix(
        *("profile", "averages-2026", "wolfenstein_rhobar=0.08:0.24:15", "wolfenstein_etabar=0.29:0.42:15"),
        *("--each", "--without", "loop", "--out", tmp_path / "run"),
    )
    assert result.exit_code == 0, result.output
    content = json.loads((tmp_path / "run" / "result.json").read_text())
    names = [part["name"] for part in content["each"]]
    assert names == ["magnitude_V_ub", "angle_gamma"]
    assert all(np.array(part["chi2"]).shape == (15, 15) for part in content["each"])
    assert sum(part["chi2_share"] for part in content["each"]) < content["minimum"]
    header = (tmp_path / "run" / "plane.csv").read_text().splitlines()[0].split(",")
    assert header[3:] == [f"delta_chi2 {name}" for name in names]
    assert "Constraints, each alone: 68.27 % (Delta chi-square 2.296, two parameters)" in result.output
    # the range ends before the band of |V_ub| does
    assert "beyond both ends" in result.output
    assert set(content["held"]) == {"wolfenstein_lambda", "wolfenstein_A"}
    assert content["each"][names.index("angle_gamma")]["with"] == []


def test_theory_errors_side_by_side(weakmix):
    content, result = run_json(
        weakmix, "profile", "averages-2026", "wolfenstein_etabar=0.32:0.39:29", "--compare-theory-errors"
    )
    compared = content["theory_errors_compared"]
    assert set(compared) == {"flat"}
    # nothing is flat as given: one curve stands for both
    assert content["theory_errors_same"] == ["gaussian"]
    assert "as-given = gaussian" in result.stderr
    ((low, high),) = compared["flat"]["regions"][0]["intervals"]
    # an independent calculation of these inputs with flat theory errors gives .3560(63)
    assert (low, high) == pytest.approx((0.3497, 0.3623), abs=0.08 * 0.0063)
    assert "flat" in result.stderr


def test_points_out_of_reach_are_flagged(weakmix):
    content, result = run_json(weakmix, "profile", "averages-2026", "magnitude_V_tb=0.998:1.004:7")
    chi2 = content["chi2"]
    beyond = np.array(content["grids"][0]) > 1.0
    assert [value is None for value in chi2] == list(beyond)
    assert content["flagged"] == list(beyond)
    assert "out of reach" in result.stderr
    assert any("out of reach" in note for note in content["notes"])


def test_disconnected_intervals_are_all_found(weakmix):
    # without CP violation in the inputs the sign of eta-bar is open
    content, _ = run_json(
        weakmix,
        *("profile", "averages-2026", "wolfenstein_etabar=-0.6:0.6:61"),
        *("--without", "kaon-epsilon", "--without", "cp-asymmetry", "--without", "tree-phase"),
    )
    lower, upper = content["regions"][0]["intervals"]
    assert lower[0] == pytest.approx(-upper[1], abs=1e-4)
    assert lower[1] == pytest.approx(-upper[0], abs=1e-4)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["no_such_thing"], "no_such_thing"),
        (["angle_gama"], "angle_gamma"),
        (["wolfenstein_A=0.9:0.8:5"], "reversed"),
        (["wolfenstein_A=0.8:0.8"], "empty"),
        (["wolfenstein_A=0.8"], "LOW:HIGH"),
        (["wolfenstein_A=a:b"], "numbers"),
        (["wolfenstein_A=0.8:0.9:0"], "at least 2"),
        (["wolfenstein_A=0.8:0.9:2.5"], "whole number"),
        (["wolfenstein_A=0.8:inf"], "finite"),
        (["=0.8:0.9"], "name is missing"),
        (["wolfenstein_A", "wolfenstein_A"], "twice"),
        (["wolfenstein_A", "wolfenstein_lambda", "jarlskog"], "one or two"),
        (["V_ub"], "complex"),
        (["mass_mu"], "does not depend"),
        (["magnitude_V_tb=1.1:1.2"], "no possible point"),
        (["wolfenstein_A=5:6"], "no possible point"),
        (["wolfenstein_A", "--cl", "1.2"], "confidence level"),
        (["wolfenstein_A", "--cl", "0"], "confidence level"),
        (["wolfenstein_A", "--each"], "two names"),
        (["wolfenstein_A", "jarlskog", "--compare-theory-errors"], "one name"),
        (["wolfenstein_A=0.8:0.9:1000001"], "more than"),
    ],
)
def test_unusable_requests(weakmix, arguments, message):
    result = weakmix("profile", "averages-2026", *arguments, "--json", "-")
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert "Traceback" not in result.stderr
    assert not result.stdout


def test_axes_are_read():
    assert scan_axes.parse_axes(["a=1:2:3", "b"]) == (scan_axes.Axis("a", 1.0, 2.0, 3), scan_axes.Axis("b"))
    assert scan_axes.parse_axes(["a=-1e-3:2e-3"]) == (scan_axes.Axis("a", -1e-3, 2e-3),)
    with pytest.raises(InputError, match="more than"):
        scan_axes.parse_axes(["a=0:1:2000", "b=0:1:2000"])


def test_a_lower_minimum_is_said_loudly(weakmix, monkeypatch):
    """The search for minima is made to miss the best one: the scan finds it, says so and counts from it."""
    from fitcore.minimise import minima

    whole = minima.find_minima

    def blind(problem, **more):
        return [
            m
            for m in whole(problem, **more)
            if m.theta[problem.parameter_names.index("wolfenstein_etabar")] > 0
        ]

    monkeypatch.setattr("fitcore.commands.scan.find_minima", blind)
    # alpha, known modulo 180 degrees, tells the signs of eta-bar apart, but not by much: both are minima, and with
    # alpha = 84 against a fitted 91 the mirror image (180 - 91) is the better one
    result = weakmix(
        *("profile", "averages-2026", "wolfenstein_etabar=-0.6:0.6:25", "--json", "-"),
        *("--without", "kaon-epsilon", "--without", "tree-phase", "--without", "sine-2beta"),
    )
    content = json.loads(result.stdout)
    assert content["lower_minimum_found"] is True
    assert "A LOWER MINIMUM WAS FOUND" in result.stderr
    assert content["minimum_at"]["wolfenstein_etabar"] < 0
    assert content["minimum"] <= min(value for value in content["chi2"] if value is not None) + 1e-6


def test_points_inside_a_polygon():
    square = np.array([[0.0, 0.0], [2.0, 0.0], [2.0, 2.0], [0.0, 2.0], [0.0, 0.0]])
    points = np.array([[1.0, 1.0], [3.0, 1.0], [-1.0, 1.0], [1.0, -0.1], [0.1, 1.9]])
    assert scan_report.inside_polygon(points, square).tolist() == [True, False, False, False, True]
