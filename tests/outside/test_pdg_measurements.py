"""Every published entry with a PDG identifier equals the PDG database to the quoted digits.

Source: the listings of the Particle Data Group, F. Takahashi et al., Int. J. Mod. Phys. A 41, 2630011 (2026),
read through the database that the package `pdg` carries; nothing here is typed in by hand.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path

import pytest

import likelihoods
from likelihoods import load_inputs
from likelihoods.provenance import compare_with_pdg, pdg_value
from observables.errors import InputError

pytest.importorskip("pdg", reason="the optional package with the PDG database")

SETS = sorted(path.stem for path in (Path(likelihoods.__file__).parent / "published").glob("*.toml"))
ROWS = [(name, row) for name in SETS for row in compare_with_pdg(load_inputs(name))]


@pytest.mark.parametrize(("name", "row"), ROWS, ids=[f"{name}-{row.id}" for name, row in ROWS])
def test_entry_equals_the_database(name, row):
    assert row.equal, row


def test_edition_is_the_one_the_sets_are_named_after():
    assert {row.edition for _, row in ROWS} == {"2026"}


def test_each_set_is_covered():
    """An empty list of comparisons would prove nothing."""
    counted = {name: sum(1 for owner, _ in ROWS if owner == name) for name in SETS}
    assert counted["averages-2026-tree"] == 1
    assert counted["averages-2026"] == 4
    assert counted["world-2026"] >= 25


def entry(identifier="frequency-Bd"):
    return next(entry for entry in load_inputs("averages-2026").entries if entry.id == identifier)


@pytest.mark.parametrize(
    "change", [{"value": 0.5069}, {"error": (0.0018, 0.0018)}, {"error": (0.0019, 0.0021)}, {"unit": "1/s"}]
)
def test_a_slip_of_the_last_digit_is_found(change):
    """Negative control: value, error, one side of an error, and the unit."""
    good = entry()
    assert compare_with_pdg([good])[0].equal
    assert not compare_with_pdg([replace(good, declared=replace(good.declared, **change))])[0].equal


@pytest.mark.parametrize(
    ("identifier", "said"),
    [
        ("S042XYZ", "no such identifier"),
        ("S042", "no such identifier"),
        ("S013T", "cannot be converted"),
        ("S041.183", "limit"),
    ],
    ids=["unknown", "a particle", "other unit", "a limit"],
)
def test_identifiers_that_cannot_be_compared(identifier, said):
    row = compare_with_pdg([replace(entry("sine-2beta"), pdg=identifier)])[0]
    assert not row.equal
    assert said in row.comment


def test_mass_difference_comes_as_a_frequency():
    value, plus, minus, unit = pdg_value("S042D")
    assert (value, plus, minus) == pytest.approx((0.5068e12, 0.0019e12, 0.0019e12))
    assert unit == "1/s"


def test_recommended_value_is_the_first_one():
    """K_S lifetime: with CPT first, without second, the plain average third."""
    assert pdg_value("S012T")[0] == pytest.approx(8.9543e-11, abs=0.0001e-11)


def test_missing_package_is_said_plainly(monkeypatch):
    monkeypatch.setitem(sys.modules, "pdg", None)
    with pytest.raises(InputError, match=r"optional package `pdg`.*install"):
        compare_with_pdg(load_inputs("averages-2026"))
    with pytest.raises(InputError, match="optional package"):
        pdg_value("S042D")


def test_unknown_identifier_is_said_plainly():
    with pytest.raises(InputError, match='"S042XYZ"'):
        pdg_value("S042XYZ")
