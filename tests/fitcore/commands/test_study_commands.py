"""`weakmix indirect`, `budget`, `outlook` and `fit --compare-theory-errors` as a user meets them."""

from __future__ import annotations

import csv
import json

import pytest


def test_indirect(weakmix, tmp_path):
    result = weakmix(
        *("indirect", "averages-2026", "isospin_alpha", "phase_phi_s", "--out", tmp_path / "run"),
        *("--json", tmp_path / "result.json"),
    )
    assert result.exit_code == 0, result.output
    content = json.loads((tmp_path / "result.json").read_text())
    assert content == json.loads((tmp_path / "run" / "result.json").read_text())
    alpha, phase = content["quantities"]["isospin_alpha"], content["quantities"]["phase_phi_s"]
    assert set(alpha) >= {"value", "interval_68", "direct", "direct_error", "tension"}
    assert alpha["direct"] == 84.1
    assert alpha["direct_error"] == [3.7, 3.0]
    assert alpha["left_out"] == ["alpha-average"]
    # an independent calculation of these inputs: 92.2(1.5), tension 1.89
    assert alpha["value"] == pytest.approx(92.2, abs=0.08 * 1.5 + 0.05)
    assert alpha["tension"] == pytest.approx(-1.89, abs=0.08)
    assert phase["direct"] is None
    assert phase["tension"] is None
    rows = list(csv.DictReader((tmp_path / "run" / "direct-indirect.csv").read_text().splitlines()))
    assert [row["quantity"] for row in rows] == ["isospin_alpha", "phase_phi_s"]  # the largest tension first
    assert float(rows[0]["indirect"]) == alpha["value"]
    assert rows[1]["direct"] == ""
    assert "quark mixing" in result.stdout
    assert "-1.89" in result.stdout
    assert "Wilks" in result.stdout


def test_budget(weakmix, tmp_path):
    result = weakmix("budget", "averages-2026", "angle_beta", "--out", tmp_path / "run")
    assert result.exit_code == 0, result.output
    content = json.loads((tmp_path / "run" / "result.json").read_text())["quantities"]["angle_beta"]
    assert content["unit"] == "deg"
    # sin 2 beta carries the angle: its unit shift is most of the whole
    assert content["entries"][0]["name"] == "sine-2beta"
    assert 0.7 < abs(content["entries"][0]["shift"]) / content["error"] < 1.0
    assert "if exact" in result.output
    assert "removal" not in result.output
    groups = {row["name"] for row in content["groups"]}
    assert groups >= {"experiment", "theory", "lattice", "perturbative", "tree"}
    rows = list(csv.DictReader((tmp_path / "run" / "budget-angle_beta.csv").read_text().splitlines()))
    assert float(rows[0]["shift"]) == content["entries"][0]["shift"]
    assert {row["kind"] for row in rows} == {"input", "group"}
    assert "known exactly" in result.stdout


def test_outlook(weakmix, tmp_path):
    future = tmp_path / "future.toml"
    future.write_text('title = "One degree"\n[future]\ngamma-average = { error = 1.0, unit = "deg" }\n')
    result = weakmix("outlook", "averages-2026", future, "angle_gamma", "jarlskog", "--out", tmp_path / "run")
    assert result.exit_code == 0, result.output
    content = json.loads((tmp_path / "run" / "result.json").read_text())
    assert content["title"] == "One degree"
    assert [row["id"] for row in content["changed"]] == ["gamma-average"]
    gamma = content["quantities"]["angle_gamma"]
    # 65.6(1.6) from the rest (an independent calculation) and 1.0 combine to 0.85, to the curvature of the problem
    assert 0.5 * (gamma["future_68"][1] - gamma["future_68"][0]) == pytest.approx(0.85, abs=0.05)
    assert gamma["gain"] > 1.5
    assert (tmp_path / "run" / "future.toml").read_text() == future.read_text()
    rows = list(csv.DictReader((tmp_path / "run" / "outlook.csv").read_text().splitlines()))
    assert [row["quantity"] for row in rows] == ["angle_gamma", "jarlskog"]
    assert float(rows[0]["narrower_by"]) == gamma["gain"]


def test_compare_theory_errors_in_fits(weakmix):
    result = weakmix("fit", "averages-2026", "--compare-theory-errors", "--json", "-")
    assert result.exit_code == 0, result.stderr
    compared = json.loads(result.stdout)["theory_errors_compared"]
    assert list(compared) == ["as-given", "gaussian", "flat"]
    flat = compared["flat"]["quantities"]
    assert set(flat) == {f"wolfenstein_{name}" for name in ("lambda", "A", "rhobar", "etabar")}
    assert compared["gaussian"]["chi2"] == pytest.approx(compared["as-given"]["chi2"])
    assert compared["flat"]["chi2"] < compared["gaussian"]["chi2"]
    assert "Treatment of theory errors" in result.stderr


def test_without_figures_and_with_json_on_stdout(weakmix, tmp_path):
    result = weakmix("indirect", "averages-2026", "angle_gamma", "--no-figures", "--out", tmp_path / "run")
    assert result.exit_code == 0, result.output
    assert not list((tmp_path / "run").glob("*.png"))
    result = weakmix("budget", "averages-2026", "angle_gamma", "--json", "-")
    assert result.exit_code == 0
    assert set(json.loads(result.stdout)["quantities"]) == {"angle_gamma"}
    assert not (tmp_path / "weakmix-runs").exists()


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["indirect", "averages-2026", "angle_gama"], "angle_gamma"),
        (["indirect", "averages-2026", "V_ub"], "complex"),
        (["indirect", "averages-2026", "angle_gamma", "angle_gamma"], "twice"),
        (["indirect", "averages-2026-tree", "epsilon_K"], "bag_K"),
        (["budget", "averages-2026", "V_ub"], "complex"),
        (["budget", "averages-2026", "nothing_at_all"], "nothing_at_all"),
        (["budget", "averages-2026", "--only", "no-such-group"], "no-such-group"),
        (["budget", "averages-2026", "--only", "kaon-epsilon", "wolfenstein_A"], "do not determine"),
        (["outlook", "averages-2026", "absent.toml"], "cannot be read"),
        (["outlook", "averages-2026", "absent.toml", "V_ub"], "complex"),
    ],
)
def test_unusable_requests(weakmix, arguments, message):
    result = weakmix(*arguments, "--json", "-")
    assert result.exit_code == 2, result.output
    assert message in result.stderr
    assert not result.stdout


def test_an_outlook_that_matches_nothing(weakmix, tmp_path):
    future = tmp_path / "future.toml"
    future.write_text("[future]\ngama-average = { factor = 0.5 }\n")
    result = weakmix("outlook", "averages-2026", future)
    assert result.exit_code == 2
    assert "gama-average" in result.stderr
    assert "did you mean gamma-average" in " ".join(result.stderr.split())
    assert not (tmp_path / "weakmix-runs").exists()


def test_a_budget_lists_names_that_select(weakmix):
    done = weakmix("show", "averages-2026", "--without", "theory", "--json", "-")
    assert done.exit_code == 0, done.output
    assert {entry["kind"] for entry in json.loads(done.stdout)["entries"]} == {"experiment"}
