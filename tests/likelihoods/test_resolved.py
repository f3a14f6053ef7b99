"""The self-contained file: the same terms to the bit, and the same text, when it is read again."""

from __future__ import annotations

import json
import tempfile
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_array_equal

from likelihoods import Entry, Inputs, bundled_names, load_inputs

UNITS = {
    "tide_frequency": ["1/ps", "1/ns", "1e12 / s"],
    "tide_height": ["1", "%", "1e-3"],
    "tide_angle": ["deg", "rad", "mrad"],
    "tide_mass": ["GeV", "MeV"],
    "tide_lifetime": ["s", "ps"],
}
positive = st.floats(1e-2, 1e3)
finite = st.floats(-1e6, 1e6)
texts = st.text(st.characters(codec="utf-8"), min_size=1, max_size=12).filter(str.strip)
words = st.text("abc-", min_size=1, max_size=5)


@st.composite
def descriptions(draw: Any) -> dict[str, Any]:
    optional = {
        "kind": st.sampled_from(["experiment", "theory"]),
        "groups": st.lists(words, max_size=3),
        "overlaps": st.just(["never-used"]),
        "recalled": st.booleans(),
        "note": texts,
        "part_of": words,
    }
    chosen = draw(st.fixed_dictionaries({"source": texts}, optional=optional))
    return dict(chosen)


@st.composite
def measurements(draw: Any, identity: str) -> dict[str, Any]:
    quantity = draw(st.sampled_from(list(UNITS)))
    table = draw(descriptions()) | {"id": identity, "quantity": quantity, "value": draw(finite)}
    table["unit"] = draw(st.sampled_from(UNITS[quantity]))
    how = draw(st.sampled_from(["single", "pair", "named"]))
    if how == "named":
        sources = draw(
            st.dictionaries(
                st.sampled_from(["tagging", "energy scale", "x.y"]), st.floats(0.1, 2.0), max_size=3
            )
        )
        table["errors"] = {"statistical": draw(st.floats(0.5, 2.0)), **sources}
    else:
        table["error"] = draw(positive) if how == "single" else [draw(positive), draw(positive)]
    if draw(st.booleans()):
        table["flat_halfwidth"] = draw(positive)
    if draw(st.booleans()):
        table["inflate"] = draw(st.floats(0.5, 5.0))
    return table


@st.composite
def blocks(draw: Any, identity: str) -> dict[str, Any]:
    quantities = draw(st.lists(st.sampled_from(list(UNITS)), min_size=1, max_size=3, unique=True))
    size = len(quantities)
    root = np.random.default_rng(draw(st.integers(0, 1000))).standard_normal((size, size + 2))
    table = draw(descriptions()) | {"id": identity, "quantities": quantities}
    table["values"] = [draw(finite) for _ in quantities]
    table["units"] = [draw(st.sampled_from(UNITS[quantity])) for quantity in quantities]
    if draw(st.booleans()):
        table["flat_halfwidths"] = [draw(positive | st.just(0.0)) for _ in quantities]
        table["pdg"] = [draw(st.sampled_from(["", f"{identity}-{i}"])) for i in range(size)]
    if draw(st.booleans()):
        table["inflate"] = draw(st.just(2.0) | st.just([draw(st.floats(0.5, 5.0)) for _ in quantities]))
    if draw(st.booleans()):
        table["ids"] = [f"{identity} member {i}" for i in range(size)]
    if draw(st.booleans()):
        table["covariance"] = (root @ root.T).tolist()
    else:
        scale = np.sqrt(np.diagonal(root @ root.T))
        table["correlation"] = (root @ root.T / np.outer(scale, scale)).tolist()
        table["errors"] = [draw(positive | st.tuples(positive, positive).map(list)) for _ in quantities]
    return table


@st.composite
def documents(draw: Any) -> dict[str, Any]:
    names = [f"entry {i}" for i in range(draw(st.integers(1, 5)))]
    document: dict[str, Any] = {
        "title": draw(texts),
        "measurement": [draw(measurements(name)) for name in names],
    }
    document["correlated"] = [draw(blocks(f"block.{i}")) for i in range(draw(st.integers(0, 2)))]
    document["parameters"] = {
        "tide_phase": {
            "start": draw(st.floats(0.0, 1.0)),
            "fixed": draw(st.booleans()),
            "lower": -1.0,
            "upper": 2.0,
        }
    }
    return document


def written(document: dict[str, Any]) -> str:
    """A plain writer, not the one under test: values as JSON, which TOML reads but for surrogate pairs."""
    lines = [f"title = {value(document['title'])}"]
    for name in ("measurement", "correlated"):
        for table in document[name]:
            lines.append(f"[[{name}]]")
            lines += [f"{key} = {value(item)}" for key, item in table.items()]
    for name, table in document["parameters"].items():
        lines.append(f"[parameters.{name}]")
        lines += [f"{key} = {value(item)}" for key, item in table.items()]
    return "\n".join(lines) + "\n"


def value(item: Any) -> str:
    if isinstance(item, dict):
        return "{" + ", ".join(f"{json.dumps(key)} = {value(inner)}" for key, inner in item.items()) + "}"
    return json.dumps(item, ensure_ascii=False).replace("\x7f", "\\u007f")


def plain(entry: Entry) -> Entry:
    """The entry without the place where it was written."""
    return replace(entry, file="", line=0, label="")


def assert_same(first: Inputs, second: Inputs) -> None:
    assert [plain(entry) for entry in first.entries] == [plain(entry) for entry in second.entries]
    assert first.parameters == second.parameters
    assert_array_equal(first.correlation_matrix(), second.correlation_matrix())
    for name in ("values", "plus", "minus"):
        assert_array_equal(getattr(first.terms, name), getattr(second.terms, name))
    assert first.resolved_toml() == second.resolved_toml()
    assert first.sha256 == second.sha256


def read_again(inputs: Inputs, catalogue: Any = None) -> Inputs:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "again.toml"
        path.write_text(inputs.resolved_toml(), encoding="utf-8", newline="")
        return load_inputs(path, catalogue=catalogue)


@settings(max_examples=60, deadline=None)
@given(document=documents())
def test_random_files(catalogue: Any, document: dict[str, Any]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "my.toml"
        path.write_text(written(document), encoding="utf-8", newline="")
        inputs = load_inputs(path, catalogue=catalogue)
    assert inputs.title == document["title"]
    assert_same(inputs, read_again(inputs, catalogue))
    kept = inputs.select(only=[inputs.ids[0], inputs.ids[-1]])
    assert_same(kept, read_again(kept, catalogue))
    changed = inputs.with_settings([f"{inputs.ids[-1]}.error=0.125", f"{inputs.ids[-1]}.inflate=1.5"])
    assert_same(changed, read_again(changed, catalogue))


def test_everything_else(write, load, catalogue) -> None:
    """Includes, drops, replacements, groups of scale factors, single coefficients, priors."""
    template = (
        '[[measurement]]\nid = "{}"\nquantity = "tide_height"\nvalue = {}\nunit = "%"\nsource = "s"\n{}\n'
    )
    group = 'error = 1.0\ninflate_group = "g"'
    write("base.toml", "".join(template.format(name, i, group) for i, name in enumerate("abc")))
    inputs = load(
        'include = ["base.toml"]\ndrop = ["c"]\n'
        + template.format("d", 4.0, "error = 0.1\nrecalled = true")
        + '[[correlation]]\nbetween = ["a", "d"]\ncoefficient = 0.1\n'
        + "[parameters.tide_mass]\nprior = { kind = 'log-uniform', lower = 1e-3, upper = 10 }\n"
    )
    again = read_again(inputs, catalogue)
    assert_same(inputs, again)
    assert [notice.kind for notice in again.notices] == ["recalled"]
    assert inputs.sha256 != inputs.with_settings(["a.value=1"]).sha256


def test_bundled_sets() -> None:
    names = bundled_names()
    assert {"averages-2026", "averages-2026-tree"} <= set(names)
    for name in names:
        inputs = load_inputs(name)
        assert inputs.name == name
        assert_same(inputs, read_again(inputs))
