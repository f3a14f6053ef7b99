"""Stored fits: exact round trips, nothing valid by default, and files that are something else."""

from __future__ import annotations

import dataclasses
import json
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fitcore.result import FORMAT_VERSION, Estimate, FitResult, MeasurementRow, OtherMinimum
from observables.errors import StoreError, WeakmixError

FULL = FitResult(
    valid=True,
    flags=("near-bound", "several-minima"),
    message="said so",
    chi2=12.05,
    degrees_of_freedom=9,
    p_value=0.21,
    hypothesis="mixing-Bd",
    theory_errors="gaussian",
    title="A title",
    inputs_name="averages-2026",
    inputs_sha256="ab" * 32,
    inputs_revision=3,
    parameters={
        "a": Estimate(0.1 + 0.2, 1e-3, (0.299, 0.301), (0.298, 0.303), "profile", "1"),
        "b": Estimate(-1e-300, None, (-math.inf, 3.0), (-math.inf, math.inf), "profile", "GeV"),
        "c": Estimate(5.0),
    },
    derived={"d": Estimate(1 / 3, 0.1, (0.2, 0.4), (0.1, 0.5), "linear", "deg")},
    measurements=(
        MeasurementRow("m", "a", 0.3, 0.1, 0.1, 0.31, -0.1, "1", "experiment", ("g", "h"), 0.05, 0.01),
        MeasurementRow("n", "d", 0.3, 0.2, 0.1, 0.31, -0.05, "deg", "theory"),
    ),
    parameter_names=("a", "b", "c"),
    correlation_names=("a", "b", "c"),
    correlation_matrix=((1.0, 0.1, math.nan), (0.1, 1.0, math.nan), (math.nan, math.nan, math.nan)),
    covariance_matrix=((1e-6, 1e-7, 0.0), (1e-7, 4e-6, 0.0), (0.0, 0.0, 0.0)),
    other_minima=(OtherMinimum({"a": 0.2, "b": 0.0, "c": 5.0}, 13.0),),
    notices=(("recalled", "m", "quoted from memory"),),
    fixed={"shift": 0.0},
    n_calls={"chi2": 10},
    provenance={"versions": {"numpy": "2.0"}, "seed": 7, "command": ["weakmix", "fit"]},
)


def same(left, right):
    """Equality that takes nan for equal."""
    if isinstance(left, float) and isinstance(right, float):
        return left == right or (math.isnan(left) and math.isnan(right))
    if dataclasses.is_dataclass(left):
        return type(left) is type(right) and all(
            same(getattr(left, f.name), getattr(right, f.name)) for f in dataclasses.fields(left)
        )
    if isinstance(left, dict):
        return left.keys() == right.keys() and all(same(left[key], right[key]) for key in left)
    if isinstance(left, tuple | list):
        return type(left) is type(right) and len(left) == len(right) and all(map(same, left, right))
    return left == right


def test_nothing_is_valid_by_default():
    empty = FitResult()
    assert empty.valid is False
    assert empty.to_dict()["converged"] is False
    assert math.isnan(empty.chi2)
    assert empty.p_value is None


def test_results_are_frozen():
    for thing, name in [(FULL, "valid"), (FULL.parameters["a"], "value"), (FULL.measurements[0], "pull")]:
        with pytest.raises(dataclasses.FrozenInstanceError):
            setattr(thing, name, 1.0)


@pytest.mark.parametrize("result", [FULL, FitResult()], ids=["full", "empty"])
def test_a_round_trip_is_exact(result):
    again = FitResult.from_json(result.to_json())
    assert same(again, result)
    assert again.to_json() == result.to_json()
    assert same(FitResult.from_dict(result.to_dict()), result)


def test_every_field_takes_part_in_the_round_trip():
    default = FitResult()
    unchanged = [
        f.name for f in dataclasses.fields(FULL) if same(getattr(FULL, f.name), getattr(default, f.name))
    ]
    assert unchanged == [], "the example has to differ from the default everywhere"


@given(st.floats(allow_nan=False), st.floats(), st.tuples(st.floats(), st.floats()))
def test_every_float_survives(value, chi2, pair):
    interval = tuple(sign * math.inf if math.isnan(x) else x for x, sign in zip(pair, (-1, 1), strict=True))
    if interval[0] == math.inf or interval[1] == -math.inf or not math.isfinite(value):
        return
    result = FitResult(chi2=chi2, parameters={"a": Estimate(value, 0.1, interval)})
    again = FitResult.from_json(result.to_json())
    assert again.parameters["a"].value == value
    assert again.parameters["a"].interval_68 == interval
    assert same(again.chi2, chi2 if math.isfinite(chi2) else math.nan)


def test_the_documented_keys():
    data = FULL.to_dict()
    assert {
        "chi2", "degrees_of_freedom", "p_value", "converged", "hypothesis", "inputs", "parameters", "derived",
        "measurements", "correlation", "other_minima",
    } <= data.keys()  # fmt: skip
    assert {"name", "sha256"} <= data["inputs"].keys()
    assert data["parameters"]["a"].keys() == {
        "value",
        "error",
        "interval_68",
        "interval_95",
        "method",
        "unit",
    }
    assert {"id", "quantity", "measured", "error", "fitted", "pull"} <= data["measurements"][0].keys()
    assert data["correlation"].keys() == {"names", "matrix"}
    assert data["other_minima"][0].keys() == {"parameters", "chi2"}
    assert data["measurements"][0]["error"] == 0.1
    assert data["measurements"][1]["error"] == [0.2, 0.1], "plus, minus"


def test_json_has_no_nan():
    text = FULL.to_json()
    assert "NaN" not in text
    assert "Infinity" not in text
    data = json.loads(text)
    assert data["parameters"]["b"]["error"] is None
    assert data["parameters"]["b"]["interval_68"] == [None, 3.0]
    assert data["parameters"]["c"]["interval_95"] is None
    assert data["correlation"]["matrix"][2] == [None, None, None]
    assert text.endswith("}\n")


def test_numpy_numbers_become_plain():
    result = FitResult(
        chi2=np.float64(1.5),
        degrees_of_freedom=np.int64(3),
        fixed={"a": np.float32(0.5)},
        n_calls={"chi2": np.int64(4)},
        valid=bool(np.bool_(True)),
        provenance={"ok": np.bool_(True)},
    )
    data = json.loads(result.to_json())
    assert (data["chi2"], data["degrees_of_freedom"], data["fixed"]["a"], data["n_calls"]["chi2"]) == (
        1.5,
        3,
        0.5,
        4,
    )
    assert data["provenance"]["ok"] is True


def test_values_of_the_parameters():
    assert FULL.values == {"a": 0.1 + 0.2, "b": -1e-300, "c": 5.0}


def test_a_newer_format_is_refused():
    data = FULL.to_dict() | {"format_version": FORMAT_VERSION + 1}
    with pytest.raises(
        StoreError, match=rf"format {FORMAT_VERSION + 1}, this weakmix reads up to {FORMAT_VERSION}"
    ):
        FitResult.from_dict(data)


@pytest.mark.parametrize("text", ["", "{", "not json", "[1, 2]", "3", "null", '"text"', "{}", '{"format_version": 1}',
                                  '{"format_version": "new"}', '{"format_version": null}'])  # fmt: skip
def test_what_is_no_stored_fit(text):
    with pytest.raises(StoreError) as caught:
        FitResult.from_json(text)
    assert isinstance(caught.value, WeakmixError)
    assert isinstance(caught.value, OSError)


@pytest.mark.parametrize("key", list(FULL.to_dict()))
def test_a_missing_key_is_told(key):
    data = FULL.to_dict()
    del data[key]
    with pytest.raises(StoreError, match="not a stored weakmix fit"):
        FitResult.from_dict(data)


@pytest.mark.parametrize(
    ("path", "value"),
    [
        (("parameters", "a", "interval_68"), [1.0, 2.0, 3.0]),
        (("parameters", "a", "interval_68"), 4.0),
        (("parameters", "a"), 4.0),
        (("parameters",), [1.0]),
        (("measurements", 1, "error"), [1.0, 2.0, 3.0]),
        (("measurements",), 3),
        (("correlation",), None),
        (("correlation", "matrix"), [1.0]),
        (("inputs",), "averages-2026"),
        (("fixed",), 3),
        (("n_calls",), [1]),
    ],
)
def test_a_damaged_file_is_told(path, value):
    data = FULL.to_dict()
    inner = data
    for step in path[:-1]:
        inner = inner[step]
    inner[path[-1]] = value
    with pytest.raises(StoreError, match="not a stored weakmix fit"):
        FitResult.from_dict(data)


def test_printed_at_a_prompt() -> None:
    one = Estimate(65.8, 1.4, (64.4, 67.2), (63.1, 68.6), "linear", "deg")
    assert str(one) == "65.8 +- 1.4 deg"
    assert str(Estimate(0.75, None, (0.74, 0.76), (0.74, 0.76), "range")) == "range [0.740, 0.760]"
    assert str(Estimate(0.3)) == "0.3 (unconstrained)"
    shown = str(
        FitResult(
            valid=True,
            chi2=3.21,
            degrees_of_freedom=2,
            p_value=0.2,
            inputs_name="invented",
            flags=("flat-ranges",),
            parameters={f"parameter_{i}": one for i in range(6)},
        )
    )
    assert shown.splitlines() == [
        "Fit of invented, hypothesis standard: converged",
        "  chi-square 3.21 for 2 degrees of freedom, p-value 0.20",
        "  flags: flat-ranges",
        *(f"  parameter_{i}  65.8 +- 1.4 deg" for i in range(4)),
        "  and 2 more parameters, 0 derived quantities, 0 measurements",
    ]
    assert "NOT CONVERGED: no reason recorded" in str(FitResult())


def test_a_stored_row_keeps_its_source() -> None:
    row = MeasurementRow("a", "b", 1.0, 0.1, 0.1, 1.1, -1.0, "1", "experiment", source="a paper")
    stored = FitResult(measurements=(row,)).to_dict()
    assert stored["measurements"][0]["source"] == "a paper"
    assert FitResult.from_dict(stored).measurements[0].source == "a paper"
    del stored["measurements"][0]["source"]  # written by an earlier weakmix
    assert FitResult.from_dict(stored).measurements[0].source == ""
