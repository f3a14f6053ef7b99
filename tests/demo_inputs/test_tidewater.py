"""The invented scenario: reproducible, honestly thrown, and found again by a fit."""

from __future__ import annotations

import dataclasses
import importlib.util
import json
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest

from fitcore import Problem
from likelihoods import load_inputs, units
from likelihoods.covariance import correlation_matrix
from observables import catalogue

FOLDER = Path(__file__).resolve().parents[2] / "demo_inputs"


@pytest.fixture(scope="module")
def generator():
    spec = importlib.util.spec_from_file_location("generate_tidewater", FOLDER / "generate_tidewater.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = module
    spec.loader.exec_module(module)
    yield module
    del sys.modules[spec.name]


@pytest.fixture(scope="module")
def items(generator):
    entries = (*generator.EXPERIMENT, *generator.THEORY_INPUTS)
    return [
        item
        for entry in entries
        for item in (entry.items if isinstance(entry, generator.Block) else (entry,))
    ]


@pytest.fixture(scope="module")
def truth():
    return json.loads((FOLDER / "tidewater_truth.json").read_text())


@pytest.fixture(scope="module")
def inputs():
    return load_inputs(FOLDER / "tidewater.toml")


def test_generator_gives_the_same_bytes(generator, tmp_path):
    generator.main(tmp_path)
    for name in ("tidewater.toml", "tidewater_truth.json"):
        assert (tmp_path / name).read_bytes() == (FOLDER / name).read_bytes(), (
            f"{name}: run generate_tidewater.py"
        )


def test_truth_is_the_stated_one(truth):
    stated = {"lambda": 0.2310, "A": 0.790, "rhobar": 0.200, "etabar": 0.300}
    assert {name: truth[f"wolfenstein_{name}"] for name in stated} == stated


def test_truth_is_not_that_of_our_world(truth):
    """Nuisance parameters lie more than two steps away from their start values, which are published ones."""
    for name, value in truth.items():
        node = catalogue[name]
        if node.kind == "parameter" and not name.startswith("wolfenstein_"):  # those four are stated
            assert abs(value - node.start) > 2 * node.scale, name


def test_every_source_says_that_it_is_invented():
    content = tomllib.loads((FOLDER / "tidewater.toml").read_text())
    tables = content["measurement"] + content["correlated"]
    assert tables
    assert all(table["source"].startswith("invented:") for table in tables)
    assert not any("pdg" in table for table in tables)


def test_scenario_shows_what_inputs_can_say(inputs, items):
    assert {"s", "%", "1", "1e-4", "1e-3", "deg", "mrad", "ns", "ps", "fs", "MeV", "GeV", "1/ps", "1/ns"} <= {
        entry.declared.unit for entry in inputs.entries
    }
    assert any(entry.plus != entry.minus for entry in inputs.entries)
    assert {entry.block for entry in inputs.entries} >= {"curlew-KL", "lattice-heavy-light"}
    assert len(inputs.correlations) == 2
    assert sum(item.spoilt_by != 0 for item in items) == 1


def test_reader_and_generator_build_the_same_correlations(generator, items, inputs):
    """Shared sources, blocks and single coefficients, once by the reader and once by the script."""
    read = correlation_matrix(inputs.entries, inputs.blocks, inputs.correlations)
    order = [[item.id for item in items].index(entry.id) for entry in inputs.entries]
    np.testing.assert_allclose(read, generator.correlation(items)[np.ix_(order, order)], rtol=0, atol=1e-12)


@pytest.mark.stat
def test_deviations_have_the_stated_errors_and_correlations(generator, items):
    """2000 throws: standardised residuals have mean 0 and the stated correlations, all within 4.5 sigma."""
    size = 2000
    rng = np.random.default_rng(11)
    plain = [dataclasses.replace(item, spoilt_by=0.0) for item in items]
    predicted = catalogue.compute({item.quantity for item in plain}, generator.TRUTH)
    thrown = np.array([generator.throw(plain, predicted, rng) for _ in range(size)])
    true = np.array(
        [float(predicted[i.quantity]) * units.factor(catalogue[i.quantity].unit, i.unit) for i in plain]
    )
    plus, minus = np.array([generator.total(item.error) for item in plain]).T
    d = true - thrown
    residuals = d / np.sqrt(
        plus * minus + (plus - minus) * d
    )  # linear variance, as in R. Barlow, physics/0406120
    assert np.abs(residuals.mean(axis=0)).max() < 4.5 / size**0.5
    expected = generator.correlation(items)
    spread = np.sqrt((1 + expected**2) / size)
    assert (np.abs(np.cov(residuals.T) - expected) / spread).max() < 4.5


def test_fit_finds_the_truth_and_the_spoilt_measurement(truth):
    result = Problem.load(FOLDER / "tidewater.toml").fit()
    assert result.valid, result.message
    for name in ("wolfenstein_lambda", "wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar"):
        found = result.parameters[name]
        low, high = found.interval_95
        assert low < truth[name] < high, name
    large = [row.id for row in result.measurements if abs(row.pull) > 2.5]
    assert large == ["plover-Bu-tau-nu"]
    assert result.p_value > 0.01
