"""Outlooks: closed forms, the file of future errors, and its mistakes."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fitcore import Problem
from fitcore.studies.outlook import outlook, read_future
from observables.errors import InputError


@pytest.mark.parametrize("name", ["slope", "offset", "at_two"])
def test_linear_problem_equals_the_closed_form(linear, name):
    factors = {"one": 0.5, "incline": 0.25, "two-again": 2.0}
    (row,) = outlook(linear.problem, factors, [name]).rows
    scale = np.array([factors.get(identity, 1.0) for identity in linear.ids])
    now = linear.closed_form(linear.quantities, linear.values, linear.covariance)
    later = linear.closed_form(linear.quantities, linear.values, linear.covariance * np.outer(scale, scale))
    line = np.array(linear.lines[name])
    value = line @ now.theta
    for interval, spread in ((row.now_68, now.covariance), (row.future_68, later.covariance)):
        error = math.sqrt(line @ spread @ line)
        assert interval == pytest.approx((value - error, value + error), abs=1e-6 * error)
    assert row.value == pytest.approx(value, rel=1e-6)
    ratio = math.sqrt(line @ now.covariance @ line / (line @ later.covariance @ line))
    assert row.gain == pytest.approx(ratio, rel=4e-4)


def test_nothing_changed_changes_nothing():
    problem = Problem.load("averages-2026")
    result = outlook(problem, {"gamma-average": 1.0}, ["angle_gamma"])
    assert result.changed == ()
    (row,) = result.rows
    assert row.gain == pytest.approx(1.0, abs=1e-6)
    assert row.future_68[0] < row.value < row.future_68[1]


def test_named_sources_shrink_together(make, tables):
    problem = make(
        tables.measurement("a", "slope", 1.0, {"statistical": 0.3, "scale": 0.4}),
        tables.measurement("b", "offset", 0.3, {"statistical": 0.3, "scale": 0.4}),
    )
    (row,) = outlook(problem, {"a": 0.5, "b": 0.5}, ["at_one"]).rows
    assert row.now_68[1] - row.value == pytest.approx(math.sqrt(2 * 0.3**2 + 0.8**2), rel=1e-6)
    assert row.gain == pytest.approx(2.0, rel=1e-3)


def test_the_file(linear, tmp_path):
    path = tmp_path / "future.toml"
    path.write_text(
        'title = "Better"\n[future]\n"two" = { error = 0.01, unit = "1" }\n'
        '"incline" = { factor = 0.5 }\n"late" = { factor = 0.9 }\n"early" = { factor = 0.8 }\n'
    )
    plan = read_future(path, linear.problem)
    assert plan.title == "Better"
    assert plan.absolute == {"two": (0.01, 0.01)}
    # what is said of an entry itself comes first, wherever it stands
    assert plan.factors["incline"] == 0.5
    assert plan.factors["two-again"] == 0.9
    assert plan.factors["one"] == 0.8
    result = outlook(linear.problem, plan, ["slope"])
    changed = {name: (now, later) for name, now, later, _ in result.changed}
    assert changed["two"] == pytest.approx((0.12, 0.01))
    assert changed["three"] == pytest.approx((0.2, 0.16))


def test_units_and_asymmetric_errors(tmp_path):
    problem = Problem.load("averages-2026")
    path = tmp_path / "future.toml"
    path.write_text(
        '[future]\nmixing-matrix-element-Bs = { error = 3.0, unit = "MeV" }\n'
        'alpha-average = { error = [2.0, 1.0], unit = "deg" }\n'
    )
    plan = read_future(path, problem)
    assert plan.absolute["mixing-matrix-element-Bs"] == pytest.approx((0.003, 0.003))
    assert plan.absolute["alpha-average"] == (2.0, 1.0)
    assert plan.title == "future"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("[future]\nnothing-like-it = { factor = 0.5 }", "matches no entry"),
        ("[future]\nincline2 = { factor = 0.5 }", "did you mean incline"),
        ("[future]\none = { factor = 0.0 }", "positive"),
        ("[future]\none = { factor = -1 }", "positive"),
        ("[future]\none = { factor = true }", "positive"),
        ("[future]\none = { factor = nan }", "positive"),
        ("[future]\none = { error = 0.1 }", "error and unit"),
        ("[future]\none = 0.5", "either factor"),
        ('[future]\none = { error = 0.1, unit = "GeV" }', "GeV"),
        ('[future]\nearly = { error = 0.1, unit = "1" }', "belongs to one entry"),
        ("title = 'x'", r"no \[future\] table"),
        ("[future]\n", r"no \[future\] table"),
        ("[future\n", "not TOML"),
        ("titel = 'x'\n[future]\none = { factor = 0.5 }", "unknown key"),
    ],
)
def test_mistakes_in_the_file(linear, tmp_path, text, message):
    path = tmp_path / "future.toml"
    path.write_text(text)
    with pytest.raises(InputError, match=message):
        read_future(path, linear.problem)


def test_mistakes_are_collected_and_a_missing_file_is_said(linear, tmp_path):
    path = tmp_path / "future.toml"
    path.write_text("[future]\nnot-there = { factor = 0.5 }\none = { factor = 0 }\n")
    with pytest.raises(InputError) as caught:
        read_future(path, linear.problem)
    assert "not-there" in str(caught.value)
    assert "one" in str(caught.value)
    with pytest.raises(InputError, match="cannot be read"):
        read_future(tmp_path / "absent.toml", linear.problem)
    with pytest.raises(InputError, match="no entry"):
        outlook(linear.problem, {"not-there": 0.5}, ["slope"])
    with pytest.raises(InputError, match="positive"):
        outlook(linear.problem, {"one": 0.0}, ["slope"])


def test_flat_ranges_shrink_around_the_best_fit(make, tables):
    problem = make(
        tables.measurement("lattice", "slope", 1.0, 0.1, kind="theory"),
        tables.measurement("a", "at_one", 1.6, 0.01),
        tables.measurement("b", "at_two", 2.4, 0.3),
        theory_errors="flat",
    )
    (row,) = outlook(problem, {"lattice": 0.5}, ["slope"]).rows
    assert row.now_68[1] - row.now_68[0] == pytest.approx(0.2, rel=1e-2)
    assert row.future_68[1] - row.future_68[0] == pytest.approx(0.1, rel=1e-2)
