"""A small catalogue with closed forms, and inputs files written on the spot."""

from __future__ import annotations

import json

import numpy as np
import pytest

from fitcore import Problem
from likelihoods import load_inputs
from observables.catalogue import Catalogue, Complex, Real


def _written(value):
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{key} = {_written(item)}" for key, item in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_written(item) for item in value) + "]"
    if isinstance(value, float):
        return repr(float(value))
    return json.dumps(value)


def table(header, **keys):
    """One table of an inputs file, as text."""
    return header + "\n" + "".join(f"{key} = {_written(value)}\n" for key, value in keys.items())


def measurement(identity, quantity, value, error, unit="1", **more):
    """A ``[[measurement]]`` table, as text; ``error`` may be a dict of named sources."""
    errors = {"errors" if isinstance(error, dict) else "error": error}
    about = {"id": identity, "quantity": quantity, "value": float(value), "unit": unit, "source": "invented"}
    return table("[[measurement]]", **about, **errors, **more)


def correlated(identity, quantities, values, errors, correlation, units="1", **more):
    """A ``[[correlated]]`` table, as text."""
    about = {"id": identity, "quantities": quantities, "values": values, "errors": errors, "units": units}
    return table("[[correlated]]", **about, correlation=correlation, source="invented", **more)


def small_catalogue():
    """Straight lines, a square, a root with a domain, an angle, and things held fixed by default."""
    catalogue = Catalogue()
    for name, start, more in [
        ("slope", 1.0, {}),
        ("offset", 0.2, {}),
        ("width", 2.0, {"unit": "GeV", "lower": 0.0, "upper": 10.0}),
        ("turn", 30.0, {"unit": "deg", "period": 360.0, "scale": 1.0, "lower": -360.0, "upper": 360.0}),
        ("hidden_shift", 0.0, {"lower": -1.0, "upper": 1.0, "fixed": True}),
    ]:
        settings = {
            "unit": "1",
            "start": start,
            "scale": 0.1,
            "title": f"the {name}",
            "latex": name[0],
        } | more
        catalogue.parameter(name, **settings)
    catalogue.constant("gauge", 2.0, error=0.1, unit="1", source="invented")

    def at_one(slope, offset) -> Real:
        return slope + offset

    def at_two(slope, offset) -> Real:
        return 2.0 * slope + offset

    def at_three(slope, offset) -> Real:
        return 3.0 * slope + offset

    def square(slope) -> Real:
        return slope * slope

    def root(width) -> Real:
        return np.sqrt(width - 1.0)

    def product(slope, width, gauge) -> Real:
        return slope * width * gauge

    def shifted(offset, hidden_shift) -> Real:
        return offset + hidden_shift

    def wave(turn) -> Complex:
        return np.exp(1j * np.deg2rad(turn))

    def direction(turn, offset) -> Real:
        return np.rad2deg(np.arctan2(np.sin(np.deg2rad(turn)), np.cos(np.deg2rad(turn)))) + 0.0 * offset

    units = {"product": "GeV", "direction": "deg"}
    for function in (at_one, at_two, at_three, square, root, product, shifted, wave, direction):
        name = function.__name__
        period = 360.0 if name == "direction" else None
        catalogue.quantity(
            unit=units.get(name, "1"), title=f"the {name}", latex=name, source="invented", period=period
        )(function)
    return catalogue


@pytest.fixture
def catalogue():
    return small_catalogue()


@pytest.fixture
def write(tmp_path):
    """Write tables into an inputs file and return its path."""
    count = iter(range(1000))

    def to_file(*tables, title="invented inputs"):
        path = tmp_path / f"inputs-{next(count)}.toml"
        path.write_text(f'title = "{title}"\n\n' + "\n".join(tables), encoding="utf-8")
        return path

    return to_file


@pytest.fixture
def make(write, catalogue):
    """Tables -> Problem on the small catalogue."""

    def build(*tables, hypothesis="standard", theory_errors="as-given", only=(), without=(), settings=()):
        inputs = load_inputs(
            write(*tables), only=only, without=without, settings=settings, catalogue=catalogue
        )
        return Problem(inputs, hypothesis, theory_errors=theory_errors, catalogue=catalogue)

    return build


@pytest.fixture
def tables():
    """The functions that write tables: ``tables.measurement``, ``tables.correlated``, ``tables.table``."""

    class Tables:
        pass

    Tables.measurement, Tables.correlated, Tables.table = map(staticmethod, (measurement, correlated, table))
    return Tables
