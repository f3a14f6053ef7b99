"""Indirect determinations: closed forms, overlaps, correlations, what is not determined, and published values.

Reference results: an independent calculation of the published inputs (own code with its own minimiser and its own
masses and constants, done before this package existed, never published).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from fitcore import Problem
from fitcore.studies.indirect import indirect
from observables.errors import InputError, UnknownNameError

# quantity: tension, from the reference results
REFERENCE_TENSIONS = {
    "magnitude_V_ud": 2.29,
    "isospin_alpha": 1.89,
    "magnitude_V_us": 1.72,
    "mixing_frequency_Bs": 1.53,
    "magnitude_V_cb": 1.28,
    "mixing_frequency_Bd": 1.27,
    "sine_2beta_ccs": 1.24,
    "angle_gamma": 0.24,
    "epsilon_K": 0.03,
}
REFERENCE_VALUES = {
    "isospin_alpha": (92.2, 1.5),
    "sine_2beta_ccs": (0.745, 0.026),
    "angle_gamma": (65.6, 1.6),
}
TOLERANCE = 0.08  # of the uncertainty: twice what two independent calculations differ by


@pytest.fixture(scope="module")
def averages():
    return Problem.load("averages-2026")


@pytest.fixture(scope="module")
def all_rows(averages):
    return {row.quantity: row for row in indirect(averages).rows}


@pytest.mark.parametrize("name", ["at_one", "at_two", "at_three", "slope"])
def test_linear_problem_equals_the_closed_form(linear, name):
    (row,) = indirect(linear.problem, [name]).rows
    own = [i for i, quantity in enumerate(linear.quantities) if quantity == name]
    everything = linear.closed_form(linear.quantities, linear.values, linear.covariance)
    rest = linear.closed_form(linear.quantities, linear.values, linear.covariance, leave_out=own)
    line = np.array(linear.lines[name])
    value, error = line @ rest.theta, np.sqrt(line @ rest.covariance @ line)
    assert row.value == pytest.approx(value, rel=1e-6)
    assert row.interval_68 == pytest.approx((value - error, value + error), abs=1e-6 * error)
    reach = np.sqrt(3.841458820694124) * error
    assert row.interval_95 == pytest.approx((value - reach, value + reach), abs=1e-6 * error)
    block = linear.covariance[np.ix_(own, own)]
    weight = np.linalg.inv(block)
    mean = weight.sum(axis=0) @ linear.values[own] / weight.sum()
    assert row.direct == pytest.approx(mean, rel=1e-6)
    assert row.direct_error == pytest.approx((weight.sum() ** -0.5,) * 2, rel=1e-6)
    spread = linear.values[own] - mean
    excess = everything.chi2 - rest.chi2 - spread @ weight @ spread
    assert row.tension == pytest.approx(np.copysign(np.sqrt(excess), mean - value), rel=1e-6)
    assert set(row.left_out) == {linear.ids[i] for i in own}
    assert row.flags == ()


def test_uncorrelated_tension_is_the_distance_in_errors(make, tables):
    problem = make(
        tables.measurement("own", "at_one", 1.7, 0.1),
        tables.measurement("a", "slope", 1.0, 0.05),
        tables.measurement("b", "offset", 0.3, 0.2),
    )
    (row,) = indirect(problem, ["at_one"]).rows
    assert row.tension == pytest.approx((1.7 - 1.3) / np.sqrt(0.1**2 + 0.05**2 + 0.2**2), rel=1e-7)


def test_overlapping_entries_are_left_out_from_both_sides(make, tables):
    entries = [
        tables.measurement("own", "at_one", 1.5, 0.1),
        tables.measurement("related", "at_two", 9.0, 0.1),
        tables.measurement("a", "slope", 1.0, 0.1),
        tables.measurement("b", "offset", 0.3, 0.1),
    ]
    problem = make(*entries)
    # a file that holds both is refused; inputs put together in Python may still do
    marked = tuple(replace(e, overlaps=("related",)) if e.id == "own" else e for e in problem.inputs.entries)
    both = problem.with_inputs(replace(problem.inputs, entries=marked))
    with_it = indirect(both, ["at_one"]).rows[0]
    without = indirect(make(entries[0], *entries[2:]), ["at_one"]).rows[0]
    assert with_it.left_out == ("own", "related")
    assert "overlap-left-out" in with_it.flags
    assert with_it.value == pytest.approx(without.value, rel=1e-8)
    assert with_it.tension == pytest.approx(without.tension, rel=1e-6)
    # the mark works the other way round too: it stands in one of the two entries
    other = indirect(both, ["at_two"]).rows[0]
    assert other.left_out == ("own", "related")


def test_what_nothing_else_determines_is_said(make, tables):
    problem = make(
        tables.measurement("own", "slope", 1.0, 0.1),
        tables.measurement("w", "width", 2.0, 0.1, "GeV"),
        tables.measurement("r", "root", 1.1, 0.1),
    )
    result = indirect(problem, ["slope", "width"])
    lonely, known = result.rows
    assert lonely.value is None
    assert lonely.tension is None
    assert "undetermined" in lonely.flags
    assert lonely.direct == 1.0
    assert known.value == pytest.approx(1.1**2 + 1.0, rel=1e-6)
    content = result.to_dict()["quantities"]["slope"]
    assert content["value"] is None
    assert content["interval_68"] is None


def test_a_quantity_without_measurement_has_no_tension(linear):
    (row,) = indirect(linear.problem, ["offset"]).rows
    best = linear.closed_form(linear.quantities, linear.values, linear.covariance)
    assert row.value == pytest.approx(best.theta[1], rel=1e-6)
    assert row.direct is None
    assert row.tension is None
    assert row.left_out == ()


def test_names_that_cannot_be_predicted(linear):
    with pytest.raises(UnknownNameError):
        indirect(linear.problem, ["no_such_quantity"])
    with pytest.raises(InputError):
        indirect(linear.problem, ["root"])  # nothing here says anything about the width


def test_flat_ranges_leave_out_the_entry_but_claim_no_tension(make, tables):
    entries = [
        tables.measurement("lattice", "slope", 1.0, 0.1, kind="theory"),
        tables.measurement("a", "at_one", 1.3, 0.1),
        tables.measurement("b", "at_two", 2.4, 0.1),
    ]
    (row,) = indirect(make(*entries, theory_errors="flat"), ["slope"]).rows
    assert row.left_out == ("lattice",)
    assert row.tension is None
    assert "direct-is-a-range" in row.flags
    assert row.value == pytest.approx(1.1, rel=1e-6)  # the difference of the two lines


@pytest.mark.parametrize("name", REFERENCE_TENSIONS)
def test_tensions_of_the_published_averages(all_rows, name):
    assert abs(all_rows[name].tension) == pytest.approx(REFERENCE_TENSIONS[name], abs=TOLERANCE)


@pytest.mark.parametrize("name", REFERENCE_VALUES)
def test_indirect_values_of_the_published_averages(all_rows, name):
    value, error = REFERENCE_VALUES[name]
    low, high = all_rows[name].interval_68
    assert all_rows[name].value == pytest.approx(
        value, abs=TOLERANCE * error + 0.5 * 10.0 ** -len(str(value).split(".")[1])
    )
    assert 0.5 * (high - low) == pytest.approx(error, rel=TOLERANCE)


def test_default_is_every_measured_quantity(averages, all_rows):
    measured = {entry.quantity for entry in averages.entries if entry.kind == "experiment"}
    assert set(all_rows) == measured
