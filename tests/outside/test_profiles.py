"""Profiles and indirect determinations of the published averages against results that nobody computed with this code.

Sources: PDG 2026, review 12 "CKM Quark-Mixing Matrix" (A. Ceccucci, Z. Ligeti, Y. Sakai, revised March 2026), in
F. Takahashi et al. (PDG), Int. J. Mod. Phys. A 41, 2630011 (2026). "Reference" is an independent calculation of the
same inputs (own code with its own minimiser and its own masses and constants, done before this package existed, never
published); two such calculations differ by 0.04 of the uncertainty and 0.04 in chi-square, and twice that is asked.
MIGRAD is that of iminuit (H. Dembinski et al.), from its own start.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from fitcore import Problem
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile, profile_intervals
from fitcore.minimise.regions import find_regions
from fitcore.studies.indirect import indirect
from fitcore.studies.treatments import compare_treatments

APEX = ("wolfenstein_rhobar", "wolfenstein_etabar")
CP_EVEN = ("magnitude", "oscillation", "lattice", "mass", "perturbative")
# parameter: value, plus, minus with theory errors as flat ranges
FLAT_REFERENCE = {
    "wolfenstein_lambda": (0.22522, 0.00068, 0.00068),
    "wolfenstein_A": (0.8225, 0.0201, 0.0056),
    "wolfenstein_rhobar": (0.1562, 0.0079, 0.0033),
    "wolfenstein_etabar": (0.3560, 0.0063, 0.0063),
}
FLAT_CHI2 = 10.54
TOLERANCE = 0.08


@pytest.fixture(scope="module")
def averages():
    return Problem.load("averages-2026")


@pytest.fixture(scope="module")
def best(averages):
    return find_minima(averages)[0].theta


@pytest.fixture(scope="module")
def flat():
    """Flat theory errors as the reference took them: the top mass is a measurement and stays Gaussian."""
    return Problem.load("averages-2026", theory_errors="flat")


# -- two regions without CP violation in the inputs ----------------------------------------------------------------


@pytest.fixture(scope="module")
def cp_even():
    # epsilon_K is CP violation itself; its theory inputs do no harm
    return Problem.load("averages-2026", only=CP_EVEN)


def test_cp_even_inputs_give_two_mirrored_regions(cp_even):
    minima = find_minima(cp_even)
    assert minima[0].chi2 == pytest.approx(7.405, abs=2 * 0.04)
    assert minima[1].chi2 == pytest.approx(minima[0].chi2, abs=1e-8)
    place = [cp_even.parameter_names.index(name) for name in APEX]
    apexes = sorted(tuple(m.theta[place]) for m in minima[:2])
    assert apexes[0][0] == pytest.approx(apexes[1][0], abs=1e-5)
    assert apexes[0][1] == pytest.approx(-apexes[1][1], abs=1e-5)
    assert apexes[0][0] == pytest.approx(0.172, abs=0.002)
    assert abs(apexes[0][1]) == pytest.approx(0.362, abs=0.002)

    grids = (np.linspace(-0.1, 0.45, 45), np.linspace(-0.6, 0.6, 81))
    found = profile(cp_even, APEX, grids, start=minima[0].theta)
    assert found.chi2 == pytest.approx(found.chi2[:, ::-1], abs=1e-5)
    regions = find_regions(found, 2.296)
    assert len(regions) == 2
    assert all(region.closed for region in regions)
    upper, lower = sorted((region.vertices for region in regions), key=lambda line: -line[:, 1].mean())
    assert upper[:, 1].min() > 0 > lower[:, 1].max()
    for axis, sign in ((0, 1.0), (1, -1.0)):
        mirrored = sign * lower[:, axis]
        assert (upper[:, axis].min(), upper[:, axis].max()) == pytest.approx(
            (mirrored.min(), mirrored.max()), abs=1e-3
        )


# -- never above MIGRAD, never below the true minimum ------------------------------------------------------------------


def migrad_at(problem, best, point):
    """MIGRAD over the other parameters, from the best fit, with the exact gradient and a tight tolerance."""
    from iminuit import Minuit

    names = list(problem.parameter_names)
    held = [names.index(name) for name in APEX]
    free = [i for i in range(len(names)) if i not in held]
    scales = np.array([p.scale for p in problem.parameters])
    start = best.copy()
    start[held] = point

    def whole(x):
        theta = start.copy()
        theta[free] += np.asarray(x) * scales[free]
        return theta

    engine = Minuit(
        lambda x: float(problem.chi2(whole(x))),
        np.zeros(len(free)),
        grad=lambda x: (problem.linearise(whole(x)[None]).gradient[0] * scales)[free],
    )
    engine.errordef = Minuit.LEAST_SQUARES
    engine.strategy = 1
    engine.tol = 1e-3
    engine.migrad(ncall=50_000)
    return float(engine.fval)


def check_against_migrad(problem, best, size, seed):
    grids = (np.linspace(0.02, 0.30, 100), np.linspace(0.25, 0.46, 100))
    found = profile(problem, APEX, grids, start=best)
    assert not found.flagged.any()
    rng = np.random.default_rng(seed)
    for i, j in rng.integers(0, 100, (size, 2)):
        reference = migrad_at(problem, best, (grids[0][i], grids[1][j]))
        assert found.chi2[i, j] <= reference + 0.01
        # what the profile claims is a chi-square that a point with these values really has
        theta = found.parameters[i, j]
        assert problem.chi2(theta) == pytest.approx(found.chi2[i, j], abs=1e-9)
        held = [problem.parameter_names.index(name) for name in APEX]
        assert theta[held] == pytest.approx((grids[0][i], grids[1][j]), abs=1e-9)


def test_never_above_migrad(averages, best):
    check_against_migrad(averages, best, 12, seed=1)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["averages-2026", "world-2026"])
def test_never_above_migrad_at_many_points(name):
    problem = Problem.load(name)
    check_against_migrad(problem, find_minima(problem)[0].theta, 200, seed=2)


# -- flat theory errors ------------------------------------------------------------------------------------------------


def assert_as_reference(name, low, high):
    centre, plus, minus = FLAT_REFERENCE[name]
    unit = TOLERANCE * 0.5 * (plus + minus)
    rounding = 0.5 * 10.0 ** -(len(str(centre)) - 2)
    assert high == pytest.approx(centre + plus, abs=unit + 2 * rounding)
    assert low == pytest.approx(centre - minus, abs=unit + 2 * rounding)


def test_flat_theory_errors_in_fits(flat):
    (treatment,) = compare_treatments({"flat": flat}, FLAT_REFERENCE)
    assert treatment.chi2 == pytest.approx(FLAT_CHI2, abs=2 * 0.04)
    best = find_minima(flat)[0].theta
    for name, row in treatment.rows.items():
        assert_as_reference(name, *row.interval_68)
        # near a plateau the place of the minimum says little: the reference's lies at the same chi-square
        centre = FLAT_REFERENCE[name][0]
        found = profile(flat, name, np.array([centre - 1e-6, centre]), start=best)
        assert found.delta_chi2[1] < 0.04


def test_flat_theory_errors_in_profiles(flat):
    minima = find_minima(flat)
    for name, (centre, plus, minus) in FLAT_REFERENCE.items():
        grid = np.linspace(centre - 2.5 * minus, centre + 2.5 * plus, 41)
        found = profile(flat, name, grid, start=minima[0].theta, minima=[m.theta for m in minima[1:4]])
        ((low, high, low_open, high_open),) = found.interval(0.683)
        assert (low_open, high_open) == (False, False)
        assert_as_reference(name, low, high)


def test_flat_theory_errors_in_pseudo_data(flat):
    """Ranges are never thrown; the best fit of pseudo-data at the prediction lies back where it came from."""
    best = find_minima(flat)[0].theta
    thrown = flat.pseudo_data(best, 200, rng=3)
    ranged = {e.id for e in flat.inputs.entries if e.kind == "theory"}
    assert not ranged & {entry.id for entry in flat.entries}
    assert thrown.shape == (200, flat.n_entries)
    pulls = (thrown - flat.predictions(best)) / np.array([math.sqrt(e.plus * e.minus) for e in flat.entries])
    assert abs(pulls.mean()) < 5.0 / math.sqrt(pulls.size)
    assert pulls.std() == pytest.approx(1.0, abs=5.0 / math.sqrt(2 * pulls.size))
    # a refit can only gain, and with the prediction itself as data nothing is left
    assert find_minima(flat, data=thrown[0])[0].chi2 <= float(flat.chi2(best[None], thrown[:1])[0]) + 1e-9
    assert find_minima(flat, data=flat.predictions(best))[0].chi2 == pytest.approx(0.0, abs=1e-9)


# -- the published review ----------------------------------------------------------------------------------------------


def test_mixing_phase_of_Bs_from_everything_else(averages):
    # PDG 2026, review 12, section 12.4: 2 beta_s = 0.03768 +0.00076 -0.00075; phi_s is no input of this set
    assert "phase_phi_s" not in {entry.quantity for entry in averages.entries}
    (row,) = indirect(averages, ["phase_phi_s"]).rows
    assert -row.value == pytest.approx(0.03768, abs=0.00075)
    assert 0.5 * (row.interval_68[1] - row.interval_68[0]) == pytest.approx(0.00076, rel=0.25)


def test_elements_from_frequencies_alone():
    # PDG 2026, review 12, section 12.2.6: |V_td| = 8.6(2)e-3, |V_ts| = 41.5(9)e-3, |V_td/V_ts| = 0.207(1)(3)
    alone = Problem.load(
        "averages-2026", only=["V-ud", "V-us", "oscillation", "lattice", "mass", "perturbative"]
    )
    names = ["magnitude_V_td", "magnitude_V_ts", "magnitude_ratio_V_td_V_ts"]
    rows = {row.quantity: row for row in indirect(alone, names).rows}
    for name, value, error in (
        (names[0], 8.6e-3, 0.2e-3),
        (names[1], 41.5e-3, 0.9e-3),
        (names[2], 0.207, 0.003),
    ):
        assert rows[name].value == pytest.approx(value, abs=error)
        assert 0.5 * (rows[name].interval_68[1] - rows[name].interval_68[0]) == pytest.approx(error, rel=0.25)


def test_angles_measured_independently_add_up(averages):
    # PDG 2026, review 12, section 12.3: alpha + beta + gamma = 173 +5 -4 degrees
    entries = {entry.id: entry for entry in averages.entries}
    alpha, gamma = entries["alpha-average"], entries["gamma-average"]
    beta_only = averages.only("sine-2beta", "magnitude")
    near = find_minima(averages)[0].theta
    start = [near[averages.parameter_names.index(name)] for name in beta_only.parameter_names]
    table = profile_intervals(beta_only, np.array(start), ["angle_beta"], delta_chi2=(1.0,))
    ((low, high, _, _),) = table["angle_beta"]
    beta = math.degrees(0.5 * math.asin(entries["sine-2beta"].value))
    assert 0.5 * (low + high) == pytest.approx(beta, abs=0.1)
    total = alpha.value + beta + gamma.value
    plus = math.sqrt(alpha.plus**2 + (high - beta) ** 2 + gamma.plus**2)
    minus = math.sqrt(alpha.minus**2 + (beta - low) ** 2 + gamma.minus**2)
    assert total == pytest.approx(173.0, abs=0.5)
    assert plus == pytest.approx(5.0, abs=0.5)
    assert minus == pytest.approx(4.0, abs=0.5)
    assert abs(total - 180.0) < 2 * plus
