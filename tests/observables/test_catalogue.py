"""Declaring, looking up and computing, on small catalogues of our own."""

from __future__ import annotations

import math

import numpy as np
import pytest

from observables import catalogue as public_catalogue
from observables.catalogue import Catalogue, Complex, Constant, Parameter, Quantity, Real, make_parameter
from observables.errors import CatalogueError, InputError, UnknownNameError, WeakmixError
from observables.graph import compile_graph, find_parameters
from observables.hypothesis import STANDARD


def add_parameter(catalogue, name, **changed):
    settings = {"unit": "1", "start": 0.5, "lower": -9.0, "upper": 9.0, "scale": 0.1, "title": f"the {name}"}
    return catalogue.parameter(name, **(settings | changed))


def add_quantity(catalogue, function, **changed):
    return catalogue.quantity(**({"unit": "1", "title": "a title", "source": "invented"} | changed))(function)


@pytest.fixture
def small():
    """speed (m) and time; distance = speed * time * unit; wave = exp(i distance)."""
    catalogue = Catalogue()
    add_parameter(catalogue, "speed")
    add_parameter(catalogue, "time", fixed=True, start=2.0)
    catalogue.constant("calibration", 3.0, error=0.1, unit="1", source="invented", pdg="S000")

    def calibration_squared(calibration) -> Real:
        return calibration**2

    def distance(speed, time, calibration_squared) -> Real:
        return speed * time * calibration_squared

    def wave(distance) -> Complex:
        return np.exp(1j * distance)

    def root(speed) -> Real:
        return np.sqrt(speed)

    for function in (calibration_squared, distance, wave, root):
        add_quantity(catalogue, function)
    return catalogue


# -- looking up ----------------------------------------------------------------------------------------------


def test_nodes_tell_what_they_are(small):
    speed, calibration, distance, wave = (small[n] for n in ("speed", "calibration", "distance", "wave"))
    assert (speed.kind, calibration.kind, distance.kind) == ("parameter", "constant", "quantity")
    assert isinstance(speed, Parameter)
    assert isinstance(calibration, Constant)
    assert isinstance(distance, Quantity)
    assert (speed.start, speed.lower, speed.upper, speed.scale) == (0.5, -9.0, 9.0, 0.1)
    assert (calibration.value, calibration.error, calibration.pdg) == (3.0, 0.1, "S000")
    assert calibration.title == "calibration"
    assert not distance.is_complex
    assert distance.cp == "even"
    assert wave.is_complex
    assert wave.cp == "conjugate"
    assert wave.physical
    assert wave.period is None
    assert not wave.recalled
    assert not speed.is_complex


def test_nodes_are_frozen(small):
    with pytest.raises(AttributeError):
        small["speed"].start = 1.0


def test_names_come_in_order_of_declaration_and_by_kind(small):
    assert small.names() == (
        "speed",
        "time",
        "calibration",
        "calibration_squared",
        "distance",
        "wave",
        "root",
    )
    assert small.names("parameter") == ("speed", "time")
    assert small.names("constant") == ("calibration",)
    assert small.names("quantity")[-1] == "root"
    assert tuple(small) == small.names()
    assert len(small) == 7
    assert "wave" in small
    assert "wav" not in small


def test_ingredients_parameters_and_leaves(small):
    assert small.ingredients("distance") == ("speed", "time", "calibration_squared")
    assert small.ingredients("speed") == ()
    assert small.parameters_of("wave") == ("speed", "time")
    assert small.leaves_of("wave") == ("speed", "time", "calibration")
    assert small.parameters_of("speed") == ("speed",)


def test_the_documented_example_of_the_public_catalogue():
    assert public_catalogue["mixing_frequency_Bd"].unit == "1/ps"
    assert public_catalogue.ingredients("mixing_frequency_Bd") == ("M12_Bd", "reduced_planck_constant")


def test_unknown_names_come_with_the_three_closest():
    with pytest.raises(UnknownNameError) as caught:
        public_catalogue["mixing_freqency_Bd"]
    assert caught.value.name == "mixing_freqency_Bd"
    assert caught.value.close[:2] == ("mixing_frequency_Bd", "mixing_frequency_Bs")
    assert len(caught.value.close) == 3
    assert "did you mean mixing_frequency_Bd" in str(caught.value)
    assert isinstance(caught.value, LookupError)
    assert isinstance(caught.value, WeakmixError)
    assert public_catalogue.close_matches("zzzzqqqq") == ()


@pytest.mark.parametrize("look_up", ["ingredients", "parameters_of", "leaves_of"])
def test_every_look_up_of_an_unknown_name_says_so(small, look_up):
    with pytest.raises(UnknownNameError, match="speeed"):
        getattr(small, look_up)("speeed")


# -- what may not be declared --------------------------------------------------------------------------------


def test_two_owners_of_a_name_are_both_named(small):
    def distance(speed) -> Real:
        return speed

    distance.__qualname__ = "elsewhere"
    with pytest.raises(CatalogueError, match="'distance'") as caught:
        add_quantity(small, distance)
    places = str(caught.value).count(f"{__file__}:")
    assert places == 2, f"both places have to be named: {caught.value}"


def test_two_parameters_of_one_name_are_both_named(small):
    with pytest.raises(
        CatalogueError, match=r"two owners of the name 'speed'.*test_catalogue.*test_catalogue"
    ):
        small.parameter("speed", unit="1", start=0.0, scale=1.0, title="again")


def test_a_constant_cannot_take_the_name_of_a_quantity(small):
    with pytest.raises(CatalogueError, match="two owners of the name 'wave'"):
        small.constant("wave", 1.0, unit="1", source="invented")


def test_the_same_function_may_be_declared_again(small):
    def again(catalogue, factor):
        def triple(speed) -> Real:
            return factor * speed

        add_quantity(catalogue, triple)

    again(small, 2.0)
    again(small, 3.0)
    assert small.compute(["triple"], {"speed": 1.0})["triple"] == 3.0


def test_the_same_line_may_declare_a_leaf_again(small):
    for start in (1.0, 2.0):
        small.parameter("mass", unit="GeV", start=start, scale=1.0, title="mass")
        small.constant("width", start, unit="GeV", source="invented")
    assert small["mass"].start == 2.0
    assert small["width"].value == 2.0


def test_an_edited_cell_of_a_session_may_declare_a_leaf_again(small):
    session = {"__name__": "__main__", "small": small}
    for cell in (1, 2):
        source = f"small.parameter('mass', unit='GeV', start={cell}.0, scale=1.0, title='mass')"
        exec(compile("\n" * cell + source, f"cell-{cell}", "exec"), session)
    assert small["mass"].start == 2.0
    with pytest.raises(CatalogueError, match=r"two owners of the name 'mass': cell-2:3 and .*test_catalogue"):
        add_parameter(small, "mass")


@pytest.mark.parametrize("name", ["two words", "V-ub", "1st", ""])
def test_names_are_identifiers(small, name):
    with pytest.raises(CatalogueError, match="no identifier"):
        add_parameter(small, name)


def test_an_annotation_is_compulsory(small):
    def without(speed):
        return speed

    def wrong(speed) -> float:
        return speed

    for function in (without, wrong):
        with pytest.raises(
            CatalogueError, match=rf"test_catalogue.py:\d+: '{function.__name__}' must say '-> Real'"
        ):
            add_quantity(small, function)


def test_annotations_may_be_strings_or_objects(small):
    def as_object(speed):
        return speed

    as_object.__annotations__["return"] = Complex
    add_quantity(small, as_object)
    assert small["as_object"].is_complex

    def as_text(speed):
        return speed

    as_text.__annotations__["return"] = "catalogue.Real"
    add_quantity(small, as_text)
    assert not small["as_text"].is_complex


@pytest.mark.parametrize(
    ("changed", "said"),
    [
        ({"lower": 2.0, "upper": 1.0}, "reversed bounds"),
        ({"start": 10.0}, "outside its bounds"),
        ({"scale": 0.0}, "positive scale"),
        ({"scale": math.nan}, "positive scale"),
        ({"start": math.nan}, "outside its bounds"),
    ],
)
def test_impossible_parameters(small, changed, said):
    with pytest.raises(CatalogueError, match=rf"test_catalogue.py:\d+: parameter 'mass'.*{said}"):
        add_parameter(small, "mass", **changed)
    assert "mass" not in small


@pytest.mark.parametrize(("value", "error"), [(math.nan, 0.0), (math.inf, 0.0), (1.0, -1.0), (1.0, math.nan)])
def test_impossible_constants(small, value, error):
    with pytest.raises(CatalogueError, match=r"test_catalogue.py:\d+: constant 'mass' needs a finite value"):
        small.constant("mass", value, error=error, unit="GeV", source="invented")


def test_numbers_of_leaves_become_floats():
    node = make_parameter("n", origin="o", owner="o", unit="1", start=1, scale=2, title="t")
    assert isinstance(node.start, float)
    assert isinstance(node.scale, float)


# -- families ------------------------------------------------------------------------------------------------


def test_a_family_shares_one_function(small):
    def doubled(element) -> Real:
        return 2.0 * element

    for name in ("speed", "time"):
        add_quantity(small, doubled, name=f"doubled_{name}", ingredients={"element": name})
    assert small.ingredients("doubled_time") == ("time",)
    found = small.compute(["doubled_speed", "doubled_time"], {"speed": 1.0, "time": 7.0})
    assert found == {"doubled_speed": 2.0, "doubled_time": 14.0}


def test_renaming_what_is_no_argument(small):
    def doubled(element) -> Real:
        return 2.0 * element

    with pytest.raises(CatalogueError, match=r"'doubled' renames \['elemnt'\], which are not its arguments"):
        add_quantity(small, doubled, ingredients={"elemnt": "speed"})


# -- the graph as a whole ------------------------------------------------------------------------------------


def test_a_missing_ingredient_is_found_at_first_use_and_by_check(small):
    def lost(speed, nowhere) -> Real:
        return speed + nowhere

    add_quantity(small, lost)
    with pytest.raises(CatalogueError, match="'lost' needs 'nowhere', which nobody declares"):
        small.compute(["lost"], {"speed": 1.0})
    with pytest.raises(CatalogueError, match=r"test_catalogue.py:\d+: 'lost' needs 'nowhere'"):
        small.check()
    assert small.compute(["distance"], {"speed": 1.0})["distance"] == 18.0, "other quantities still work"


def test_a_cycle_is_found_at_first_use_and_by_check_with_all_places(small):
    def egg(hen) -> Real:
        return hen

    def hen(chick) -> Real:
        return chick

    def chick(egg) -> Real:
        return egg

    for function in (egg, hen, chick):
        add_quantity(small, function)
    with pytest.raises(CatalogueError, match="cycle egg <- hen <- chick <- egg"):
        small.compute(["egg"], {})
    with pytest.raises(CatalogueError) as caught:
        small.check()
    assert str(caught.value).count("test_catalogue.py:") == 3


def test_a_quantity_made_of_itself_is_a_cycle(small):
    def snake(snake, speed) -> Real:
        return snake + speed

    add_quantity(small, snake)
    with pytest.raises(CatalogueError, match="cycle snake <- snake"):
        small.compute(["snake"], {"speed": 1.0})
    with pytest.raises(CatalogueError, match="cycle snake <- snake"):
        small.check()


def test_a_cp_partner_has_to_exist(small):
    def plus(speed) -> Real:
        return speed

    add_quantity(small, plus, cp="minus")
    with pytest.raises(CatalogueError, match="'plus' names the CP partner 'minus', which nobody declares"):
        small.check()


def test_the_public_catalogue_is_sound():
    public_catalogue.check()


def test_a_copy_is_independent(small):
    twin = small.copy()
    add_parameter(twin, "mass")
    assert "mass" in twin
    assert "mass" not in small


# -- folding and pruning -------------------------------------------------------------------------------------


def counted(catalogue, name, ingredients, calls, formula):
    """A quantity that notes each of its calls."""

    def function(*values):
        calls.append(name)
        return formula(*values)

    namespace = {"inner": function, "Real": Real}
    exec(
        f"def {name}({', '.join(ingredients)}) -> Real:\n    return inner({', '.join(ingredients)})",
        namespace,
    )
    add_quantity(catalogue, namespace[name])


def test_constants_are_folded_once_and_unused_branches_never_run(small):
    calls = []
    counted(small, "heavy", ["calibration"], calls, lambda c: c**3)
    counted(small, "heavier", ["heavy"], calls, lambda c: c + 1.0)
    counted(small, "wanted", ["speed", "heavier"], calls, lambda s, h: s * h)
    counted(small, "unwanted", ["speed"], calls, lambda s: s)
    graph = compile_graph(small, ("wanted",), ("speed",), {}, STANDARD)
    assert calls == ["heavy", "heavier"], "constant work is done at compile time"
    calls.clear()
    for speed in (1.0, 2.0):
        assert graph.evaluate([np.array([speed])])[0] == speed * 28.0
    assert calls == ["wanted", "wanted"]
    assert graph.supports == {"wanted": (0,)}


def test_fixed_parameters_are_folded_too(small):
    calls = []
    counted(small, "late", ["time"], calls, lambda t: t)
    graph = compile_graph(small, ("late",), (), {"time": 4.0}, STANDARD)
    assert graph.evaluate([]) == [4.0]
    assert graph.supports == {"late": ()}
    assert calls == ["late"]


def test_folded_values_are_numpy_numbers(small):
    # A Python float would turn (-0.125) ** (1/3) into a complex number where NumPy gives nan.
    small.constant("negative", -0.125, unit="1", source="invented")

    def third_root(negative) -> Real:
        return negative ** (1.0 / 3.0)

    def product(speed, third_root) -> Real:
        return speed * third_root

    add_quantity(small, third_root)
    add_quantity(small, product)
    assert math.isnan(small.compute(["product"], {"speed": 1.0})["product"])


def test_a_constant_may_vary(small):
    graph = compile_graph(small, ("distance",), ("calibration",), {"speed": 1.0, "time": 1.0}, STANDARD)
    assert graph.evaluate([np.array([1.0, 2.0])])[0].tolist() == [1.0, 4.0]


def test_find_parameters_in_order_of_declaration(small):
    assert tuple(find_parameters(small, ("wave",), STANDARD)) == ("speed", "time", "calibration")
    assert tuple(find_parameters(small, ("wave",), STANDARD, ("distance",))) == ()
    assert tuple(find_parameters(small, ("wave", "root"), STANDARD, ("distance",))) == ("speed",)


def test_intermediate_results_are_dropped_but_targets_and_inputs_stay(small):
    graph = compile_graph(small, ("distance", "wave", "speed"), ("speed",), {"time": 2.0}, STANDARD)
    speed = np.array([0.1, 0.2])
    distance, wave, same = graph.evaluate([speed])
    assert np.array_equal(same, speed)
    assert np.array_equal(distance, speed * 18.0)
    assert np.array_equal(wave, np.exp(1j * distance))


# -- computing -----------------------------------------------------------------------------------------------


def test_scalars_in_scalars_out(small):
    found = small.compute(["distance", "wave"], {"speed": 0.5, "time": 1.0})
    assert isinstance(found["distance"], np.float64)
    assert isinstance(found["wave"], np.complex128)
    assert found["distance"] == 4.5
    assert found["wave"] == np.exp(4.5j)


def test_integers_are_numbers_too(small):
    assert small.compute(["distance"], {"speed": 1, "time": [1, 2]})["distance"].tolist() == [9.0, 18.0]


@pytest.mark.parametrize("shape", [(1,), (4,), (2, 3), (0,)])
def test_batches_keep_their_shape(small, shape):
    speed = np.linspace(0.1, 1.0, math.prod(shape)).reshape(shape)
    found = small.compute(["distance", "speed", "calibration", "calibration_squared"], {"speed": speed})
    assert found["distance"].shape == shape
    assert np.array_equal(found["distance"], 18.0 * speed)
    assert np.array_equal(found["speed"], speed)
    assert found["calibration"].shape == shape, "constants are spread over the batch"


def test_values_broadcast(small):
    found = small.compute(
        ["distance"], {"speed": np.array([[1.0], [2.0]]), "time": np.array([1.0, 2.0, 3.0])}
    )
    assert found["distance"].tolist() == [[9.0, 18.0, 27.0], [18.0, 36.0, 54.0]]


def test_results_do_not_alias_the_input(small):
    speed = np.ones(3)
    small.compute(["speed"], {"speed": speed})["speed"][0] = 7.0
    assert speed[0] == 1.0


def test_parameters_fixed_by_default_may_be_left_out_or_given(small):
    assert small.compute(["distance"], {"speed": 1.0})["distance"] == 18.0
    assert small.compute(["distance"], {"speed": 1.0, "time": 1.0})["distance"] == 9.0


def test_constants_may_be_given(small):
    assert small.compute(["distance"], {"speed": 1.0, "calibration": 1.0})["distance"] == 2.0


def test_missing_values_are_listed_with_their_units(small):
    add_parameter(small, "mass", unit="GeV")

    def energy(mass, speed) -> Real:
        return mass * speed

    add_quantity(small, energy)
    with pytest.raises(InputError, match=r"no value for the parameters mass \[GeV\], speed \[1\]"):
        small.compute(["energy"], {})
    with pytest.raises(InputError, match=r"no value for the parameter mass \[GeV\]"):
        small.compute(["energy"], {"speed": 1.0})


def test_values_that_nothing_needs_are_harmless_but_have_to_exist(small):
    assert small.compute(["root"], {"speed": 4.0, "time": 3.0})["root"] == 2.0
    with pytest.raises(UnknownNameError, match="speeed"):
        small.compute(["root"], {"speed": 4.0, "speeed": 3.0})


def test_a_value_for_a_computed_quantity_is_not_ignored(small):
    with pytest.raises(InputError, match="'distance' is computed from others"):
        small.compute(["wave"], {"speed": 4.0, "distance": 3.0})


def test_overrides_stand_in_for_quantities(small):
    found = small.compute(["wave", "distance"], {}, overrides={"distance": np.array([0.0, 1.0])})
    assert np.array_equal(found["wave"], np.exp(1j * np.array([0.0, 1.0])))
    assert found["distance"].tolist() == [0.0, 1.0]


def test_overrides_may_be_complex_and_of_leaves(small):
    def size(wave) -> Real:
        return np.abs(wave)

    add_quantity(small, size)
    assert small.compute(["size"], {}, overrides={"wave": 3.0 + 4.0j})["size"] == 5.0
    assert small.compute(["distance"], {"speed": 1.0}, overrides={"time": 1.0})["distance"] == 9.0
    assert small.compute(["distance"], {"speed": 1.0}, overrides={"calibration": 1.0})["distance"] == 2.0


def test_an_unknown_override_is_not_ignored(small):
    with pytest.raises(UnknownNameError, match="did you mean distance"):
        small.compute(["wave"], {"speed": 1.0}, overrides={"distanc": 1.0})


def test_unknown_quantities(small):
    with pytest.raises(UnknownNameError, match="did you mean wave"):
        small.compute(["wav"], {"speed": 1.0})


def test_a_formula_without_value_gives_nan_without_a_warning(small):
    found = small.compute(["root"], {"speed": np.array([-1.0, 4.0])})["root"]
    assert math.isnan(found[0])
    assert found[1] == 2.0


def test_nothing_asked_nothing_given(small):
    assert small.compute([], {"speed": 1.0}) == {}


def test_a_constant_alone_is_a_scalar(small):
    assert small.compute(["calibration_squared"], {})["calibration_squared"] == 9.0
