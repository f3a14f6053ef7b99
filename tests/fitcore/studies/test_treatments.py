"""Theory errors as given, Gaussian and flat: closed forms of a straight line."""

from __future__ import annotations

import math

import pytest

from fitcore.studies.treatments import compare_treatments


@pytest.fixture
def compared(make, tables):
    entries = [
        tables.measurement("lattice", "slope", 1.0, 0.1, kind="theory"),
        tables.measurement("a", "at_one", 1.3, 0.05),
    ]
    problems = {way: make(*entries, theory_errors=way) for way in ("as-given", "gaussian", "flat")}
    return {one.name: one for one in compare_treatments(problems, ["offset", "at_one"])}


def test_gaussian_and_as_given_agree_without_ranges(compared):
    for way in ("as-given", "gaussian"):
        row = compared[way].rows["offset"]
        assert row.value == pytest.approx(0.3, abs=1e-6)
        error = math.hypot(0.1, 0.05)
        assert row.interval_68 == pytest.approx((0.3 - error, 0.3 + error), abs=1e-4)
        assert row.plateau is None


def test_flat_adds_the_range_linearly_and_says_plateau(compared):
    row = compared["flat"].rows["offset"]
    assert row.interval_68 == pytest.approx((0.3 - 0.15, 0.3 + 0.15), abs=1e-3)
    assert row.interval_95 == pytest.approx((0.3 - 0.198, 0.3 + 0.198), abs=1e-3)
    assert row.plateau is not None
    # within 0.01 of the minimum: the range and a tenth of the measured error
    assert row.plateau == pytest.approx((0.3 - 0.105, 0.3 + 0.105), abs=1e-3)
    assert compared["flat"].rows["at_one"].plateau is None
    assert compared["flat"].chi2 == pytest.approx(0.0, abs=1e-8)
    assert compared["flat"].to_dict()["quantities"]["offset"]["plateau"] == list(row.plateau)


def test_halfwidths_are_added_in_each_way(make, tables):
    entries = [
        tables.measurement("a", "slope", 1.0, 0.3, flat_halfwidth=0.4, kind="theory"),
        tables.measurement("b", "offset", 0.2, 0.1),
    ]
    rows = {
        one.name: one.rows["slope"]
        for one in compare_treatments(
            {way: make(*entries, theory_errors=way) for way in ("as-given", "gaussian", "flat")}, ["slope"]
        )
    }
    half = {way: 0.5 * (row.interval_68[1] - row.interval_68[0]) for way, row in rows.items()}
    assert half["gaussian"] == pytest.approx(0.5, rel=1e-3)  # in quadrature
    assert half["as-given"] == pytest.approx(0.7, rel=1e-3)  # a range on top of a Gaussian
    assert half["flat"] == pytest.approx(0.7, rel=1e-2)  # all of it a range
