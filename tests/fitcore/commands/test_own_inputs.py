"""A user's own file on top of a published set, and computing at points of one's own."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from pathlib import Path
from typing import Any

import independent_physics
import pytest
from click.testing import Result

from fitcore import Problem
from observables import catalogue

Run = Callable[..., Result]

OWN = """\
title = "Published averages with one measurement of our own"
include = ["averages-2026"]
drop = ["{drop}"]

[[measurement]]
id = "ours"
quantity = "{quantity}"
value = {value}
error = {error}
unit = "{unit}"
groups = ["tree"]
source = "our analysis"
"""

#: Dropped id, quantity, value and error in a unit, the same in the unit of the published entry, and that in the
#: catalogue's unit.
SWAPS = [
    ("V-ub", "magnitude_V_ub", 0.372, 0.012, "%", (0.00372, 0.00012), 1.0),
    ("decay-constant-K", "decay_constant_K", 155.1, 0.4, "MeV", (155.1, 0.4), 1e-3),
    ("gamma-average", "angle_gamma", 1.08, 0.02, "rad", (math.degrees(1.08), math.degrees(0.02)), 1.0),
    ("gamma-average", "angle_gamma", 61.0, 1.5, "deg", (61.0, 1.5), 1.0),
]


def fitted(weakmix: Run, *arguments: Any) -> dict[str, Any]:
    done = weakmix("fit", *arguments, "--json", "-", "--quiet")
    assert done.exit_code == 0, done.stderr
    content: dict[str, Any] = json.loads(done.stdout)
    return content


@pytest.fixture(scope="module")
def published() -> dict[str, Any]:
    return Problem.load("averages-2026").fit().to_dict()


@pytest.mark.parametrize(("drop", "quantity", "value", "error", "unit", "published_as", "factor"), SWAPS)
def test_own_file_equals_the_published_set_with_that_entry_changed(
    weakmix: Run,
    published: dict[str, Any],
    drop: str,
    quantity: str,
    value: float,
    error: float,
    unit: str,
    published_as: tuple[float, float],
    factor: float,
) -> None:
    Path("own.toml").write_text(OWN.format(drop=drop, quantity=quantity, value=value, error=error, unit=unit))
    own = fitted(weakmix, "own.toml")
    change = (f"{drop}.value={published_as[0]!r}", f"{drop}.error={published_as[1]!r}")
    same = fitted(weakmix, "averages-2026", "--set", change[0], "--set", change[1])
    assert own["chi2"] == pytest.approx(same["chi2"], abs=1e-6)
    assert own["degrees_of_freedom"] == same["degrees_of_freedom"] == published["degrees_of_freedom"]
    for name, estimate in same["parameters"].items():
        assert own["parameters"][name]["value"] == pytest.approx(
            estimate["value"], abs=1e-4 * estimate["error"]
        )
        assert own["parameters"][name]["error"] == pytest.approx(estimate["error"], rel=1e-4)
    (row,) = [row for row in own["measurements"] if row["id"] == "ours"]
    assert row["measured"] == pytest.approx(published_as[0] * factor, rel=1e-14)
    assert row["error"] == pytest.approx(published_as[1] * factor, rel=1e-14)
    assert all(row["id"] != drop for row in own["measurements"])
    moved = abs(own["chi2"] - published["chi2"])
    assert moved > 1e-3  # it did change the fit
    dropped = [notice for notice in own["notices"] if notice["id"] == drop]
    assert [notice["kind"] for notice in dropped] == ["dropped"]


def test_dropping_is_leaving_out(weakmix: Run) -> None:
    Path("own.toml").write_text('title = "Less"\ninclude = ["averages-2026"]\ndrop = ["alpha-average"]\n')
    less, without = (
        fitted(weakmix, "own.toml"),
        fitted(weakmix, "averages-2026", "--without", "alpha-average"),
    )
    assert less["chi2"] == pytest.approx(without["chi2"], abs=1e-9)
    assert less["parameters"] == without["parameters"]
    assert less["degrees_of_freedom"] == 8


def test_json_has_the_documented_keys(weakmix: Run) -> None:
    content = fitted(weakmix, "averages-2026")
    documented = {
        *("chi2", "degrees_of_freedom", "p_value", "converged", "hypothesis", "inputs", "parameters"),
        *("derived", "measurements", "correlation", "other_minima"),
    }
    assert documented <= set(content)
    assert {"name", "sha256"} <= set(content["inputs"])
    assert content["inputs"]["name"] == "averages-2026"
    for estimate in (*content["parameters"].values(), *content["derived"].values()):
        assert set(estimate) == {"value", "error", "interval_68", "interval_95", "method", "unit"}
        assert estimate["method"] in ("profile", "linear")
    for row in content["measurements"]:
        assert {"id", "quantity", "measured", "error", "fitted", "pull"} <= set(row)
    size = len(content["correlation"]["names"])
    assert [len(row) for row in content["correlation"]["matrix"]] == [size] * size


@pytest.mark.parametrize(("rhobar", "etabar"), [(-0.31, 0.42), (0.27, -0.55), (-0.18, -0.23), (0.6, 0.2)])
def test_compute_anywhere_agrees_with_an_independent_calculation(
    weakmix: Run, rhobar: float, etabar: float
) -> None:
    names = [
        *("jarlskog", "angle_alpha", "angle_beta", "angle_gamma", "magnitude_V_td", "mixing_frequency_Bd"),
        *("mixing_frequency_Bs", "epsilon_K", "sine_2beta_ccs", "branching_Bu_tau_nu", "superallowed_Ft"),
    ]
    point = {
        "wolfenstein_lambda": 0.27,
        "wolfenstein_A": 0.71,
        "wolfenstein_rhobar": rhobar,
        "wolfenstein_etabar": etabar,
    }
    given = [word for name, value in point.items() for word in ("--at", f"{name}={value}")]
    done = weakmix("compute", *names, "--start-values", *given, "--json", "-")
    assert done.exit_code == 0, done.stderr
    content = json.loads(done.stdout)
    leaves = {name: catalogue[name].start for name in catalogue.names("parameter")}
    leaves |= {name: catalogue[name].value for name in catalogue.names("constant")}
    reference = independent_physics.all_quantities(leaves | point)
    for name in names:
        # compared as points of the circle where the quantity is an angle
        period = catalogue[name].period
        difference = content["values"][name] - float(reference[name].real)
        if period:
            difference -= period * round(difference / period)
        assert abs(difference) <= 2e-3 * abs(float(reference[name].real)), name
    assert content["parameters"]["bag_K"]["from"] == "start value"
    assert content["parameters"]["wolfenstein_etabar"]["from"] == "--at"
    assert "start value" in done.stderr


def test_compute_from_a_run_takes_its_best_fit(weakmix: Run) -> None:
    assert weakmix("fit", "averages-2026", "--out", "run", "--no-figures", "--quiet").exit_code == 0
    fit = json.loads(Path("run/result.json").read_text())
    done = json.loads(weakmix("compute", "angle_gamma", "--from", "run", "--json", "-").stdout)
    assert done["values"]["angle_gamma"] == pytest.approx(fit["derived"]["angle_gamma"]["value"], rel=1e-12)
    assert done["errors"]["angle_gamma"] == pytest.approx(fit["derived"]["angle_gamma"]["error"], rel=1e-4)
    assert {row["from"] for row in done["parameters"].values()} == {"best fit"}
