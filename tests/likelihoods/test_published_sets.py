"""The bundled sets: they load, keep their vocabulary, and hold exactly what their documentation says."""

from __future__ import annotations

import hashlib
import re
import tomllib
from pathlib import Path

import pytest

import likelihoods
from likelihoods import load_inputs
from observables import catalogue

FOLDER = Path(likelihoods.__file__).parent / "published"
SETS = sorted(path.stem for path in FOLDER.glob("*.toml"))
WHOLE_SETS = ["averages-2026", "averages-2026-tree", "world-2026"]

FAMILIES = {
    "magnitude",
    "tree-phase",
    "cp-asymmetry",
    "oscillation",
    "kaon-epsilon",
    "lattice",
    "perturbative",
    "lifetime",
    "radiative",
    "form-factor-shape",
    "mass",
}
OTHER_GROUPS = {"tree", "loop", "kaon", "charm", "beauty", "inclusive", "exclusive"}
THEORY_FAMILIES = {"lattice", "perturbative", "radiative", "mass"}

# id: (quantity, value, plus, minus) in the catalogue's units: PDG 2026 review 12 "CKM Quark-Mixing Matrix"
# and, for the theory inputs, FLAG Review 2024 (arXiv:2411.04268) and the papers named in the file.
REVIEW_LEVEL = {
    "V-ud": ("magnitude_V_ud", 0.97367, 0.00032, 0.00032),
    "V-us": ("magnitude_V_us", 0.22431, 0.00085, 0.00085),
    "V-ub": ("magnitude_V_ub", 3.89e-3, 0.16e-3, 0.16e-3),
    "V-cd": ("magnitude_V_cd", 0.2247, 0.0022, 0.0022),
    "V-cs": ("magnitude_V_cs", 0.969, 0.005, 0.005),
    "V-cb": ("magnitude_V_cb", 40.7e-3, 1.3e-3, 1.3e-3),
    "V-tb": ("magnitude_V_tb", 1.002, 0.024, 0.024),
    "gamma-average": ("angle_gamma", 66.4, 2.7, 2.8),
    "frequency-Bd": ("mixing_frequency_Bd", 0.5068, 0.0019, 0.0019),
    "frequency-Bs": ("mixing_frequency_Bs", 17.765, 0.006, 0.006),
    "epsilon-K": ("epsilon_K", 2.228e-3, 0.011e-3, 0.011e-3),
    "sine-2beta": ("sine_2beta_ccs", 0.710, 0.011, 0.011),
    "alpha-average": ("isospin_alpha", 84.1, 3.7, 3.0),
    "mixing-matrix-element-Bs": ("mixing_matrix_element_Bs", 0.2561, 0.0057, 0.0057),
    "mixing-matrix-element-ratio": ("mixing_matrix_element_ratio", 1.216, 0.016, 0.016),
    "bag-K": ("bag_K", 0.7533, 0.0091, 0.0091),
    "decay-constant-K": ("decay_constant_K", 0.1557, 0.0003, 0.0003),
    "top-mass": ("top_mass_msbar", 163.0, 0.6, 0.6),
    "charm-mass": ("charm_mass_msbar", 1.278, 0.013, 0.013),
    "short-distance-factor-B": ("short_distance_factor_B", 0.5510, 0.0022, 0.0022),
    "short-distance-factor-top-top": ("short_distance_factor_top_top", 0.550, 0.023, 0.023),
    "short-distance-factor-up-top": ("short_distance_factor_up_top", 0.402, 0.005, 0.005),
    "long-distance-factor-epsilon-K": ("long_distance_factor_epsilon_K", 0.94, 0.02, 0.02),
}
TREE_LEVEL = ["V-ud", "V-us", "V-ub", "V-cd", "V-cs", "V-cb", "V-tb", "gamma-average"]


@pytest.fixture(scope="module", params=SETS)
def inputs(request):
    return load_inputs(request.param)


def test_all_sets_are_there():
    assert {"averages-2026", "averages-2026-tree", "world-2026"} <= set(SETS)


def test_ids_are_unique_and_spelled_alike(inputs):
    ids = [entry.id for entry in inputs.entries]
    assert len(ids) == len(set(ids))
    assert all(re.fullmatch(r"[A-Za-z0-9]+(-[A-Za-z0-9]+)*", name) for name in ids)


def test_every_entry_has_a_source_and_a_known_quantity(inputs):
    for entry in inputs.entries:
        assert len(entry.source) > 10, entry.id
        assert entry.quantity in catalogue, entry.id
        assert entry.unit == catalogue[entry.quantity].unit, entry.id
        assert not catalogue[entry.quantity].is_complex, entry.id


def test_groups_keep_to_the_vocabulary(inputs):
    for entry in inputs.entries:
        groups = set(entry.groups)
        assert len(groups & FAMILIES) == 1, f"{entry.id}: exactly one family, not {sorted(groups & FAMILIES)}"
        assert groups <= FAMILIES | OTHER_GROUPS, f"{entry.id}: {sorted(groups - FAMILIES - OTHER_GROUPS)}"
        assert not {"tree", "loop"} <= groups, entry.id
        assert not {"inclusive", "exclusive"} <= groups, entry.id
        assert len(groups) == len(entry.groups), entry.id


def test_theory_inputs_are_marked_as_such(inputs):
    for entry in inputs.entries:
        family = (set(entry.groups) & FAMILIES).pop()
        if (
            family in THEORY_FAMILIES and entry.id != "top-mass"
        ):  # a measured mass, whatever its conversion costs
            assert entry.kind == "theory", entry.id
        elif family != "form-factor-shape":
            assert entry.kind == "experiment", entry.id


def test_inflated_errors_give_their_reason(inputs):
    for entry in inputs.entries:
        assert entry.inflate >= 1
        if entry.inflate != 1:
            assert entry.note, entry.id


def test_no_identifier_is_used_twice(inputs):
    identifiers = [entry.pdg for entry in inputs.entries if entry.pdg]
    assert len(identifiers) == len(set(identifiers))


def numbers_of(inputs):
    """Fingerprint of everything that a fit of the set depends on."""
    rows = [
        " ".join([e.id, e.quantity, *(f"{x:.10g}" for x in (e.value, e.plus, e.minus, e.flat_halfwidth))])
        for e in inputs.entries
    ]
    rows += [f"{block.id} {block.ids} {block.correlation}" for block in inputs.blocks]
    rows += [f"{link.between} {link.coefficient}" for link in inputs.correlations]
    return hashlib.sha256("\n".join(rows).encode()).hexdigest()[:12]


@pytest.mark.parametrize("name", SETS)
def test_no_number_changes_without_revision_and_changelog_line(name):
    content = tomllib.loads((FOLDER / f"{name}.toml").read_text(encoding="utf-8"))
    assert content["title"]
    changes = (FOLDER / "CHANGELOG.md").read_text(encoding="utf-8")
    newest = re.search(rf"^- `{re.escape(name)}` revision (\d+): .*\(numbers ([0-9a-f]+)\)", changes, re.M)
    assert newest is not None, "no line in CHANGELOG.md"
    now = (str(content["revision"]), numbers_of(load_inputs(name)))
    assert newest.groups() == now, f"new numbers {now[1]}: raise `revision` and add a line to CHANGELOG.md"


@pytest.mark.parametrize("name", SETS)
def test_readme_lists_the_set(name):
    assert f"`{name}`" in (FOLDER / "README.md").read_text(encoding="utf-8")


def test_review_level_set_holds_exactly_the_published_inputs():
    inputs = load_inputs("averages-2026")
    found = {entry.id: (entry.quantity, entry.value, entry.plus, entry.minus) for entry in inputs.entries}
    assert set(found) == set(REVIEW_LEVEL)
    for name, (quantity, *numbers) in REVIEW_LEVEL.items():
        assert found[name][0] == quantity
        assert found[name][1:] == pytest.approx(numbers, rel=1e-12), name
    assert len(inputs.correlations) == 0
    assert all(
        entry.flat_halfwidth == 0 and entry.inflate == 1 and not entry.errors for entry in inputs.entries
    )


def test_tree_level_set_is_the_seven_magnitudes_and_gamma():
    inputs = load_inputs("averages-2026-tree")
    assert [entry.id for entry in inputs.entries] == TREE_LEVEL
    whole = {entry.id: entry for entry in load_inputs("averages-2026").entries}
    for entry in inputs.entries:
        assert (entry.value, entry.plus, entry.minus) == (
            whole[entry.id].value,
            whole[entry.id].plus,
            whole[entry.id].minus,
        )
        assert entry.kind == "experiment"


def test_group_tree_of_the_whole_set_is_the_tree_level_set():
    chosen = load_inputs("averages-2026").select(only=["tree"])
    assert [entry.id for entry in chosen.entries] == TREE_LEVEL


def test_listings_values_that_differ_from_the_review_carry_no_identifier():
    entries = {entry.id: entry for entry in load_inputs("averages-2026").entries}
    assert entries["epsilon-K"].pdg is None
    assert entries["frequency-Bs"].pdg is None


@pytest.mark.parametrize(
    ("alternative", "dropped"),
    [
        ("alternative-bag-K", ["bag-K"]),
        ("alternative-B-mixing", ["mixing-matrix-element-Bs", "mixing-matrix-element-ratio"]),
    ],
)
@pytest.mark.parametrize("name", ["averages-2026", "world-2026"])
def test_alternatives_replace_as_documented(name, alternative, dropped, tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text(
        f'title = "mine"\nrevision = 1\ninclude = ["{name}", "{alternative}"]\ndrop = {dropped!r}\n'.replace(
            "'", '"'
        )
    )
    inputs = load_inputs(path)
    ids = {entry.id for entry in inputs.entries}
    assert not ids & set(dropped)
    assert {entry.id for entry in load_inputs(alternative).entries} <= ids
    assert len(inputs.entries) == len(load_inputs(name).entries)


@pytest.mark.parametrize("name", WHOLE_SETS)
def test_whole_sets_leave_no_free_parameter_without_information(name):
    """Each parameter that an entry needs is measured, or held fixed, or one of the four of the matrix."""
    inputs = load_inputs(name)
    measured = {entry.quantity for entry in inputs.entries}
    needed = {parameter for entry in inputs.entries for parameter in catalogue.parameters_of(entry.quantity)}
    for parameter in sorted(needed - measured):
        if not parameter.startswith("wolfenstein_"):
            setting = inputs.parameters.get(parameter)
            assert catalogue[parameter].fixed or (setting and setting.fixed), parameter
