"""Parameters that cancel in everything measured are no unknowns."""

from __future__ import annotations

import numpy as np
import pytest

from fitcore import Problem
from observables.errors import CatalogueError, InputError

#: What the size of a mixing amplitude rests on, and its phase does not.
SIZE = {
    "mixing_matrix_element_Bs",
    "mixing_matrix_element_ratio",
    "top_mass_msbar",
    "short_distance_factor_B",
}


@pytest.mark.parametrize(
    ("only", "degrees"),
    [
        (["V-us", "V-cb", "V-ub", "gamma-average", "sine-2beta"], 1),
        (["tree", "cp-asymmetry"], 6),
        (["tree", "alpha-average"], 5),
        (["V-us", "V-cb", "sine-2beta", "gamma-average"], 0),
        (["magnitude", "sine-2beta"], 4),
    ],
)
def test_phases_of_mixing_without_its_size(only, degrees):
    problem = Problem.load("averages-2026", only=only)
    assert set(problem.idle) == SIZE
    assert not SIZE & set(problem.parameter_names)
    result = problem.fit()
    assert result.valid, result.message
    assert "unconstrained" not in result.flags
    assert result.degrees_of_freedom == degrees
    for name in ("wolfenstein_rhobar", "wolfenstein_etabar"):
        assert result.parameters[name].interval_68 is not None


def test_the_same_fit_with_the_angle_itself():
    """sin 2 beta fixes beta: measured at the same place it gives the same errors."""
    only = ["V-us", "V-cb", "V-ub", "gamma-average", "sine-2beta"]
    result = Problem.load("averages-2026", only=only).fit(derived=["angle_beta", "sine_2beta_ccs"])
    beta, sine = result.derived["angle_beta"], result.derived["sine_2beta_ccs"]
    slope = 2.0 * np.cos(np.deg2rad(2.0 * beta.value)) * np.pi / 180.0
    assert sine.value == pytest.approx(np.sin(np.deg2rad(2.0 * beta.value)), rel=1e-12)
    assert sine.error == pytest.approx(slope * beta.error, rel=1e-9)


def test_idle_parameters_are_not_taken_for_known():
    problem = Problem.load("averages-2026", only=["V-us", "V-cb", "V-ub", "gamma-average", "sine-2beta"])
    assert problem.determines("phase_phi_s")
    assert not problem.determines("mixing_frequency_Bd")
    with pytest.raises(InputError, match="nothing in averages-2026 determines mixing_matrix_element_Bs"):
        problem.values(problem.start, ["mixing_frequency_Bd"])


def test_indirect_values_of_the_textbook_inputs():
    problem = Problem.load("averages-2026", only=["V-us", "V-cb", "V-ub", "gamma-average", "sine-2beta"])
    rows = {row.quantity: row for row in problem.indirect(["sine_2beta_ccs", "magnitude_V_ub"]).rows}
    assert rows["sine_2beta_ccs"].value is not None
    # one degree of freedom: every input is as far off as the fit is bad
    for row in rows.values():
        assert abs(row.tension) == pytest.approx(np.sqrt(problem.fit(derived=[]).chi2), abs=1e-3)


def test_left_out_lifetimes_are_found_again_not_remembered():
    problem = Problem.load("world-2026")
    (row,) = problem.indirect(["lifetime_KL"]).rows
    assert row.value != row.direct
    width = row.interval_68[1] - row.interval_68[0]
    assert width > 2e-10, "the branching fractions know it less well than its own measurement"


def test_flat_ranges_have_no_linear_errors():
    result = Problem.load("averages-2026", theory_errors="flat").fit(derived=["jarlskog"])
    assert result.parameters["bag_K"].method == "range"
    assert result.parameters["bag_K"].interval_68 == pytest.approx((0.7442, 0.7624))
    assert all(row.fitted_error is None for row in result.measurements)
    assert np.isnan(np.array(result.correlation_matrix)).all()
    assert result.derived["jarlskog"].method == "profile"
    with pytest.raises(InputError, match="theory errors gaussian"):
        Problem.load("averages-2026", theory_errors="flat").budget()


def test_a_formula_that_fails_is_named(make, tables, catalogue):
    import math

    from observables.catalogue import Real

    def wrong(slope) -> Real:
        return math.sin(slope)

    catalogue.quantity(unit="1", title="sine by the wrong library", source="invented")(wrong)
    with pytest.raises(
        CatalogueError, match=r"test_influence.py:\d+: the formula of 'wrong' fails on arrays"
    ):
        make(tables.measurement("a", "wrong", 0.5, 0.1))


def test_a_real_quantity_that_turns_complex_is_named(make, tables, catalogue):
    from observables.catalogue import Real

    def turned(slope) -> Real:
        return slope * 1j

    catalogue.quantity(unit="1", title="not what it says", source="invented")(turned)
    with pytest.raises(CatalogueError, match="'turned' declares '-> Real' but returns complex numbers"):
        make(tables.measurement("a", "turned", 0.5, 0.1))
    with pytest.raises(CatalogueError, match="'turned' declares '-> Real'"):
        catalogue.compute(["turned"], {"slope": 1.0})


def test_what_the_inputs_fix_has_its_error_beside_what_they_do_not():
    """Oscillations without lattice inputs: the matrix is known, the matrix elements of mixing are not."""
    only = ["V-us", "V-cb", "V-ub", "gamma-average", "frequency-Bd", "frequency-Bs"]
    result = Problem.load("averages-2026", only=only).fit()
    assert result.valid, result.message
    assert result.flags == ("unconstrained",)
    assert result.other_minima == ()
    loose = {name for name, one in result.parameters.items() if one.error is None}
    assert loose == {"mixing_matrix_element_Bs", "top_mass_msbar", "short_distance_factor_B"}
    # each is measured alone, so the fit gives the measurement back
    assert result.derived["magnitude_V_ub"].error == pytest.approx(0.16e-3, rel=1e-3)
    assert result.derived["magnitude_V_cb"].error == pytest.approx(1.3e-3, rel=1e-3)
    assert all(one.error is not None for one in result.derived.values())
