"""Facts every practitioner carries in the head: common practice, no source.

The numbers they are checked against are the installed `pdg` and `particle` databases and this catalogue. The
bounds are what the words say ("nearly four times", "about 20 times"), taken generously.
"""

from __future__ import annotations

import itertools

import numpy as np
import pdg
import pytest
from particle import Particle

from observables import catalogue

# common practice, no source
HBAR = 6.582119569e-25  # GeV s, for the database's widths; exact by definition of the SI


@pytest.fixture(scope="module")
def listings():
    return pdg.connect()


def mass(listings, identifier, unit="GeV"):
    return listings.get(identifier).best_summary().get_value(units=unit)


@pytest.fixture(scope="module")
def quark_masses(listings):
    identifiers = {"d": "Q001M", "s": "Q003M", "c": "Q004M", "b": "Q005M", "t": "Q007TP"}
    return {name: mass(listings, identifier) for name, identifier in identifiers.items()}


@pytest.mark.parametrize("name", ["rho(770)+", "Delta(1232)++", "K*(892)+"])
def test_strong_decays_take_about_1e_minus_24_seconds(name):
    # common practice, no source: rho, Delta and K* decay strongly, with widths of 50 to 150 MeV
    width = next(p.width for p in Particle.findall(lambda p: p.name == name)) / 1e3
    assert 1e-24 < HBAR / width < 2e-23


@pytest.mark.parametrize("name", ["pi+", "K+"])
def test_weak_decays_of_light_charged_mesons_take_about_1e_minus_8_seconds(name):
    # common practice, no source
    lifetime_ns = next(p.lifetime for p in Particle.findall(lambda p: p.name == name))
    assert 0.5e-8 < lifetime_ns * 1e-9 < 5e-8


def test_kaon_is_nearly_four_times_as_heavy_as_the_pion():
    # common practice, no source
    kaon, pion = (next(p.mass for p in Particle.findall(lambda p, n=n: p.name == n)) for n in ("K+", "pi+"))
    assert 3.4 < kaon / pion < 4.0
    if "mass_pi" in catalogue:
        assert catalogue["mass_K"].value / catalogue["mass_pi"].value == pytest.approx(kaon / pion, rel=1e-5)


def test_quark_mass_ratios(quark_masses):
    # common practice, no source; masses as the listings give them, each at its customary scale
    m = quark_masses
    assert 16 < m["s"] / m["d"] < 24  # about 20 times
    assert 10 < m["c"] / m["s"] < 15  # a bit more than ten times
    assert 3 < m["b"] / m["c"] < 4  # a little less than four times
    assert 35 < m["t"] / m["b"] < 45  # about forty times


def test_couplings_of_the_up_quark():
    # common practice, no source: the u-d coupling is almost five times the u-s coupling
    start = {name: catalogue[name].start for name in catalogue.names("parameter")}
    found = catalogue.compute(["magnitude_V_ud", "magnitude_V_us"], start)
    assert 4.0 < found["magnitude_V_ud"] / found["magnitude_V_us"] < 5.0


def random_unitary(size, rng):
    v, _ = np.linalg.qr(rng.normal(size=(size, size)) + 1j * rng.normal(size=(size, size)))
    return v


def quartets(v):
    """Imaginary parts of all rephasing-invariant products V_ij V_kl V_il^* V_kj^* with i != k, j != l."""
    n = len(v)
    rows = list(itertools.combinations(range(n), 2))
    return np.array([(v[i, j] * v[k, m] * (v[i, m] * v[k, j]).conj()).imag for i, k in rows for j, m in rows])


@pytest.mark.parametrize("seed", range(20))
def test_two_families_leave_no_physical_phase_and_three_leave_one(seed):
    # common practice, no source
    rng = np.random.default_rng(seed)
    assert np.abs(quartets(random_unitary(2, rng))).max() < 1e-15
    three = np.abs(quartets(random_unitary(3, rng)))
    assert three.max() > 1e-4
    assert np.ptp(three) < 1e-15  # nine invariants, one size: a single phase
    four = np.abs(quartets(random_unitary(4, rng)))
    assert np.ptp(four) > 1e-3  # with four families there are more


def test_catalogue_matrix_has_one_invariant():
    start = {name: catalogue[name].start for name in catalogue.names("parameter")}
    names = [f"V_{up}{down}" for up in "uct" for down in "dsb"]
    found = catalogue.compute([*names, "jarlskog"], start)
    v = np.array([found[name] for name in names]).reshape(3, 3)
    np.testing.assert_allclose(np.abs(quartets(v)), found["jarlskog"], rtol=1e-10)
