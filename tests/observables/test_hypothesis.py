"""Hypotheses: layers on quantities, their own parameters, and what cannot be combined."""

from __future__ import annotations

import numpy as np
import pytest

from observables import catalogue as public_catalogue
from observables.catalogue import Catalogue, Complex, Real
from observables.errors import CatalogueError, InputError, UnknownNameError
from observables.graph import compile_graph, find_parameters
from observables.hypothesis import STANDARD, Hypothesis

ABOUT = {"title": "something new", "source": "invented"}


@pytest.fixture
def small():
    """height = 10 * base; top = height + 1."""
    catalogue = Catalogue()
    catalogue.parameter("base", unit="1", start=1.0, scale=0.1, title="base")

    def height(base) -> Real:
        return 10.0 * base

    def top(height) -> Real:
        return height + 1.0

    for function in (height, top):
        catalogue.quantity(unit="1", title="a title", source="invented")(function)
    return catalogue


def overlay(catalogue, name, function=None, quantity="height", parameters=(), **more):
    new = catalogue.hypothesis(name, **ABOUT)
    for parameter in parameters:
        new.parameter(parameter, unit="1", start=0.0, scale=0.1, title=parameter)
    if function is not None:
        new.replaces(quantity, **more)(function)
    return new


@pytest.fixture
def shifted(small):
    def height(standard, shift) -> Real:
        return standard + shift

    return overlay(small, "shifted", height, parameters=["shift"])


@pytest.fixture
def stretched(small):
    def height(standard, stretch) -> Real:
        return standard * stretch

    return overlay(small, "stretched", height, parameters=["stretch"])


def test_standard_is_the_empty_hypothesis(small):
    assert small.hypothesis_names() == ("standard",)
    assert small.get_hypothesis("standard") is STANDARD
    assert (STANDARD.parameters, STANDARD.layers) == ({}, {})
    assert small.compute(["top"], {"base": 2.0})["top"] == 21.0


def test_a_layer_builds_on_standard_and_moves_what_lies_downstream(small, shifted):
    found = small.compute(["height", "top"], {"base": 2.0, "shift": 0.5}, "shifted")
    assert found == {"height": 20.5, "top": 21.5}
    assert small.compute(["top"], {"base": 2.0})["top"] == 21.0, "the catalogue itself is untouched"
    assert small.compute(["top"], {"base": 2.0, "shift": 0.5}, shifted)["top"] == 21.5


def test_a_layer_at_zero_is_the_standard_value(small, shifted):
    base = np.linspace(0.1, 1.0, 7)
    under = small.compute(["top"], {"base": base, "shift": 0.0}, shifted)["top"]
    assert np.array_equal(under, small.compute(["top"], {"base": base})["top"])


def test_standard_is_computed_on_the_new_upstream(small):
    def height(standard) -> Real:
        return 2.0 * standard

    def top(standard, height) -> Real:
        return standard * 100.0 + height

    both = overlay(small, "both", height)
    both.replaces("top")(top)
    # height = 20, standard top = height + 1 with the *new* height
    assert small.compute(["top"], {"base": 1.0}, "both")["top"] == 21.0 * 100.0 + 20.0


def test_a_layer_without_standard_hides_the_formula_below(small):
    def height(other) -> Real:
        return other

    overlay(small, "other", height, parameters=["other"])
    assert small.compute(["top"], {"other": 3.0}, "other")["top"] == 4.0
    assert tuple(find_parameters(small, ("top",), small.get_hypothesis("other"))) == ("other",)


def test_own_parameters_come_last_and_only_under_the_hypothesis(small, shifted):
    assert tuple(find_parameters(small, ("top",), shifted)) == ("base", "shift")
    assert tuple(find_parameters(small, ("top",), STANDARD)) == ("base",)
    assert "shift" not in small
    with pytest.raises(InputError, match=r"no value for the parameter shift \[1\]"):
        small.compute(["top"], {"base": 1.0}, shifted)
    with pytest.raises(UnknownNameError, match="shift"):
        small.compute(["top"], {"base": 1.0, "shift": 1.0})


def test_own_parameters_can_be_computed_and_differentiated(small, shifted):
    assert small.compute(["shift"], {"shift": 2.5}, shifted)["shift"] == 2.5
    graph = compile_graph(small, ("top",), ("base", "shift"), {}, shifted)
    assert graph.supports["top"] == (0, 1)


@pytest.mark.parametrize(("names", "expected"), [("shifted+stretched", 63.0), ("stretched+shifted", 61.0)])
def test_in_a_plus_b_the_second_sees_the_output_of_the_first(small, shifted, stretched, names, expected):
    point = {"base": 2.0, "shift": 1.0, "stretch": 3.0}
    for which in (names, names.split("+"), [small.get_hypothesis(part) for part in names.split("+")]):
        assert small.compute(["height"], point, which)["height"] == expected
    assert small.get_hypothesis(names).name == names


def test_three_layers(small, shifted, stretched):
    def height(standard) -> Real:
        return -standard

    negative = overlay(small, "negative", height)
    point = {"base": 2.0, "shift": 1.0, "stretch": 3.0}
    assert small.compute(["height"], point, shifted + stretched + negative)["height"] == -63.0
    assert small.compute(["height"], point, negative + shifted + stretched)["height"] == -57.0
    assert small.compute(["height"], point, (shifted + negative) + stretched)["height"] == -63.0
    assert small.compute(["height"], point, shifted + (negative + stretched))["height"] == -63.0


def test_standard_is_neutral(small, shifted):
    assert (shifted + STANDARD) is shifted
    assert (STANDARD + shifted) is shifted
    assert small.get_hypothesis("standard+shifted") is shifted
    assert small.get_hypothesis(["standard"]) is STANDARD


def test_overlays_on_different_quantities_combine_freely(small, shifted):
    def top(height) -> Real:
        return 7.0 * height

    other = overlay(small, "other", top, quantity="top")
    assert small.compute(["top"], {"base": 1.0, "shift": 1.0}, shifted + other)["top"] == 77.0
    assert small.compute(["top"], {"base": 1.0, "shift": 1.0}, other + shifted)["top"] == 77.0


def test_two_replacements_that_do_not_build_on_each_other_are_refused(small, shifted):
    def height(base) -> Real:
        return base

    blunt = overlay(small, "blunt", height)
    with pytest.raises(CatalogueError, match="'shifted' and 'blunt' both replace 'height'"):
        _ = shifted + blunt
    with pytest.raises(CatalogueError, match="does not build on 'standard'"):
        small.get_hypothesis("shifted+blunt")
    # The other way round the second builds on the first.
    assert small.compute(["height"], {"base": 2.0, "shift": 1.0}, blunt + shifted)["height"] == 3.0


def test_one_parameter_in_two_hypotheses(small, shifted):
    twin = Hypothesis("twin", **ABOUT)
    twin.parameters["shift"] = shifted.parameters["shift"]
    assert tuple((shifted + twin).parameters) == ("shift",)
    rival = overlay(small, "rival")
    rival.parameter("shift", unit="1", start=0.5, scale=0.1, title="another shift")
    with pytest.raises(CatalogueError, match="'shifted' and 'rival' declare 'shift' differently"):
        _ = shifted + rival


def test_composition_leaves_its_parts_alone(small, shifted, stretched):
    _ = shifted + stretched
    assert tuple(shifted.parameters) == ("shift",)
    assert len(shifted.layers["height"]) == 1
    assert len(stretched.layers["height"]) == 1


def test_families_rename_arguments(small):
    def scaled(standard, size) -> Real:
        return standard * size

    new = overlay(
        small, "renamed", scaled, parameters=["size_of_height"], ingredients={"size": "size_of_height"}
    )
    assert small.compute(["top"], {"base": 1.0, "size_of_height": 2.0}, new)["top"] == 21.0


def test_a_layer_that_takes_the_quantity_itself_is_a_cycle(small):
    def height(height) -> Real:
        return height

    overlay(small, "snake", height)
    with pytest.raises(CatalogueError, match="cycle height <- height"):
        small.compute(["top"], {"base": 1.0}, "snake")


# -- what is refused -----------------------------------------------------------------------------------------


def test_an_unknown_hypothesis_is_an_error_with_close_matches(small, shifted):
    with pytest.raises(UnknownNameError, match="unknown hypothesis 'shifed'; did you mean shifted"):
        small.compute(["top"], {"base": 1.0}, "shifed")


def test_standard_cannot_be_taken(small):
    with pytest.raises(CatalogueError, match="name of the empty hypothesis"):
        small.hypothesis("standard", **ABOUT)


def test_a_misspelt_replacement_is_not_silently_inert(small):
    def height(standard) -> Real:
        return standard

    overlay(small, "typo", height, quantity="heigth")
    with pytest.raises(CatalogueError, match="replaces 'heigth', which is no quantity; there is height"):
        small.compute(["top"], {"base": 1.0}, "typo")


def test_a_parameter_cannot_be_replaced(small):
    def base(standard) -> Real:
        return standard

    overlay(small, "leaf", base, quantity="base")
    with pytest.raises(CatalogueError, match="replaces 'base', which is no quantity"):
        small.get_hypothesis("leaf")


def test_a_real_quantity_stays_real(small):
    def height(standard) -> Complex:
        return standard * 1j

    overlay(small, "turned", height)
    with pytest.raises(CatalogueError, match="replaces 'height', which must stay '-> Real'"):
        small.get_hypothesis("turned")


def test_a_parameter_of_the_catalogue_cannot_be_declared_again(small):
    overlay(small, "greedy", parameters=["base"])
    with pytest.raises(CatalogueError, match=r"two owners of the name 'base': hypothesis 'greedy' .*and .*"):
        small.get_hypothesis("greedy")


def test_a_parameter_is_declared_once(small, shifted):
    with pytest.raises(
        CatalogueError, match=r"'shifted' declares the parameter 'shift' twice: .*:\d+ and .*:\d+"
    ):
        shifted.parameter("shift", unit="1", start=0.0, scale=0.1, title="again")
    for start in (1.0, 2.0):  # the same line may run again
        shifted.parameter("size", unit="1", start=start, scale=0.1, title="again")
    assert shifted.parameters["size"].start == 2.0


def test_the_checks_of_parameters_hold_here_too(small, shifted):
    with pytest.raises(CatalogueError, match=r"test_hypothesis.py:\d+: parameter 'p' has reversed bounds"):
        shifted.parameter("p", unit="1", start=0.0, scale=0.1, title="p", lower=1.0, upper=-1.0)


def test_an_annotation_is_compulsory(small):
    def height(standard):
        return standard

    with pytest.raises(CatalogueError, match=r"test_hypothesis.py:\d+: 'height' must say"):
        overlay(small, "silent", height)


def test_renaming_what_is_no_argument(small):
    def height(standard) -> Real:
        return standard

    with pytest.raises(CatalogueError, match=r"renames \['basis'\], which are not its arguments"):
        overlay(small, "odd", height, ingredients={"basis": "base"})


def test_hypotheses_of_the_public_catalogue_are_sound():
    for name in public_catalogue.hypothesis_names():
        assert public_catalogue.get_hypothesis(name).title
