"""Every constant with a PDG identifier equals the printed value of the listings, and masses agree with
`particle`.

Sources: the database of the Particle Data Group's listings (package `pdg`); masses of the package
`particle`, which follow an earlier edition of the same listings.
"""

from __future__ import annotations

import re

import numpy as np
import pytest

from observables import catalogue

pdg = pytest.importorskip("pdg", reason="the database of the Particle Data Group comes with the package pdg")

IDENTIFIED = [name for name in catalogue.names("constant") if catalogue[name].pdg]
HBAR = catalogue["reduced_planck_constant"].value

#: Database unit -> catalogue unit, and the factor between them.
FACTORS = {
    ("MeV", "GeV"): 1e-3,
    ("GeV", "GeV"): 1.0,
    ("degrees", "deg"): 1.0,
    ("hbar s**-1", "GeV"): HBAR,
    ("s", "s"): 1.0,
}

#: Mass -> identifier in the Monte Carlo numbering scheme, for `particle`.
NUMBERS = {
    "mass_W": 24,
    "mass_Z": 23,
    "mass_e": 11,
    "mass_mu": 13,
    "mass_tau": 15,
    "mass_pi": 211,
    "mass_pi0": 111,
    "mass_K": 321,
    "mass_K0": 311,
    "mass_D": 411,
    "mass_D0": 421,
    "mass_Ds": 431,
    "mass_Bu": 521,
    "mass_Bd": 511,
    "mass_Bs": 531,
    "mass_Bc": 541,
    "mass_n": 2112,
    "mass_p": 2212,
}


@pytest.fixture(scope="module")
def database():
    return pdg.connect()


def printed(summary):
    """Value and error of a summary row as printed, with half a unit of the last digit; in the row's unit."""
    match = re.match(r"\(?([\d.]+)\+-([\d.]+)\)?(?:E(-?\d+))?$", summary.display_value_text)
    assert match, f"cannot read {summary.display_value_text!r}"
    value, error, exponent = match.groups()
    scale = 10.0 ** int(exponent or 0)
    step = 10.0 ** -len(value.partition(".")[2]) * scale
    value, error = float(value) * scale, float(error) * scale
    # the text may be in a multiple of the row's unit (a power of ten); the row's own value tells which
    power = 10.0 ** round(np.log10(summary.value / value))
    return value * power, error * power, 0.5 * step * power


@pytest.mark.parametrize("name", IDENTIFIED)
def test_constant_equals_the_listings(name, database):
    node = catalogue[name]
    summary = next(iter(database.get(node.pdg).summary_values()))
    value, error, half = printed(summary)
    factor = FACTORS[summary.units, node.unit]
    # equal as printed: no more than rounding in binary apart
    assert node.value == pytest.approx(value * factor, rel=1e-13)
    assert node.error == pytest.approx(error * factor, rel=1e-9)
    # and the printed value is the database's own
    assert abs(summary.value - value) <= half * (1 + 1e-9)


def test_enough_constants_are_covered():
    assert len(IDENTIFIED) >= 20
    assert {name for name in catalogue.names("constant") if name.startswith("mass_")} <= set(IDENTIFIED)


@pytest.mark.parametrize("name", NUMBERS)
def test_masses_agree_with_particle(name):
    """Different editions of one source: the values agree within their uncertainties, combined."""
    particle = pytest.importorskip("particle")
    found = particle.Particle.from_pdgid(NUMBERS[name])
    node = catalogue[name]
    error = max(found.mass_upper or 0.0, found.mass_lower or 0.0) * 1e-3
    assert abs(found.mass * 1e-3 - node.value) <= np.hypot(error, node.error)


def test_defined_constants_agree_with_scipy():
    """hbar and alpha of CODATA (package scipy); G_F of the table there, to its uncertainty."""
    from scipy import constants

    hbar = constants.physical_constants["reduced Planck constant in eV s"][0] * 1e-9
    assert catalogue["reduced_planck_constant"].value == pytest.approx(hbar, rel=1e-9)
    alpha = constants.physical_constants["fine-structure constant"]
    assert catalogue["fine_structure_constant"].value == pytest.approx(alpha[0], abs=3 * alpha[2])
    fermi = constants.physical_constants["Fermi coupling constant"]
    assert catalogue["fermi_constant"].value == pytest.approx(fermi[0], abs=2 * fermi[2])


def test_common_practice_sizes():
    """Common practice, no source: the kaon is nearly four times as heavy as the pion."""
    assert 3.4 < catalogue["mass_K"].value / catalogue["mass_pi"].value < 4.0
