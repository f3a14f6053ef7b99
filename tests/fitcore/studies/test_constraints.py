"""Which entries make a constraint, which accompany it, and their profiles."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import optimize

from fitcore import Problem
from fitcore.minimise.minima import find_minima
from fitcore.studies.constraints import divide, problem_of, profile_constraint

APEX = ("wolfenstein_rhobar", "wolfenstein_etabar")


@pytest.fixture(scope="module")
def averages():
    problem = Problem.load("averages-2026")
    theta = find_minima(problem)[0].theta
    return problem, theta, divide(problem, theta, APEX, (0.1, 0.1))


def test_apex_of_the_published_averages(averages):
    problem, _, division = averages
    assert [constraint.name for constraint in division.constraints] == [
        "magnitude_V_ub",
        "angle_gamma",
        "mixing_frequency_Bd",
        "mixing_frequency_Bd+mixing_frequency_Bs",
        "epsilon_K",
        "sine_2beta_ccs",
        "isospin_alpha",
    ]
    # the frequency of the B_s goes with that of the B_d and fixes nothing
    assert set(division.fixing) == {"V-ud", "V-us", "V-cd", "V-cs", "V-cb", "V-tb"}
    assert [held.parameter for held in division.held] == ["wolfenstein_lambda", "wolfenstein_A"]
    every = {c.name: c for c in division.constraints}
    # theory inputs go where they are needed, and only there
    assert not any("bag" in name for name in every["angle_gamma"].company)
    assert {"bag-K", "decay-constant-K", "charm-mass"} <= set(every["epsilon_K"].company)
    assert "mixing-matrix-element-ratio" in every["mixing_frequency_Bd"].company
    # alone means alone
    assert "frequency-Bs" not in every["mixing_frequency_Bd"].company
    assert every["angle_gamma"].company == every["angle_gamma"].held == ()
    assert problem_of(problem, every["angle_gamma"]).n_parameters == 2
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
    # the angle is arctan(eta / rho), whatever the rest
    angle = np.degrees(np.arctan2(grids[1][None, :], grids[0][:, None]))
    distance = angle - 66.4
    assert found.chi2 == pytest.approx(distance**2 / (2.7 * 2.8 + (2.7 - 2.8) * distance), abs=1e-6)


def test_what_is_held_is_what_the_fixing_entries_say(averages):
    """lambda and A with the apex at the best fit, from those entries alone: an independent minimisation."""
    problem, theta, division = averages
    fixing = problem.only(*division.fixing)
    at = {name: fixing.parameter_names.index(name) for name in fixing.parameter_names}
    held = [at[h.parameter] for h in division.held]
    best = dict(zip(problem.parameter_names, theta, strict=True))
    point = np.array([best[name] for name in fixing.parameter_names])

    def chi2(x):
        there = point.copy()
        there[held] = x * scale
        return float(fixing.chi2(there))

    scale = np.array([h.value for h in division.held])
    found = optimize.minimize(chi2, np.ones(2), method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-12})
    values = found.x * scale
    errors = np.array([h.error for h in division.held])
    assert values == pytest.approx(scale, abs=float(1e-3 * errors.min()))
    # Delta chi-square of one at one standard deviation of each, the other one minimised
    for k, error in enumerate(errors):
        moved = values[k] + error

        def other(y, k=k, moved=moved):
            x = np.empty(2)
            x[k], x[1 - k] = moved / scale[k], y
            return chi2(x)

        least = optimize.minimize_scalar(other, bracket=(0.99, 1.01)).fun
        assert least - found.fun == pytest.approx(1.0, abs=0.02)


@pytest.mark.parametrize("inputs", ["averages-2026", "world-2026", "tidewater"])
def test_every_band_follows_its_own_chi_square(inputs):
    """Each band against the chi-square of its entries alone, from the formulas, in the frame and far around it."""
    problem = Problem.load(inputs)
    theta = find_minima(problem)[0].theta
    best = [theta[problem.parameter_names.index(name)] for name in APEX]
    division = divide(problem, theta, APEX, (0.13, 0.10))
    held = {h.parameter: h for h in division.held}
    lam, a = held["wolfenstein_lambda"], held["wolfenstein_A"]
    covariance = np.array([[np.dot(x.sources, y.sources) for y in (lam, a)] for x in (lam, a)])
    weight = np.linalg.inv(covariance)
    frame = tuple(np.linspace(b - h, b + h, 17) for b, h in zip(best, (0.13, 0.10), strict=True))
    wide = (np.linspace(-0.15, 1.1, 15), np.linspace(0.03, 0.55, 14))
    compared = []
    for constraint in division.constraints:
        name = constraint.name
        if name not in OWN and name != "magnitude_V_ub":
            continue
        entries = [e for e in problem.entries if e.id in constraint.entries]
        place = [problem.inputs.ids.index(e.id) for e in entries]
        inverse = np.linalg.inv(problem.inputs.correlation_matrix()[np.ix_(place, place)])
        for found in profile_constraint(problem, constraint, APEX, [frame, wide], theta):
            rho, eta = np.meshgrid(*found.grids, indexing="ij")
            if name in OWN:
                own = _chi2(entries, inverse, OWN[name](rho, eta))
            else:
                # lambda and A on a fine lattice of standard deviations: nothing but arithmetic
                sigma = np.linalg.cholesky(covariance)
                own = np.full(rho.shape, np.inf)
                for s in np.linspace(-6, 6, 61):
                    for t in np.linspace(-6, 6, 61):
                        step = sigma @ (s, t)
                        value = _magnitude_vub(rho, eta, lam.value + step[0], a.value + step[1])
                        own = np.minimum(own, _chi2(entries, inverse, value) + step @ weight @ step)
            near = np.isfinite(own) & (own - own.min() < 8.0)
            assert not found.flagged[near].any()
            difference = (found.chi2 - found.chi2.min()) - (own - own.min())
            assert np.abs(difference[near]).max() < 0.1, (name, found.grids)
        compared.append(name)
    assert {"magnitude_V_ub", "angle_gamma", "sine_2beta_ccs", "isospin_alpha"} <= set(compared)


def _chi2(entries, inverse, predicted):
    """u^T R^-1 u with the asymmetric Gaussian of R. Barlow (arXiv:physics/0406120), inf beyond its reach."""
    residuals = []
    for entry in entries:
        distance = predicted - entry.value
        if entry.period:
            distance = (distance + entry.period / 2) % entry.period - entry.period / 2
        variance = entry.plus * entry.minus + (entry.plus - entry.minus) * distance
        residuals.append(np.where(variance > 0, distance / np.sqrt(np.abs(variance)), np.inf))
    u = np.array(residuals)
    with np.errstate(invalid="ignore"):
        total = np.einsum("i...,ij,j...->...", u, inverse, u)
    return np.where(np.isfinite(total), total, np.inf)


def _magnitude_vub(rho, eta, lam, a):
    """Equation 12.5 of the CKM review (Particle Data Group): V_ub = A lambda^3 (rho + i eta), exactly."""
    apex = rho + 1j * eta
    exact = apex * np.sqrt(1 - a**2 * lam**4) / (np.sqrt(1 - lam**2) * (1 - a**2 * lam**4 * apex))
    return a * lam**3 * np.abs(exact)


# angles of the triangle (0, 0), (1, 0), (rho-bar, eta-bar)
OWN = {
    "angle_gamma": lambda rho, eta: np.degrees(np.arctan2(eta, rho)),
    "sine_2beta_ccs": lambda rho, eta: np.sin(2 * np.arctan2(eta, 1 - rho)),
    "cosine_2beta_ccs": lambda rho, eta: np.cos(2 * np.arctan2(eta, 1 - rho)),
    "isospin_alpha": lambda rho, eta: 180 - np.degrees(np.arctan2(eta, rho) + np.arctan2(eta, 1 - rho)),
}


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
    # alone it says nothing about the other quantity: a straight strip, to the bounds of the plane
    (found,) = profile_constraint(linear.problem, only, ("at_one", "slope"), [grids], theta)
    own = ((grids[1] - 0.93) / 0.08) ** 2
    assert found.chi2 == pytest.approx(np.tile(own, (5, 1)), abs=1e-4)


def test_flat_theory_inputs_keep_their_ranges():
    problem = Problem.load("averages-2026", theory_errors="flat")
    theta = find_minima(problem)[0].theta
    division = divide(problem, theta, APEX, (0.1, 0.1))
    every = {constraint.name: constraint for constraint in division.constraints}
    assert "mixing_frequency_Bd+mixing_frequency_Bs" in every
    assert "mixing-matrix-element-ratio" in every["mixing_frequency_Bd"].company
    alone = problem_of(problem, every["epsilon_K"])
    bounds = {p.name: (p.lower, p.upper) for p in alone.parameters}
    assert bounds["bag_K"] == pytest.approx((0.7442, 0.7624))
