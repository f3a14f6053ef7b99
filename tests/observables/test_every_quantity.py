"""Every quantity of the public catalogue against what is promised of it, and planted faults that must be found."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest

from observables import catalogue
from observables.catalogue import Complex, Real
from observables.graph import find_parameters

_SPEC = importlib.util.spec_from_file_location(
    "quantity_checks", Path(__file__).with_name("quantity_checks.py")
)
checks = importlib.util.module_from_spec(_SPEC)
_SPEC.loader.exec_module(checks)

ABOUT = {"unit": "1", "title": "something planted", "source": "invented here, 2026"}


def touched(hypothesis):
    """Quantities that a hypothesis moves: those that rest on one of its parameters."""
    overlay = catalogue.get_hypothesis(hypothesis)
    names = catalogue.names("quantity")
    return [
        n
        for n in names
        if not overlay.parameters.keys().isdisjoint(find_parameters(catalogue, (n,), overlay))
    ]


@pytest.fixture(scope="module", params=catalogue.hypothesis_names())
def checker(request):
    names = None if request.param == "standard" else touched(request.param)
    return checks.Checker(catalogue, names, request.param)


@pytest.mark.parametrize(
    "check", [*checks.CHECKS_OF_VALUES, checks.fallback_agrees], ids=lambda check: check.__name__
)
def test_values(checker, check):
    faults = check(checker)
    assert not faults, "\n".join(faults)


@pytest.mark.parametrize("check", checks.CHECKS_OF_DECLARATIONS, ids=lambda check: check.__name__)
def test_declarations(check):
    faults = check(catalogue)
    assert not faults, "\n".join(faults)


def test_nothing_is_left_out():
    checker = checks.Checker(catalogue)
    assert len(checker.names) == len(catalogue.names("quantity")) > 100
    assert {p for name in checker.names for p in catalogue.parameters_of(name)} == set(checker.inputs)
    for name in ("wolfenstein_rhobar", "wolfenstein_etabar"):
        drawn = checker.points[checker.inputs.index(name)]
        assert (drawn < 0).sum() > 10
        assert (drawn > 0).sum() > 10


def test_the_phase_convention_shows_only_where_it_is_declared():
    unphysical = {name for name in catalogue.names("quantity") if not catalogue[name].physical}
    assert set(checks.ELEMENTS) <= unphysical
    for name in unphysical - set(checks.ELEMENTS):  # pieces of the parametrisation, upstream of the matrix
        assert not set(checks.ELEMENTS) & set(_upstream(name)), name


def _upstream(name):
    found, waiting = set(), [name]
    while waiting:
        for needed in catalogue.ingredients(waiting.pop()):
            if needed not in found:
                found.add(needed)
                waiting.append(needed)
    return found


# -- planted faults ------------------------------------------------------------------------------------------


def plant(function, name="planted", **declared):
    """A copy of the catalogue with one more quantity; its checker, over that quantity alone."""
    twin = catalogue.copy()
    twin.quantity(**(ABOUT | {"name": name} | declared))(function)
    return checks.Checker(twin, [name], size=67)


def sums_over_the_batch(jarlskog) -> Real:
    return jarlskog - np.mean(jarlskog)


def looks_at_the_size(jarlskog) -> Real:
    return jarlskog * (1.0 if np.size(jarlskog) > 1 else 1.0 + 1e-13)


def scalar_goes_elsewhere(jarlskog) -> Real:
    return jarlskog * (1.0 + 1e-13) if np.ndim(jarlskog) == 0 else 1.0 * jarlskog


def scalar_gets_an_axis(jarlskog) -> Real:
    return np.atleast_1d(jarlskog)


def flattens(jarlskog) -> Real:
    return np.ravel(jarlskog)


def one_axis_only(jarlskog) -> Real:
    return jarlskog * np.ones(len(jarlskog)) if np.ndim(jarlskog) else jarlskog


def infinite_somewhere(wolfenstein_rhobar) -> Real:
    return np.sqrt(wolfenstein_rhobar)


def infinite_for_negative_eta(wolfenstein_etabar) -> Real:
    return np.log(wolfenstein_etabar)


def complex_after_all(V_ub) -> Real:
    return V_ub * np.conjugate(V_ub)


def real_after_all(V_ub) -> Complex:
    return np.abs(V_ub)


def single_precision(jarlskog) -> Real:
    return np.asarray(jarlskog).astype(np.float32)


def complains(wolfenstein_A) -> Real:
    if np.any(np.asarray(wolfenstein_A) < 0):
        raise ValueError("A is negative")
    return 1.0 * wolfenstein_A


def phase_of_an_element(V_ub) -> Real:
    return np.angle(V_ub, deg=True)


def real_part_of_an_element(V_td) -> Real:
    return np.real(V_td)


def unbalanced_product(V_us, V_cb, V_ub, V_cd) -> Complex:
    return V_us * V_cb * np.conjugate(V_ub) * np.conjugate(V_cd)


def proportional_to_eta(jarlskog) -> Real:
    return 2.0 * jarlskog


def mixed_parity(jarlskog) -> Real:
    return 1e-9 + jarlskog


def invariant_product(V_us, V_cb, V_ub, V_cs) -> Complex:
    return V_us * V_cb * np.conjugate(V_ub) * np.conjugate(V_cs)


def times_i(V_us, V_cb, V_ub, V_cs) -> Complex:
    return 1j * V_us * V_cb * np.conjugate(V_ub) * np.conjugate(V_cs)


def interpolated(wolfenstein_A) -> Real:
    return np.interp(wolfenstein_A, [0.0, 2.0], [0.0, 1.0])


class WrongSlope:
    """Right values, wrong derivative: the trap of a hand-written rule."""

    @staticmethod
    def formula(wolfenstein_A, wolfenstein_lambda) -> Real:
        if hasattr(wolfenstein_A, "tangents"):
            wolfenstein_A = type(wolfenstein_A)(
                wolfenstein_A.value, wolfenstein_A.support, wolfenstein_A.tangents * (1.0 + 1e-7)
            )
        return wolfenstein_A * wolfenstein_lambda**2


def value_changes_with_derivatives(wolfenstein_A) -> Real:
    return wolfenstein_A * (1.0 + 1e-14 * hasattr(wolfenstein_A, "tangents"))


def kink(wolfenstein_rhobar) -> Real:
    return np.floor(40.0 * wolfenstein_rhobar) + wolfenstein_rhobar


PLANTED = [
    (checks.batch_is_point_by_point, sums_over_the_batch, {"cp": "odd"}),
    (checks.batch_is_point_by_point, looks_at_the_size, {"cp": "odd"}),
    (checks.scalars_agree, scalar_goes_elsewhere, {"cp": "odd"}),
    (checks.scalars_agree, scalar_gets_an_axis, {"cp": "odd"}),
    (checks.leading_shapes_are_kept, one_axis_only, {"cp": "odd"}),
    (checks.values_are_finite, infinite_somewhere, {}),
    (checks.values_are_finite, infinite_for_negative_eta, {}),
    (checks.types_are_as_declared, complex_after_all, {}),
    (checks.types_are_as_declared, real_after_all, {}),
    (checks.types_are_as_declared, single_precision, {}),
    (checks.nothing_raises, complains, {}),
    (checks.rephasing_changes_nothing, phase_of_an_element, {"period": 360.0, "unit": "deg"}),
    (checks.rephasing_changes_nothing, real_part_of_an_element, {}),
    (checks.rephasing_changes_nothing, unbalanced_product, {}),
    (checks.cp_parity_is_as_declared, proportional_to_eta, {}),
    (checks.cp_parity_is_as_declared, mixed_parity, {"cp": "odd"}),
    (checks.cp_parity_is_as_declared, invariant_product, {"cp": "even"}),
    (checks.cp_parity_is_as_declared, times_i, {}),
    (checks.derivatives_are_exact, interpolated, {}),
    (checks.derivatives_are_exact, WrongSlope.formula, {}),
    (checks.derivatives_are_exact, value_changes_with_derivatives, {}),
    (checks.derivatives_are_exact, kink, {}),
]


@pytest.mark.filterwarnings("ignore::numpy.exceptions.ComplexWarning")
@pytest.mark.parametrize(("check", "function", "declared"), PLANTED, ids=[f[1].__qualname__ for f in PLANTED])
def test_a_planted_fault_is_found(check, function, declared):
    faults = check(plant(function, **declared))
    assert len(faults) == 1
    assert faults[0].startswith("planted: ")


def test_a_flattened_result_is_found():
    twin = catalogue.copy()
    twin.quantity(**(ABOUT | {"name": "planted", "cp": "odd"}))(flattens)
    faults = checks.leading_shapes_are_kept(checks.Checker(twin, ["planted"]))
    assert [fault.partition(":")[0] for fault in faults] == ["planted"]


def test_a_fault_among_all_quantities_is_found_and_named():
    twin = catalogue.copy()
    twin.quantity(**(ABOUT | {"name": "planted"}))(real_part_of_an_element)
    faults = checks.rephasing_changes_nothing(checks.Checker(twin))
    assert [fault.partition(":")[0] for fault in faults] == ["planted"]


def test_an_exception_among_all_quantities_is_traced_to_its_owner():
    twin = catalogue.copy()
    twin.quantity(**(ABOUT | {"name": "planted"}))(complains)
    faults = checks.nothing_raises(checks.Checker(twin))
    assert [fault.partition(":")[0] for fault in faults] == ["planted"]


def test_wrong_partners_are_found():
    def plus(jarlskog) -> Real:
        return 1.0 + jarlskog

    def minus(jarlskog) -> Real:
        return 1.0 - jarlskog

    def crooked(jarlskog) -> Real:
        return 1.0 - 1.01 * jarlskog

    for partner, found in ((minus, []), (crooked, ["plus", "partner"])):
        twin = catalogue.copy()
        twin.quantity(**(ABOUT | {"name": "plus", "cp": "partner"}))(plus)
        twin.quantity(**(ABOUT | {"name": "partner", "cp": "plus"}))(partner)
        faults = checks.cp_parity_is_as_declared(checks.Checker(twin, ["plus", "partner"]))
        assert [fault.partition(":")[0] for fault in faults] == found


@pytest.mark.parametrize(
    ("check", "declared"),
    [
        (checks.unit_is_known, {"unit": "furlong"}),
        (checks.unit_is_known, {"unit": ""}),
        (checks.unit_is_known, {"unit": " GeV"}),
        (checks.periods_fit_units, {"period": 360.0}),
        (checks.periods_fit_units, {"unit": "rad", "period": 360.0}),
        (checks.source_is_stated, {"source": ""}),
        (checks.source_is_stated, {"source": "textbook"}),
        (checks.title_is_stated, {"title": ""}),
        (checks.title_is_stated, {"title": "planted"}),
    ],
)
def test_a_planted_declaration_is_found(check, declared):
    twin = catalogue.copy()
    twin.quantity(**(ABOUT | {"name": "planted"} | declared))(proportional_to_eta)
    faults = check(twin)
    assert [fault.partition(":")[0] for fault in faults] == ["planted"]


def test_an_honest_quantity_passes_everything():
    def honest(jarlskog, decay_constant_B) -> Real:
        return jarlskog * np.exp(decay_constant_B)

    checker = plant(honest, cp="odd")
    for check in (*checks.CHECKS_OF_VALUES, checks.fallback_agrees):
        assert check(checker) == []
    for check in checks.CHECKS_OF_DECLARATIONS:
        assert check(checker.catalogue) == []
