"""find, recipe and compute against the shipped catalogue."""

from __future__ import annotations

import json
import math
from collections.abc import Callable

import pytest
from click.testing import Result

from fitcore.commands.find import search
from observables import Catalogue, Real, catalogue

Run = Callable[..., Result]


@pytest.mark.parametrize(
    ("words", "first"),
    [
        ("dmd", "mixing_frequency_Bd"),
        ("dms", "mixing_frequency_Bs"),
        ("eps", "epsilon_K"),
        ("Delta m", "mixing_frequency_Bd"),
        ("DELTA M_S", "mixing_frequency_Bs"),
        ("V_cb", "V_cb"),
        ("|V_ub|", "magnitude_V_ub"),
        ("sin2b", "sine_2beta_ccs"),
        ("J", "jarlskog"),
        ("angle gamma", "angle_gamma"),
        ("B oscillation", "mixing_frequency_Bd"),
        ("tau lifetime", "lifetime_tau"),
        ("B -> tau nu", "branching_Bu_tau_nu"),
        ("D_s -> tau nu", "branching_Ds_tau_nu"),
        ("K+ -> pi0 e nu", "branching_K_pi0_e_nu"),
        ("B_K", "bag_K"),
    ],
)
def test_find_puts_what_was_meant_first(weakmix: Run, words: str, first: str) -> None:
    done = weakmix("find", words, "--json", "-")
    assert done.exit_code == 0
    assert json.loads(done.stdout)["found"][0]["name"] == first
    shown = weakmix("find", words).stdout
    assert shown.startswith("weakmix ")
    assert "quark mixing" in shown.splitlines()[0]


def test_find_nothing_but_an_arrow(weakmix: Run) -> None:
    done = weakmix("find", "->")
    assert done.exit_code == 2
    assert "nothing in the catalogue matches" in done.stderr
    assert "branching_Bu_tau_nu" in weakmix("find", "B", "->", "tau", "nu").stdout.splitlines()[3]


def test_find_every_name_finds_itself_first() -> None:
    nodes = [catalogue[name] for name in catalogue.names()]
    for node in nodes:
        assert search(nodes, [node.name])[0].name == node.name


def test_find_kind_and_limit(weakmix: Run) -> None:
    kinds = {
        found["kind"]
        for found in json.loads(weakmix("find", "mass", "--kind", "constant", "--json", "-").stdout)["found"]
    }
    assert kinds == {"constant"}
    assert "more: add a word" in weakmix("find", "V", "--limit", "1").stdout


def test_find_nothing_proposes_names(weakmix: Run) -> None:
    done = weakmix("find", "jarlskgo")
    assert done.exit_code == 2
    assert "jarlskog" in done.stderr


def test_recipe_shows_formula_tree_parameters_and_sources(weakmix: Run) -> None:
    done = weakmix("recipe", "mixing_frequency_Bd", "--json", "-")
    assert done.exit_code == 0
    content = json.loads(done.stdout)
    assert content["ingredients"] == list(catalogue.ingredients("mixing_frequency_Bd"))
    assert set(content["parameters"]) == set(catalogue.parameters_of("mixing_frequency_Bd"))
    assert content["unit"] == "1/ps"
    assert content["sources"]
    assert "def mixing_frequency_Bd" in content["formulas"][0]["text"]
    shown = weakmix("recipe", "mixing_frequency_Bd").stdout
    assert "M12_Bd" in shown
    assert "mixing_matrix_element_ratio (parameter)" in shown


@pytest.mark.parametrize("kind", ["quantity", "parameter", "constant"])
def test_recipe_of_everything(weakmix: Run, kind: str) -> None:
    for name in catalogue.names(kind):
        done = weakmix("recipe", name, "--json", "-", "--quiet")
        assert done.exit_code == 0, (name, done.stderr)
        assert done.stderr == ""
        assert json.loads(done.stdout)["kind"] == kind


def test_recipe_of_a_family_says_what_its_arguments_are(weakmix: Run) -> None:
    assert "Formula, with element = V_ub" in weakmix("recipe", "magnitude_V_ub").stdout


def test_recipe_under_a_hypothesis(weakmix: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    from fitcore.commands import recipe
    from observables import Hypothesis

    invented = Hypothesis("invented", title="Something added", source="a test")
    invented.parameter("added", unit="1", start=0.0, scale=0.1, title="size of it")

    @invented.replaces("mixing_frequency_Bd")
    def replaced(standard: float, added: float) -> Real:
        return standard * (1 + added)

    assert recipe.ingredients("mixing_frequency_Bd", invented) == (
        *catalogue.ingredients("mixing_frequency_Bd"),
        "added",
    )
    titles = [title for title, _ in recipe.formulas(catalogue["mixing_frequency_Bd"], invented)]
    assert titles == ["Formula", "Replaced by invented"]


def test_unknown_names_get_proposals(weakmix: Run) -> None:
    for command in (["recipe"], ["compute", "--start-values"]):
        done = weakmix(*command, "jarlskgo")
        assert done.exit_code == 2
        assert "did you mean jarlskog" in done.stderr
    done = weakmix("compute", "jarlskgo", "angle_gama", "--start-values")
    assert "'jarlskgo'" in done.stderr
    assert "'angle_gama'" in done.stderr


@pytest.mark.parametrize(("rhobar", "etabar"), [(0.2, 0.3), (-0.3, 0.2), (0.1, -0.4), (-0.25, -0.15)])
def test_compute_at_any_point(weakmix: Run, rhobar: float, etabar: float) -> None:
    """The apex is -V_ud V_ub* / (V_cd V_cb*) (A. Buras, M. Lautenbacher, G. Ostermaier, PRD 50, 3433)."""
    done = weakmix(
        *(
            "compute",
            "angle_gamma",
            "side_Rb",
            "V_ud",
            "V_ub",
            "V_cd",
            "V_cb",
            "--start-values",
            "--json",
            "-",
        ),
        *("--at", f"wolfenstein_rhobar={rhobar}", "--at", f"wolfenstein_etabar={etabar}"),
    )
    assert done.exit_code == 0, done.stderr
    content = json.loads(done.stdout)
    element = {name: complex(*content["values"][name]) for name in ("V_ud", "V_ub", "V_cd", "V_cb")}
    apex = -element["V_ud"] * element["V_ub"].conjugate() / (element["V_cd"] * element["V_cb"].conjugate())
    assert apex == pytest.approx(complex(rhobar, etabar), rel=1e-12)
    gamma = math.degrees(math.atan2(etabar, rhobar))
    assert (content["values"]["angle_gamma"] - gamma) % 360.0 == pytest.approx(0.0, abs=1e-9) or (
        content["values"]["angle_gamma"] - gamma
    ) % 360.0 == pytest.approx(360.0, abs=1e-9)
    assert content["values"]["side_Rb"] == pytest.approx(math.hypot(rhobar, etabar), rel=1e-12)
    assert content["units"] == {"angle_gamma": "deg", "side_Rb": "1", **dict.fromkeys(element, "1")}
    assert content["parameters"]["wolfenstein_A"]["from"] == "start value"
    assert content["parameters"]["wolfenstein_rhobar"] == {"value": rhobar, "from": "--at"}


def test_compute_says_what_it_used(weakmix: Run) -> None:
    shown = weakmix(
        "compute", "jarlskog", "--start-values", "--at", "wolfenstein_A=0.8", "--at", "bag_K=0.7"
    ).stdout
    assert "start value" in shown
    assert "--at" in shown
    assert "Not used: nothing asked for rests on bag_K." in shown
    assert (
        "outside its physical bounds"
        in weakmix("compute", "jarlskog", "--start-values", "--at", "wolfenstein_lambda=-0.2").stdout
    )


def test_compute_lists_what_is_missing(weakmix: Run) -> None:
    done = weakmix("compute", "jarlskog", "--at", "wolfenstein_A=0.8")
    assert done.exit_code == 2
    for name in ("wolfenstein_lambda", "wolfenstein_rhobar", "wolfenstein_etabar", "--start-values"):
        assert name in done.stderr
    assert "wolfenstein_A" not in done.stderr


def test_compute_converts_units(weakmix: Run) -> None:
    values = [
        json.loads(
            weakmix(
                "compute",
                "mixing_frequency_Bs",
                "--start-values",
                "--at",
                f"mixing_matrix_element_Bs={text}",
                "--json",
                "-",
            ).stdout
        )["values"]["mixing_frequency_Bs"]
        for text in ("0.25GeV", "250 MeV", "2.5e8eV", "250[MeV]")
    ]
    assert values[1:] == pytest.approx([values[0]] * 3, rel=1e-12)


@pytest.mark.parametrize(
    ("assignment", "words"),
    [
        ("mixing_matrix_element_Bs=0.25", "the unit is missing; write --at mixing_matrix_element_Bs=0.25GeV"),
        ("mixing_matrix_element_Bs=0.25ps", "cannot be converted"),
        ("mixing_matrix_element_Bs=0.25foo", "foo"),
        ("wolfenstein_A=1GeV", "cannot be converted"),
        ("wolfenstein_A", "name=value"),
        ("wolfenstein_A=nan", "name=value"),
        ("wolfenstein_A=1e999", "not finite"),
        ("wolfenstien_A=1", "did you mean wolfenstein_A"),
        ("jarlskog=1", "is a quantity"),
    ],
)
def test_compute_refuses_bad_assignments(weakmix: Run, assignment: str, words: str) -> None:
    done = weakmix("compute", "mixing_frequency_Bs", "--start-values", "--at", assignment)
    assert done.exit_code == 2
    assert words in done.stderr
    assert done.stdout == ""


def test_compute_reports_all_mistakes_together(weakmix: Run) -> None:
    done = weakmix(
        "compute",
        "jarlskog",
        "--start-values",
        "--at",
        "foo",
        "--at",
        "bar=1",
        "--at",
        "bag_K=1",
        "--at",
        "bag_K=2",
    )
    assert done.stderr.count("--at ") == 3


def test_undefined_values_are_null_and_exit_1(weakmix: Run) -> None:
    done = weakmix("compute", "jarlskog", "--start-values", "--at", "wolfenstein_A=50", "--json", "-")
    assert json.loads(done.stdout)["values"]["jarlskog"] is None
    assert done.exit_code == 1
    assert "no value at this point: jarlskog" in done.stderr


def test_the_catalogue_of_the_look_up_is_the_public_one() -> None:
    assert isinstance(catalogue, Catalogue)
