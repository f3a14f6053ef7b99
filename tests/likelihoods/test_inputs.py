"""Reading good files: units, blocks, includes, replacements, drops, scale factors, notices."""

from __future__ import annotations

import pickle
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from likelihoods import Inputs, Notice, ParameterSetting, Prior, average, load_inputs
from observables.errors import InputError, UnknownNameError


def entry(
    identity: str,
    extra: str = "error = 0.1",
    quantity: str = "tide_height",
    unit: str = "1",
    value: float = 1.0,
) -> str:
    return (
        f'[[measurement]]\nid = "{identity}"\nquantity = "{quantity}"\nvalue = {value}\nunit = "{unit}"\n'
        f'source = "invented"\n{extra}\n'
    )


BLOCK = """
[[correlated]]
id = "pair"
quantities = ["tide_height", "tide_mass"]
values = [50.0, 2000]
errors = [1.0, [30.0, 20.0]]
units = ["%", "MeV"]
correlation = [[1.0, -0.25], [-0.25, 1.0]]
source = "invented"
groups = ["blocks"]
"""


def notices(inputs: Inputs, kind: str) -> list[tuple[str, str]]:
    return [(notice.id, notice.text) for notice in inputs.notices if notice.kind == kind]


class TestMeasurement:
    def test_every_key(self, load) -> None:
        (read,) = load("""
            title = "All keys"
            revision = 3
            [[measurement]]
            id = "all"
            quantity = "tide_mass"
            value = 2000
            error = [30, 20.0]
            flat_halfwidth = 5.0
            unit = "MeV"
            kind = "theory"
            groups = ["one", "two"]
            inflate = 2.0
            overlaps = ["absent"]
            source = "invented"
            pdg = "S000M"
            recalled = true
            note = "why"
            part_of = "sum"
            """).entries
        assert (read.value, read.flat_halfwidth) == (2.0, 0.005)
        assert_allclose((read.plus, read.minus), (0.06, 0.04), rtol=1e-15)
        assert (read.id, read.quantity, read.unit, read.kind) == ("all", "tide_mass", "GeV", "theory")
        assert (read.groups, read.overlaps) == (("one", "two"), ("absent",))
        assert (read.inflate, read.source, read.pdg, read.recalled) == (2.0, "invented", "S000M", True)
        assert (read.note, read.part_of, read.block, read.errors) == ("why", "sum", None, {})
        assert (read.file, read.line) == ("my.toml", 3)

    def test_defaults(self, load) -> None:
        inputs = load(entry("one"))
        (read,) = inputs.entries
        assert (read.kind, read.groups, read.overlaps, read.inflate) == ("experiment", (), (), 1.0)
        assert (read.flat_halfwidth, read.pdg, read.recalled, read.note, read.part_of) == (
            0.0,
            None,
            False,
            None,
            None,
        )
        assert (inputs.title, inputs.name, inputs.path, inputs.revision) == ("my", "my", "my.toml", 1)
        assert inputs.notices == ()

    @pytest.mark.parametrize(
        ("quantity", "unit", "value"),
        [
            ("tide_height", "%", 0.05),
            ("tide_height", "percent", 0.05),
            ("tide_height", "1e-3", 0.005),
            ("tide_mass", "MeV", 0.005),
            ("tide_angle", "rad", 5.0 * 180.0 / np.pi),
            ("tide_frequency", "1/ns", 0.005),
            ("tide_lifetime", "fs", 5e-15),
        ],
    )
    def test_units(self, load, quantity: str, unit: str, value: float) -> None:
        (read,) = load(entry("one", "error = 0.5", quantity, unit, 5.0)).entries
        assert_allclose([read.value, read.plus, read.minus], [value, value / 10.0, value / 10.0], rtol=1e-14)

    def test_angles_carry_their_period(self, load) -> None:
        inputs = load(entry("one", "error = 2.0", "tide_angle", "deg", 359.0))
        assert inputs.entries[0].period == 360.0
        assert_allclose(inputs.terms.standardised([1.0]), [1.0])

    def test_parameters_and_constants_can_be_measured(self, load) -> None:
        inputs = load(
            entry("p", "error = 1.0", "tide_mass", "GeV") + entry("c", "error = 1.0", "tide_constant", "GeV")
        )
        assert [read.quantity for read in inputs.entries] == ["tide_mass", "tide_constant"]


class TestErrorSources:
    def test_add_in_quadrature(self, load) -> None:
        (read,) = load(entry("one", "errors = { statistical = 3.0, tagging = -4.0 }\ninflate = 2.0")).entries
        assert (read.plus, read.minus, read.errors) == (10.0, 10.0, {"statistical": 6.0, "tagging": -8.0})

    def test_same_name_is_shared(self, load) -> None:
        """Covariance of three entries against numpy, from the matrix of sources."""
        inputs = load(
            entry("a", "errors = { statistical = 0.3, tagging = 0.4, scale = 0.2 }")
            + entry("b", "errors = { statistical = 0.5, tagging = -0.2, own = 0.1 }\ninflate = 3.0")
            + entry("c", "errors = { statistical = 0.1, scale = 0.6, tagging = 0.1 }")
            + entry("d", "error = 0.7")
        )
        sources = np.array([[0.4, 0.2], [-0.2, 0.0], [0.1, 0.6], [0.0, 0.0]])
        alone = np.array([0.3**2, 0.5**2 + 0.1**2, 0.1**2, 0.7**2])
        covariance = sources @ sources.T + np.diag(alone)
        sigma = np.sqrt(np.diagonal(covariance))
        assert_allclose(inputs.correlation_matrix(), covariance / np.outer(sigma, sigma), rtol=1e-14)
        assert_allclose([read.plus for read in inputs.entries], sigma * [1.0, 3.0, 1.0, 1.0], rtol=1e-14)
        assert notices(inputs, "shared") == [
            ("tagging", "error source common to a, b, c"),
            ("scale", "error source common to a, c"),
        ]

    def test_statistical_errors_are_never_shared(self, load) -> None:
        inputs = load(
            entry("a", "errors = { statistical = 0.3, uncorrelated = 0.2 }")
            + entry("b", "errors = { statistical = 0.3, uncorrelated = 0.2, stat = 0.1 }")
        )
        assert_array_equal(inputs.correlation_matrix(), np.eye(2))

    def test_units_of_shared_sources(self, load) -> None:
        """The same number in other units gives the same correlation."""
        errors = "errors = {{ statistical = {0}, energy = {0} }}"
        inputs = load(
            entry("a", errors.format(0.003), "tide_mass", "GeV")
            + entry("b", errors.format(5.0), "tide_constant", "MeV")
        )
        assert_allclose(inputs.correlation_matrix()[0, 1], 0.5, rtol=1e-14)
        assert_allclose([read.errors["energy"] for read in inputs.entries], [0.003, 0.005], rtol=1e-15)
        assert_allclose(
            [read.plus for read in inputs.entries], np.sqrt(2.0) * np.array([0.003, 0.005]), rtol=1e-15
        )


class TestCorrelated:
    def test_members(self, load) -> None:
        inputs = load(entry("first") + BLOCK + entry("last"))
        assert inputs.ids == ("first", "pair:tide_height", "pair:tide_mass", "last")
        height, mass = inputs.entries[1:3]
        assert (height.value, height.plus, height.minus, height.block) == (0.5, 0.01, 0.01, "pair")
        assert_allclose((mass.value, mass.plus, mass.minus), (2.0, 0.03, 0.02), rtol=1e-15)
        assert height.groups == mass.groups == ("blocks",)
        expected = np.eye(4)
        expected[1, 2] = expected[2, 1] = -0.25
        assert_array_equal(inputs.correlation_matrix(), expected)

    def test_own_ids(self, load) -> None:
        inputs = load(
            BLOCK
            + 'ids = ["h", "m"]\npdg = ["S001", ""]\nflat_halfwidths = [0.0, 100.0]\ninflate = [1.0, 3.0]'
        )
        assert inputs.ids == ("h", "m")
        assert [read.pdg for read in inputs.entries] == ["S001", None]
        assert [read.flat_halfwidth for read in inputs.entries] == [0.0, 0.1]
        assert_allclose([read.plus for read in inputs.entries], [0.01, 0.09])

    @pytest.mark.parametrize("where", ["list", "file"])
    def test_covariance(self, write, load, where: str) -> None:
        write("covariance.csv", "# height, mass\n0.04, -0.03\n\n-0.03, 0.25\n")
        matrix = {"list": "[[0.04, -0.03], [-0.03, 0.25]]", "file": '"covariance.csv"'}[where]
        inputs = load(f"""
            [[correlated]]
            id = "pair"
            quantities = ["tide_height", "tide_depth"]
            values = [1.0, 2.0]
            units = "1"
            covariance = {matrix}
            source = "invented"
            """)
        assert_allclose([read.plus for read in inputs.entries], [0.2, 0.5], rtol=1e-15)
        assert_allclose(inputs.correlation_matrix()[0, 1], -0.3, rtol=1e-14)

    def test_csv_lies_beside_the_file_that_names_it(self, write, catalogue, tmp_path: Path) -> None:
        (tmp_path / "folder").mkdir()
        write("folder/matrix.csv", "1,0.5\n0.5,1")
        write("folder/base.toml", BLOCK.replace("[[1.0, -0.25], [-0.25, 1.0]]", '"matrix.csv"'))
        write("my.toml", 'include = ["folder/base.toml"]')
        assert load_inputs("my.toml", catalogue=catalogue).correlation_matrix()[0, 1] == 0.5

    def test_between_entries(self, load) -> None:
        inputs = load(
            entry("one")
            + BLOCK
            + '[[correlation]]\nbetween = ["pair:tide_mass", "one"]\ncoefficient = 0.5\nsource = "x"'
        )
        assert inputs.correlation_matrix()[0, 2] == inputs.correlation_matrix()[2, 0] == 0.5
        assert [block.indices.tolist() for block in inputs.terms.correlation_blocks] == [[0, 1, 2]]

    def test_rounded_matrices_of_publications(self, load) -> None:
        """Positive definite only in the last digit printed: accepted, not repaired."""
        text = BLOCK.replace("-0.25", "0.999999")
        assert load(text).correlation_matrix()[0, 1] == 0.999999


class TestParameters:
    def test_settings(self, load) -> None:
        inputs = load(
            entry("one")
            + """
            [parameters.tide_mass]
            start = 1500
            lower = 1000
            upper = 2000
            unit = "MeV"
            prior = { kind = "normal", mean = 1500, error = 100 }
            [parameters.tide_phase]
            start = 0
            fixed = true
            [parameters.tide_constant]
            fixed = false
            prior = { kind = "uniform", lower = 0, upper = 1 }
            [parameters.tide_lifetime]
            prior = { kind = "isotropic-angle" }
            """.replace("            ", "")
        )
        assert inputs.parameters == {
            "tide_mass": ParameterSetting(1.5, 1.0, 2.0, None, Prior("normal", mean=1.5, error=0.1)),
            "tide_phase": ParameterSetting(start=0.0, fixed=True),
            "tide_constant": ParameterSetting(fixed=False, prior=Prior("uniform", lower=0.0, upper=1.0)),
            "tide_lifetime": ParameterSetting(prior=Prior("isotropic-angle")),
        }


class TestInclude:
    def test_later_entries_replace_included_ones(self, write, load) -> None:
        write("base.toml", entry("a", value=1.0) + entry("b", value=2.0))
        inputs = load('include = ["base.toml"]\n' + entry("a", value=5.0))
        assert {read.id: read.value for read in inputs.entries} == {"a": 5.0, "b": 2.0}
        assert notices(inputs, "replaced") == [("a", "my.toml:3 replaces the entry of base.toml:1")]

    def test_drop(self, write, load) -> None:
        write(
            "base.toml",
            entry("a") + BLOCK + '[[correlation]]\nbetween = ["a", "pair:tide_mass"]\ncoefficient = 0.1',
        )
        inputs = load('include = ["base.toml"]\ndrop = ["a"]')
        assert inputs.ids == ("pair:tide_height", "pair:tide_mass")
        assert inputs.correlations == ()
        assert notices(inputs, "dropped") == [("a", "dropped by my.toml")]
        assert load('include = ["base.toml"]\ndrop = ["pair"]').ids == ("a",)
        half = load('include = ["base.toml"]\ndrop = ["pair:tide_height"]')
        assert half.ids == ("a", "pair:tide_mass")
        assert_array_equal(half.correlation_matrix(), [[1.0, 0.1], [0.1, 1.0]])

    def test_unknown_drop_names_the_closest(self, write, load) -> None:
        write("base.toml", entry("tide-a") + entry("tide-b") + entry("tide-c") + entry("other"))
        with pytest.raises(
            InputError, match=r'^my.toml:2: drop "tide-d": .*; closest: tide-c, tide-b, tide-a$'
        ):
            load('include = ["base.toml"]\ndrop = ["tide-d"]')

    def test_replacing_a_block(self, write, load) -> None:
        write("base.toml", BLOCK + entry("a"))
        assert (
            load('include = ["base.toml"]\n' + BLOCK.replace("-0.25", "0.5")).correlation_matrix()[1, 2]
            == 0.5
        )
        member = load('include = ["base.toml"]\n' + entry("pair:tide_height", value=3.0))
        assert_array_equal(member.correlation_matrix(), np.eye(3))
        assert load('include = ["base.toml"]\n' + entry("pair", value=3.0)).ids == ("a", "pair")

    def test_correlation_with_an_included_entry(self, write, load) -> None:
        write("base.toml", entry("a"))
        inputs = load(
            'include = ["base.toml"]\n'
            + entry("b")
            + '[[correlation]]\nbetween = ["a", "b"]\ncoefficient = 0.3'
        )
        assert inputs.correlation_matrix()[0, 1] == 0.3

    def test_later_coefficient_replaces_included_one(self, write, load) -> None:
        write(
            "base.toml", entry("a") + entry("b") + '[[correlation]]\nbetween = ["a", "b"]\ncoefficient = 0.3'
        )
        inputs = load('include = ["base.toml"]\n[[correlation]]\nbetween = ["b", "a"]\ncoefficient = 0.4')
        assert inputs.correlation_matrix()[0, 1] == 0.4

    def test_a_file_counts_once(self, write, load) -> None:
        write("base.toml", entry("a"))
        write("left.toml", 'include = ["base.toml"]\ndrop = ["a"]\n' + entry("l"))
        write("right.toml", 'include = ["base.toml"]\n' + entry("r"))
        assert load('include = ["left.toml", "right.toml"]').ids == ("l", "r")

    def test_title_and_revision_are_those_of_the_file_itself(self, write, load) -> None:
        write("base.toml", 'title = "base"\nrevision = 7\n' + entry("a"))
        inputs = load('title = "mine"\ninclude = ["base.toml"]')
        assert (inputs.title, inputs.revision) == ("mine", 1)

    def test_settings_are_replaced(self, write, load) -> None:
        write("base.toml", entry("a") + "[parameters.tide_mass]\nstart = 1.0\n")
        inputs = load('include = ["base.toml"]\n[parameters.tide_mass]\nstart = 2.0\n')
        assert inputs.parameters["tide_mass"].start == 2.0
        assert notices(inputs, "replaced") == [
            ("tide_mass", "my.toml replaces the settings of this parameter")
        ]

    def test_dropping_an_overlap_mends_it(self, write, load) -> None:
        write("base.toml", entry("a", 'error = 0.1\npdg = "S1"'))
        mine = entry("b", 'error = 0.1\npdg = "S1"\noverlaps = ["a"]')
        with pytest.raises(InputError) as caught:
            load('include = ["base.toml"]\n' + mine)
        assert len(caught.value.problems) == 2
        assert load('include = ["base.toml"]\ndrop = ["a"]\n' + mine).ids == ("b",)


class TestDoubleCounting:
    def test_members_of_one_combination_may_share_an_identifier(self, load) -> None:
        extra = 'error = 0.1\npdg = "S1"\npart_of = "S1"'
        assert len(load(entry("a", extra) + entry("b", extra)).entries) == 2

    def test_different_combinations_may_not(self, load) -> None:
        extra = 'error = 0.1\npdg = "S1"\npart_of = "{}"'
        with pytest.raises(InputError, match="has the PDG identifier S1"):
            load(entry("a", extra.format("x")) + entry("b", extra.format("y")))

    def test_selection_at_loading_mends_alternatives_of_one_file(self, load) -> None:
        text = entry("a") + entry("b", 'error = 0.1\noverlaps = ["a"]')
        assert load(text, without=["a"]).ids == ("b",)
        assert load(text, only=["a"]).ids == ("a",)

    def test_overlap_with_a_block(self, load) -> None:
        with pytest.raises(InputError, match='"a"] overlaps with "pair"'):
            load(BLOCK + entry("a", 'error = 0.1\noverlaps = ["pair"]'))


class TestInflateGroup:
    TEXT = (
        entry("a", 'error = 0.1\ninflate_group = "heights"', value=1.0)
        + entry("b", 'error = 0.2\ninflate_group = "heights"', value=2.0)
        + entry("c", 'error = 0.1\ninflate_group = "heights"', value=1.1)
    )

    def test_recomputed_from_the_members_present(self, load) -> None:
        inputs = load(self.TEXT)
        # Weights 100, 25, 100: mean 1.1556, chi2 = sum w (x - mean)^2
        weights, values = np.array([100.0, 25.0, 100.0]), np.array([1.0, 2.0, 1.1])
        mean = (weights * values).sum() / weights.sum()
        scale = np.sqrt((weights * (values - mean) ** 2).sum() / 2.0)
        assert_allclose([read.inflate for read in inputs.entries], scale, rtol=1e-12)
        assert_allclose([read.plus for read in inputs.entries], np.array([0.1, 0.2, 0.1]) * scale, rtol=1e-12)
        assert len(notices(inputs, "inflated")) == 3
        without = inputs.select(without=["b"])
        assert [read.plus for read in without.entries] == [0.1, 0.1]  # 1.0 and 1.1 agree: no factor
        assert [read.plus for read in without.select(without=["c"]).entries] == [0.1]
        assert_allclose(
            inputs.select(only=["a", "b"])["a"].inflate, np.sqrt(1.0 / (0.1**2 + 0.2**2)), rtol=1e-12
        )

    def test_setting_a_factor_takes_an_entry_out(self, load) -> None:
        inputs = load(self.TEXT).with_settings(["b.inflate=1.5"])
        assert_allclose([read.plus for read in inputs.entries], [0.1, 0.3, 0.1])


class TestAverage:
    def test_symmetric(self) -> None:
        found = average([1.0, 3.0], [1.0, 1.0], [1.0, 1.0])
        assert_allclose(
            [found.value, found.error, found.chi2, found.scale], [2.0, np.sqrt(0.5), 2.0, np.sqrt(2.0)]
        )

    def test_single(self) -> None:
        assert average([1.0], [0.2], [0.1]).scale == 1.0

    def test_imprecise_values_do_not_count_for_the_factor(self) -> None:
        found = average([1.0, 1.0, 50.0], [0.1, 0.1, 10.0], [0.1, 0.1, 10.0])
        assert (found.kept, found.scale) == (2, 1.0)

    def test_asymmetric_errors_are_interpolated(self) -> None:
        """Two equal values: each counts with its error at the average, half-way between its two ends."""
        found = average([0.0, 0.0], [2.0, 2.0], [1.0, 1.0])
        assert_allclose(found.value, 0.0, atol=1e-15)
        assert_allclose(found.error, (1.0 + 1.0 / 3.0) / np.sqrt(2.0))

    def test_wrong_shapes(self) -> None:
        with pytest.raises(InputError):
            average([], [], [])


class TestSelection:
    def test_ids_blocks_and_groups(self, load) -> None:
        inputs = load(entry("a", 'error = 0.1\ngroups = ["tree"]') + BLOCK + entry("b"))
        assert inputs.select(only=["tree", "b"]).ids == ("a", "b")
        assert inputs.select(without=["pair"]).ids == ("a", "b")
        assert inputs.select(only=["blocks"], without=["pair:tide_mass"]).ids == ("pair:tide_height",)
        assert inputs.select().ids == inputs.ids
        assert inputs.groups == {"tree": ("a",), "blocks": ("pair:tide_height", "pair:tide_mass")}

    def test_unknown(self, load) -> None:
        inputs = load(entry("a", 'error = 0.1\ngroups = ["tree"]'))
        with pytest.raises(UnknownNameError, match="unknown entry or group 'trees'; did you mean tree"):
            inputs.select(only=["trees"])
        with pytest.raises(UnknownNameError, match="unknown entry 'b'"):
            inputs["b"]

    def test_nothing_left(self, load) -> None:
        with pytest.raises(InputError, match="leaves no entry"):
            load(entry("a")).select(without=["a"])


class TestSettings:
    @pytest.fixture
    def inputs(self, load) -> Inputs:
        return load(
            entry("a.b", "error = 10.0", "tide_mass", "MeV", 500.0)
            + entry("c", "errors = { statistical = 0.3, tagging = 0.4 }")
            + BLOCK
        )

    def test_numbers(self, inputs: Inputs) -> None:
        changed = inputs.with_settings(
            ["a.b.error = 20", "a.b.value=0.6 GeV", "c.errors.tagging=-1.2", "a.b.inflate=2"]
        )
        assert_allclose([changed["a.b"].value, changed["a.b"].plus], [0.6, 0.04])
        assert changed["c"].errors == {"statistical": 0.3, "tagging": -1.2}
        assert notices(changed, "changed")[0] == ("a.b", "error 10 -> 20 MeV")
        assert inputs["a.b"].plus == 0.01

    def test_block_members(self, inputs: Inputs) -> None:
        changed = inputs.with_settings(["pair:tide_mass.error=[40, 50]", "pair:tide_mass.flat_halfwidth=10"])
        mass = changed["pair:tide_mass"]
        assert_allclose([mass.plus, mass.minus, mass.flat_halfwidth], [0.04, 0.05, 0.01])
        assert changed.correlation_matrix()[2, 3] == -0.25

    def test_named_errors_become_one(self, inputs: Inputs) -> None:
        assert inputs.with_settings(["c.error=0.2"])["c"].errors == {}

    def test_notice_says_old_and_new_with_unit(self, inputs: Inputs) -> None:
        changed = inputs.with_settings(
            ["a.b.error=[20, 30]", "pair:tide_mass.error=[0.04, 0.05] GeV", "a.b.inflate=2"]
        )
        assert_allclose([changed["a.b"].plus, changed["a.b"].minus], [0.04, 0.06])  # inflated last
        assert_allclose([changed["pair:tide_mass"].plus, changed["pair:tide_mass"].minus], [0.04, 0.05])
        assert notices(changed, "changed")[0] == ("a.b", "error 10 -> [20, 30] MeV")
        assert notices(changed, "changed")[2] == ("a.b", "inflate 1 -> 2")

    def test_notice_names_lost_shared_sources(self, load) -> None:
        shared = "errors = { statistical = 0.3, tagging = 0.4 }"
        changed = load(entry("a", shared) + entry("b", shared)).with_settings(["a.error=0.6"])
        ((_, text),) = notices(changed, "changed")
        assert text == (
            "error 0.5 -> 0.6; replaces the named errors statistical, tagging; "
            "NO LONGER SHARES tagging with other entries"
        )

    @pytest.mark.parametrize(
        ("number", "warned"), [("0.9", True), ("1.1", False), ("99", False), ("120", True)]
    )
    def test_a_change_of_more_than_ten_is_pointed_out(
        self, inputs: Inputs, number: str, warned: bool
    ) -> None:
        ((_, text),) = notices(inputs.with_settings([f"a.b.error={number}"]), "changed")
        assert ("CAUTION" in text) == warned
        assert ('in the unit of the file, "MeV"' in text) == warned

    def test_scaled_unit_and_plain_number(self, load) -> None:
        inputs = load(entry("a", "error = 0.1", "tide_height", "1e-4", 5.0))
        alone, scaled = (inputs.with_settings([f"a.error={text}"]) for text in ("0.2e-4", "0.2e-4 1"))
        assert_allclose([alone["a"].plus, scaled["a"].plus], [0.2e-8, 0.2e-4])
        assert notices(alone, "changed")[0][1].startswith(
            "error 0.1 -> 2e-05 (in units of 1e-4); CAUTION: 5,000 times smaller than before"
        )
        assert 'such as "error=NUMBER 1"' in notices(alone, "changed")[0][1]
        assert notices(scaled, "changed") == [("a", "error 0.1 -> 0.2 (in units of 1e-4)")]

    def test_kinds_select_like_groups(self, load) -> None:
        inputs = load(entry("a") + entry("b", 'error = 0.1\nkind = "theory"'))
        assert inputs.select(without=["theory"]).ids == ("a",)
        assert inputs.select(only=["theory"]).ids == ("b",)

    def test_parameters(self, inputs: Inputs, catalogue) -> None:
        changed = inputs.with_settings(
            ["parameters.tide_mass.start=1500 MeV", "parameters.tide_mass.fixed=true"], catalogue=catalogue
        )
        assert changed.parameters == {"tide_mass": ParameterSetting(start=1.5, fixed=True)}

    @pytest.mark.parametrize(
        ("setting", "message"),
        [
            ("c.error", "write ID.error=NUMBER"),
            ("c.error=", "write ID.error=NUMBER"),
            ("c=0.1", "say which number: c.error="),
            ("c.error=abc", '"abc" is not a number'),
            ("c.error=0", "must be positive, not 0"),
            ("c.error=nan", "must be finite"),
            ("c.error=[0.1]", r"write error=\[PLUS, MINUS\]"),
            ("c.error=[0.1", r"write error=NUMBER or error=\[PLUS, MINUS\]"),
            ("c.error=2,3", r'"2,3" is not one number; write error=NUMBER or error=\[PLUS, MINUS\]'),
            ("c.error=+2 -3", "is not one number"),
            ("c.error=[2, -3]", "must be positive, not -3"),
            ("c.error=[2, 3] GeV", 'unit "GeV" cannot'),
            ("c.error=0.1 GeV", 'unit "GeV" cannot be converted to "1"'),
            ("c.errors.scale=0.1", 'has no error source "scale"; it has: statistical, tagging'),
            ("c.errors.statistical=-0.1", "must be positive"),
            ("c.weight=0.1", 'unknown key "weight"; use one of value, error'),
            ("c.inflate=-1", "must be positive"),
            ("c.flat_halfwidth=-1", "must be positive"),
            ("parameters.tide_mass.prior=1", "KEY one of start"),
            ("parameters.tide_height.start=1", "computed from others"),
            ("parameters.tide_mass.fixed=yes", "true or false"),
            ("parameters.tide_mass.fixed=true", "needs its value"),
        ],
    )
    def test_unusable(self, inputs: Inputs, catalogue, setting: str, message: str) -> None:
        with pytest.raises(InputError, match=message):
            inputs.with_settings([setting], catalogue=catalogue)

    def test_unknown_entry(self, inputs: Inputs, catalogue) -> None:
        with pytest.raises(UnknownNameError, match=r"unknown entry 'a.c'; did you mean a.b"):
            inputs.with_settings(["a.c.error=1"])
        with pytest.raises(UnknownNameError, match=r"unknown parameter 'tide_mas'"):
            inputs.with_settings(["parameters.tide_mas.start=1"], catalogue=catalogue)

    def test_correlation_must_stay_positive_definite(self, load) -> None:
        text = entry("a", "errors = { statistical = 0.3, tagging = 0.4 }") + entry(
            "b", "errors = { tagging = 0.4, own = 0.1 }"
        )
        inputs = load(text)
        with pytest.raises(InputError, match="not positive definite"):
            inputs.with_settings(["a.errors.statistical=1e-9", "b.errors.own=1e-9"])


class TestNotices:
    def test_recalled_and_inflated(self, load) -> None:
        inputs = load(
            entry("a", 'error = 0.1\nrecalled = true\ninflate = 2.5\nnote = "they disagree"')
            + entry("b", "error = 1.0\ninflate = 1.5")
        )
        assert inputs.notices == (
            Notice("recalled", "a", "quoted from memory: invented"),
            Notice("inflated", "a", "error multiplied by 2.5: they disagree"),
            Notice("inflated", "b", "error multiplied by 1.5: no reason given"),
        )


def test_records_are_frozen_and_can_be_sent_to_other_processes(load) -> None:
    inputs = load(entry("a", "errors = { statistical = 1.0 }") + BLOCK)
    again = pickle.loads(pickle.dumps(inputs))
    assert again == inputs
    assert hash(again) == hash(inputs)
    assert_array_equal(again.terms.plus, inputs.terms.plus)
    with pytest.raises(AttributeError):
        inputs.entries[0].value = 3.0  # type: ignore[misc]
    assert replace(inputs, title="other") != inputs
