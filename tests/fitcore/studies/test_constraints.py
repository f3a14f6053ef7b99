"""Which entries make a constraint, which accompany it, and their profiles."""

from __future__ import annotations

import numpy as np
import pytest

from fitcore import Problem
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile
from fitcore.studies.constraints import divide, profile_constraint

APEX = ("wolfenstein_rhobar", "wolfenstein_etabar")


@pytest.fixture(scope="module")
def averages():
    problem = Problem.load("averages-2026")
    theta = find_minima(problem)[0].theta
    return problem, theta, divide(problem, theta, APEX, (0.1, 0.1))


def test_apex_of_the_published_averages(averages):
    _, _, division = averages
    assert [constraint.name for constraint in division.constraints] == [
        "magnitude_V_ub",
        "angle_gamma",
        "mixing_frequency_Bd",
        "mixing_frequency_Bd+mixing_frequency_Bs",
        "epsilon_K",
        "sine_2beta_ccs",
        "isospin_alpha",
    ]
    assert set(division.fixing) == {"V-ud", "V-us", "V-cd", "V-cs", "V-cb", "V-tb", "frequency-Bs"}
    every = {c.name: c for c in division.constraints}
    # theory inputs go where they are needed, and only there
    assert not any("bag" in name for name in every["angle_gamma"].company)
    assert {"bag-K", "decay-constant-K", "charm-mass"} <= set(every["epsilon_K"].company)
    assert "mixing-matrix-element-ratio" in every["mixing_frequency_Bd"].company
    # alone means alone
    assert "frequency-Bs" not in every["mixing_frequency_Bd"].company
    assert division.chi2 == pytest.approx(12.01, abs=0.01)
    assert every["isospin_alpha"].chi2 == pytest.approx(3.24, abs=0.02)


def test_shares_add_up_with_correlations(linear):
    from fitcore.studies.constraints import _shares

    theta = find_minima(linear.problem)[0].theta
    assert _shares(linear.problem, theta).sum() == pytest.approx(float(linear.problem.chi2(theta)), rel=1e-9)


def test_a_band_is_the_profile_of_its_entries(averages):
    problem, theta, division = averages
    gamma = next(c for c in division.constraints if c.name == "angle_gamma")
    grids = (np.linspace(0.10, 0.22, 13), np.linspace(0.28, 0.42, 15))
    (found,) = profile_constraint(problem, gamma, APEX, [grids], theta)
    assert not found.flagged.any()
    # the angle is arctan(eta / rho), whatever the rest: its own chi-square adds to that of its company alone
    angle = np.degrees(np.arctan2(grids[1][None, :], grids[0][:, None]))
    distance = angle - 66.4
    own = distance**2 / (2.7 * 2.8 + (2.7 - 2.8) * distance)
    company = problem.only(*gamma.company)
    start = np.array([theta[problem.parameter_names.index(name)] for name in company.parameter_names])
    rest = profile(company, APEX, grids, start=start)
    # the published gamma is the phase of V_ub in the standard frame, a hair off the triangle's angle
    assert found.chi2 == pytest.approx(rest.chi2 + own, abs=0.02)


def test_a_plane_of_derived_quantities(linear):
    theta = find_minima(linear.problem)[0].theta
    division = divide(linear.problem, theta, ("at_one", "slope"), (1.0, 1.0))
    names = {constraint.name for constraint in division.constraints}
    assert names == {"at_one", "at_two", "at_three", "slope"}
    assert division.fixing == ()
    only = next(c for c in division.constraints if c.name == "slope")
    grids = (np.linspace(1.0, 1.6, 5), np.linspace(0.8, 1.1, 7))
    (found,) = profile_constraint(linear.problem, only, ("slope",), [grids[1:]], theta)
    assert found.chi2 == pytest.approx(((grids[1] - 0.93) / 0.08) ** 2, abs=1e-6)
    # one line alone says nothing about another parameter
    assert profile_constraint(linear.problem, only, ("at_one", "slope"), [grids], theta) == []


def test_flat_theory_inputs_keep_their_ranges():
    problem = Problem.load("averages-2026", theory_errors="flat")
    theta = find_minima(problem)[0].theta
    division = divide(problem, theta, APEX, (0.1, 0.1))
    every = {constraint.name: constraint for constraint in division.constraints}
    assert "mixing_frequency_Bd+mixing_frequency_Bs" in every
    assert "mixing-matrix-element-ratio" in every["mixing_frequency_Bd"].company
    alone = problem.only(*every["epsilon_K"].entries, *every["epsilon_K"].company)
    bounds = {p.name: (p.lower, p.upper) for p in alone.parameters}
    assert bounds["bag_K"] == pytest.approx((0.7442, 0.7624))
