"""Budgets: closed forms of shifts and removals, groups, and what cannot be budgeted."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fitcore import Problem
from fitcore.studies.budget import budget
from observables.errors import InputError, UnknownNameError


@pytest.mark.parametrize("name", ["slope", "offset", "at_three"])
def test_linear_problem_equals_the_closed_form(linear, name):
    result = budget(linear.problem, [name])
    best = linear.closed_form(linear.quantities, linear.values, linear.covariance)
    line = np.array(linear.lines[name])
    error = math.sqrt(line @ best.covariance @ line)
    assert result.errors[name] == pytest.approx(error, rel=1e-6)
    assert result.values[name] == pytest.approx(line @ best.theta, rel=1e-6)
    rows = {row.name: row for row in result.entries[name]}
    shifts = line @ best.gain * linear.errors
    for identity, shift, direction in zip(linear.ids, shifts, best.design, strict=True):
        assert rows[identity].shift == pytest.approx(shift, rel=1e-6, abs=1e-9)
        # known exactly: a constraint direction . theta = const takes this part of the variance away
        removed = (direction @ best.covariance @ line) ** 2 / (direction @ best.covariance @ direction)
        assert rows[identity].removal == pytest.approx(math.sqrt(removed), rel=1e-6, abs=1e-9)
    correlation = linear.covariance / np.outer(linear.errors, linear.errors)
    assert math.sqrt(shifts @ correlation @ shifts) == pytest.approx(error, rel=1e-9)


def test_groups_add_with_their_correlations(linear):
    result = budget(linear.problem, ["slope"])
    shifts = {row.name: row.shift for row in result.entries["slope"]}
    groups = {row.name: row for row in result.groups["slope"]}
    one, three = shifts["one"], shifts["three"]
    assert groups["block"].shift == pytest.approx(math.sqrt(one**2 + three**2 + 1.2 * one * three), rel=1e-9)
    # every entry is experimental, and all of them known exactly leave nothing
    assert groups["experiment"].shift == pytest.approx(result.errors["slope"], rel=1e-6)
    assert groups["experiment"].removal == pytest.approx(result.errors["slope"], rel=1e-6)
    disjoint = groups["early"].shift ** 2 + groups["late"].shift ** 2
    assert math.sqrt(disjoint) == pytest.approx(result.errors["slope"], rel=1e-6)


def test_rows_are_sorted_and_signed(linear):
    rows = budget(linear.problem, ["offset"]).entries["offset"]
    assert [abs(row.shift) for row in rows] == sorted((abs(row.shift) for row in rows), reverse=True)
    # a steeper line measured directly pushes the offset down
    assert next(row for row in rows if row.name == "incline").shift < 0


def test_published_averages_add_up():
    problem = Problem.load("averages-2026")
    result = budget(problem, ["wolfenstein_rhobar", "wolfenstein_A"])
    for name in result.quantities:
        total = math.sqrt(sum(row.shift**2 for row in result.entries[name]))
        assert total == pytest.approx(
            result.errors[name], rel=0.02
        )  # asymmetric errors and curvature: not exact
    # the ratio of B-mixing matrix elements drives the apex; |V_us|, through A lambda^2 = |V_cb|, drives A
    assert result.entries["wolfenstein_rhobar"][0].name == "mixing-matrix-element-ratio"
    assert result.entries["wolfenstein_A"][0].name == "V-us"


def test_flat_ranges_have_no_budget(make, tables):
    problem = make(
        tables.measurement("lattice", "slope", 1.0, 0.1, kind="theory"),
        tables.measurement("a", "at_one", 1.3, 0.1),
        tables.measurement("b", "at_two", 2.4, 0.1),
        theory_errors="flat",
    )
    with pytest.raises(InputError, match="take theory errors gaussian"):
        budget(problem, ["offset"])


def test_what_cannot_be_budgeted(make, tables, linear):
    with pytest.raises(UnknownNameError):
        budget(linear.problem, ["no_such_quantity"])
    loose = make(tables.measurement("a", "at_one", 1.3, 0.1))
    with pytest.raises(InputError, match="do not determine"):
        budget(loose, ["slope"])
    assert budget(loose, ["at_one"]).errors["at_one"] == pytest.approx(0.1, rel=1e-6)
