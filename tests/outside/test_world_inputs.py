"""Entries of the decay-level set, inverted one by one, give the published magnitudes.

Each measured value is turned into the magnitude it measures with the set's own theory inputs at their central
values, so that a slip in a value, a unit or a correction of the file shows.
"""

from __future__ import annotations

import pytest

from likelihoods import load_inputs
from observables import catalogue

PDG_KL3 = "PDG 2026 review 67, V_ud, V_us, the Cabibbo angle and CKM unitarity, Table 67.1"
FLAG = "FLAG Review 2024, arXiv:2411.04268"

# entry, element, factor on the magnitude that the source quotes, published value, tolerance, source.
# The tolerance is the published uncertainty, or 0.1 % where source and set have the same inputs.
PUBLISHED = [
    ("superallowed-Ft", "V_ud", 1.0, 0.97367, 0.00005, "PDG 2026 review 12, Eq. 12.7"),
    ("branching-KL-pi-e-nu", "V_us", 0.9698, 0.2162, 0.0005, PDG_KL3),
    ("branching-KL-pi-mu-nu", "V_us", 0.9698, 0.2165, 0.0006, PDG_KL3),
    ("branching-KS-pi-e-nu", "V_us", 0.9698, 0.2169, 0.0008, PDG_KL3),
    ("branching-K-pi0-e-nu", "V_us", 0.9698, 0.2169, 0.0006, PDG_KL3),
    ("branching-K-pi0-mu-nu", "V_us", 0.9698, 0.2168, 0.0010, PDG_KL3),
    ("ratio-K-pi-mu-nu", "V_us", 1 / 0.97431, 0.23126, 0.00050, FLAG + ", Eqs. 65 and 76: |V_us/V_ud|"),
    ("branching-D-mu-nu", "V_cd", 1.0, 0.2229, 0.0064, FLAG + ", section on D mesons: average"),
    ("branching-Ds-mu-nu", "V_cs", 1.0, 0.976, 0.010, "PDG 2026 review 12, section 12.2.4: leptonic"),
    ("branching-Ds-tau-nu", "V_cs", 1.0, 0.976, 0.010, "PDG 2026 review 12, section 12.2.4: leptonic"),
    ("product-D-K", "V_cs", 1.0, 0.9592, 0.0050, FLAG + ", Eqs. 142-152: semileptonic"),
    ("product-D-pi", "V_cd", 1.0, 0.2245, 0.0033, FLAG + ", Eqs. 142-152: semileptonic"),
    ("branching-Bu-tau-nu", "V_ub", 1.0, 4.16e-3, 0.35e-3, "PDG 2026 review 12, section 12.2.7: B -> tau nu"),
]


@pytest.fixture(scope="module")
def entries():
    return {entry.id: entry for entry in load_inputs("world-2026").entries}


def magnitude(entries, name, element):
    """Solve prediction = measured for one magnitude; every prediction is a pure power of it."""
    values = {
        "wolfenstein_lambda": 0.22517,
        "wolfenstein_A": 0.826,
        "wolfenstein_rhobar": 0.1576,
        "wolfenstein_etabar": 0.3556,
    }
    values |= {
        entry.quantity: entry.value
        for entry in entries.values()
        if catalogue[entry.quantity].kind == "parameter"
    }
    magnitude = f"magnitude_{element}"
    entry = entries[name]
    start = float(catalogue.compute([magnitude], values)[magnitude])
    one, two = (
        float(
            catalogue.compute([entry.quantity], values, overrides={magnitude: start * step})[entry.quantity]
        )
        for step in (1.0, 2.0)
    )
    power = {0.25: -2, 2.0: 1, 4.0: 2}[round(two / one, 9)]
    return start * (entry.value / one) ** (1 / power)


@pytest.mark.parametrize(("name", "element", "factor", "published", "tolerance", "source"), PUBLISHED)
def test_entry_gives_the_published_magnitude(entries, name, element, factor, published, tolerance, source):
    assert factor * magnitude(entries, name, element) == pytest.approx(published, abs=tolerance), source


def test_kaon_modes_agree_with_the_published_table_to_a_permille(entries):
    """Same inputs on both sides: only the phase-space integrals and rounding may differ."""
    for name, _, factor, published, _, source in PUBLISHED[1:6]:
        assert factor * magnitude(entries, name, "V_us") == pytest.approx(published, rel=1.2e-3), (
            name,
            source,
        )


def test_rate_quotient_is_made_of_the_listed_numbers(entries):
    """K -> mu nu over pi -> mu nu from the three numbers of the PDG database that its note names."""
    pytest.importorskip("pdg")
    from likelihoods.provenance import pdg_value

    rate, lifetime, branching = (pdg_value(name) for name in ("S010W1", "S008T", "S008.1"))
    ratio = rate[0] * lifetime[0] / branching[0]
    relative = sum((number[1] / number[0]) ** 2 for number in (rate, lifetime, branching)) ** 0.5
    assert entries["ratio-K-pi-mu-nu"].value == pytest.approx(ratio, abs=0.00005)
    assert entries["ratio-K-pi-mu-nu"].plus == pytest.approx(ratio * relative, abs=0.00005)


def test_pairs_of_inclusive_and_exclusive_values_give_the_review_average(entries):
    """PDG 2026 review 12: V_cb 40.7(1.3)e-3 with scale factor 3.7, V_ub 3.89(16)e-3 with 1.1.

    The factors here are computed from the quoted digits, so the errors may differ by a tenth.
    """
    for element, value, error in [("V-cb", 40.7e-3, 1.3e-3), ("V-ub", 3.89e-3, 0.16e-3)]:
        pair = [entries[f"{element}-inclusive"], entries[f"{element}-exclusive"]]
        weights = [1 / entry.plus**2 for entry in pair]
        mean = sum(w * entry.value for w, entry in zip(weights, pair, strict=True)) / sum(weights)
        assert mean == pytest.approx(value, abs=0.15 * error)
        assert sum(weights) ** -0.5 == pytest.approx(error, rel=0.1)


def test_one_of_the_pair_alone_is_not_inflated():
    for dropped in ("inclusive", "exclusive"):
        left = load_inputs("world-2026").select(without=[dropped])
        assert all(entry.inflate == 1 for entry in left.entries)
