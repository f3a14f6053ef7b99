"""Whatever a file holds, it loads or is an input error with a place: never another exception."""

from __future__ import annotations

import re
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from likelihoods import load_inputs
from observables.errors import InputError

GOOD: dict[str, Any] = {
    "title": "x",
    "revision": 1,
    "include": ["averages-2026-tree"],
    "drop": ["one"],
    "measurement": [
        {"id": "a", "quantity": "tide_height", "value": 1.0, "error": [0.1, 0.2], "unit": "%", "source": "s"},
        {
            "id": "b",
            "quantity": "tide_height",
            "value": 1.0,
            "errors": {"statistical": 0.1, "tagging": 0.2},
            "unit": "1",
            "source": "s",
            "kind": "theory",
            "groups": ["g"],
            "inflate": 2.0,
            "overlaps": ["z"],
            "pdg": "S1",
            "part_of": "p",
            "recalled": True,
            "note": "n",
            "flat_halfwidth": 0.1,
        },
        {
            "id": "c",
            "quantity": "tide_angle",
            "value": 1,
            "error": 2,
            "unit": "deg",
            "source": "s",
            "inflate_group": "i",
        },
    ],
    "correlated": [
        {
            "id": "p",
            "ids": ["p1", "p2"],
            "quantities": ["tide_mass", "tide_depth"],
            "values": [1.0, 2.0],
            "errors": [0.1, [0.1, 0.2]],
            "units": ["MeV", "1"],
            "correlation": [[1.0, 0.5], [0.5, 1.0]],
            "source": "s",
            "inflate": [1.0, 2.0],
            "pdg": ["S2", ""],
            "flat_halfwidths": [0.0, 0.1],
        },
        {
            "id": "q",
            "quantities": ["tide_height", "tide_depth"],
            "values": [1.0, 2.0],
            "units": "1",
            "covariance": [[1.0, 0.5], [0.5, 2.0]],
            "source": "s",
        },
    ],
    "correlation": [{"between": ["a", "p1"], "coefficient": 0.1}],
    "parameters": {
        "tide_mass": {
            "start": 1.0,
            "lower": 0.0,
            "upper": 2.0,
            "prior": {"kind": "normal", "mean": 1.0, "error": 0.1},
        },
        "tide_phase": {"start": 1.0, "fixed": True, "unit": "rad"},
    },
}

odd = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-3, 3),
    st.just(10**400),
    st.floats(),
    st.sampled_from(
        ["", " ", "a", "b", "p", "one", "%", "GeV", "tide_mass", "tide_amplitude", "my.toml", "\0", "."]
    ),
    st.text(max_size=3),
    st.lists(st.integers(-1, 2) | st.text(max_size=2) | st.lists(st.floats(), max_size=2), max_size=3),
    st.dictionaries(
        st.sampled_from(["id", "kind", "x", "statistical"]),
        st.integers(-1, 2) | st.text(max_size=2),
        max_size=2,
    ),
)


def places(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    found = [path]
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, item in items:
        found += places(item, (*path, key))
    return found


def with_change(value: Any, path: tuple[Any, ...], new: Any) -> Any:
    """The same document with one place replaced, or removed where the new value is None."""
    if not path:
        return new
    if isinstance(value, dict):
        changed = {
            key: with_change(item, path[1:], new) if key == path[0] else item for key, item in value.items()
        }
        return {key: item for key, item in changed.items() if item is not None}
    changed_list = [
        with_change(item, path[1:], new) if i == path[0] else item for i, item in enumerate(value)
    ]
    return [item for item in changed_list if item is not None]


def toml(value: Any) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{toml(key)} = {toml(item)}" for key, item in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(toml, value)) + "]"
    if isinstance(value, str):
        return '"' + "".join(f"\\U{ord(c):08x}" for c in value) + '"'
    return str(value).lower()


def plain(document: dict[str, Any]) -> str:
    return "\n".join(f"{key} = {toml(value)}" for key, value in document.items())


def test_unchanged(catalogue: Any, tmp_path: Path) -> None:
    path = tmp_path / "my.toml"
    path.write_text(plain({key: value for key, value in GOOD.items() if key not in ("include", "drop")}))
    assert len(load_inputs(path, catalogue=catalogue).entries) == 7


@settings(max_examples=250, deadline=None)
@given(path=st.sampled_from(places(GOOD)[1:]), new=odd, second=st.sampled_from(places(GOOD)[1:]))
def test_any_change(catalogue: Any, path: tuple[Any, ...], new: Any, second: tuple[Any, ...]) -> None:
    document = {key: value for key, value in GOOD.items() if key not in ("include", "drop")}
    if path[0] in document:
        document = with_change(document, path, new)
    if path[0] != second[0] and second[0] in document:
        document = with_change(document, second, None)
    check(catalogue, plain(document))


@pytest.mark.parametrize("key", ["include", "drop"])
@settings(max_examples=50, deadline=None)
@given(new=odd)
def test_any_include_and_drop(catalogue: Any, key: str, new: Any) -> None:
    check(catalogue, "" if new is None else f"{key} = {toml(new)}")


@settings(max_examples=200, deadline=None)
@given(text=st.text(max_size=30) | st.text('[]{}="\n #.a1', max_size=30))
def test_any_text(catalogue: Any, text: str) -> None:
    check(catalogue, text)


def check(catalogue: Any, text: str) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "my.toml"
        path.write_text(text, encoding="utf-8", newline="")
        problems: tuple[str, ...] = ()
        try:
            inputs = load_inputs(path, catalogue=catalogue)
        except InputError as error:
            problems = error.problems or ("empty",)
    for problem in problems:
        assert re.match(rf"{re.escape(str(path))}(:\d+)?: \S", problem), problem
    if not problems:
        assert np.isfinite(inputs.terms.standardised(inputs.terms.values)).all()
        assert inputs.resolved_toml()
