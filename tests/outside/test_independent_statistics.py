"""Fits, intervals and studies against a second statistical treatment that shares no code with the project.

The second treatment is `tests/support/independent_statistics.py` (plain NumPy and SciPy). Predictions come straight
from the catalogue, so that a difference is one of statistics, not of physics. Tolerances are arithmetic: interval ends
of the project hold to 1e-3 in chi-square, that is 5e-4 of an error.

The list of tensions of the published averages is an independent calculation of the same inputs (own code with its own
minimiser and its own masses and constants, done before this package existed, never published).
"""

from __future__ import annotations

import json
from dataclasses import dataclass, field, replace

import numpy as np
import pytest
from independent_statistics import Measured, Model
from scipy.stats import chi2 as chi2_distribution

from fitcore import Problem
from fitcore.studies.budget import budget
from fitcore.studies.indirect import indirect
from fitcore.studies.outlook import outlook
from likelihoods import load_inputs
from observables import catalogue as public
from observables.catalogue import Catalogue, Real
from observables.graph import compile_graph

LEVELS = (1.0, 3.841458820694124)
ENDS = 1e-3  # of an error: twice the project's stated tolerance of interval ends
FOUR = ("wolfenstein_lambda", "wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar")

TENSIONS = {
    "magnitude_V_ud": -2.29,
    "isospin_alpha": -1.89,
    "magnitude_V_us": -1.72,
    "mixing_frequency_Bs": 1.53,
    "magnitude_V_cb": -1.28,
    "mixing_frequency_Bd": -1.27,
    "sine_2beta_ccs": -1.24,
    "angle_gamma": 0.24,
    "epsilon_K": 0.03,
}


# -- an invented world ---------------------------------------------------------------------------------------------

LINES = {
    "first": (1.0, 0.0, 0.0),
    "second": (1.0, 1.0, 0.0),
    "third": (2.0, -1.0, 0.5),
    "fourth": (0.5, 1.0, -1.0),
}


def invented_catalogue() -> Catalogue:
    """Three straight parameters and an angle; lines, a product, an exponential, directions of two periods."""
    world = Catalogue()
    for name, start in (("height", 1.0), ("depth", 2.0), ("girth", 3.0)):
        world.parameter(name, unit="1", start=start, scale=0.1, title=name, latex=name[0])
    world.parameter("bearing", unit="deg", start=20.0, scale=1.0, period=360.0, title="bearing", latex="b")
    world.constant("gauge", 2.0, error=0.1, unit="1", source="invented")

    def first(height) -> Real:
        return height + 0.0

    def second(height, depth) -> Real:
        return height + depth

    def third(height, depth, girth) -> Real:
        return 2.0 * height - depth + 0.5 * girth

    def fourth(height, depth, girth) -> Real:
        return 0.5 * height + depth - girth

    def area(height, depth) -> Real:
        return height * depth

    def growth(height, girth) -> Real:
        return np.exp(0.5 * height - 0.2 * girth)

    def pull_of_gauge(height, gauge) -> Real:
        return height * gauge

    def heading(bearing) -> Real:
        return np.rad2deg(np.angle(np.exp(1j * np.deg2rad(bearing))))

    def lean(bearing) -> Real:
        return 0.5 * np.rad2deg(np.angle(np.exp(2j * np.deg2rad(bearing))))

    more = {"heading": {"unit": "deg", "period": 360.0}, "lean": {"unit": "deg", "period": 180.0}}
    for function in (first, second, third, fourth, area, growth, pull_of_gauge, heading, lean):
        name = function.__name__
        world.quantity(**({"unit": "1", "title": name, "source": "invented"} | more.get(name, {})))(function)
    return world


@dataclass
class World:
    """One data set twice: as the project's problem, and as the plain model."""

    problem: Problem
    model: Model
    catalogue: Catalogue
    formulas: dict = field(default_factory=dict)

    def value(self, name, point):
        if name not in self.formulas:
            names = [p.name for p in self.problem.parameters if not p.name.startswith("range:")]
            self.formulas[name] = predictor(self.catalogue, [name], names, self.problem.fixed)
        return float(self.formulas[name](np.asarray(point)[None])[0, 0])

    def own(self, quantity):
        return [e.id for e in self.problem.entries if e.quantity == quantity]


def predictor(catalogue, quantities, names, fixed=None):
    """Points (B, n) -> predictions (B, m) by the catalogue's formulas."""
    wanted = tuple(dict.fromkeys(quantities))
    columns = [wanted.index(q) for q in quantities]
    graph = compile_graph(
        catalogue, wanted, tuple(names), dict(fixed or {}), catalogue.get_hypothesis("standard")
    )

    def predict(points):
        rows = [np.broadcast_to(row, len(points)) for row in graph.evaluate(list(points.T))]
        return np.stack([rows[i] for i in columns], axis=1)

    return predict


def toml(value):
    if isinstance(value, dict):
        return "{ " + ", ".join(f"{k} = {toml(v)}" for k, v in value.items()) + " }"
    if isinstance(value, list | tuple):
        return "[" + ", ".join(map(toml, value)) + "]"
    return repr(float(value)) if isinstance(value, float) else json.dumps(value)


@pytest.fixture
def build(tmp_path):
    count = iter(range(1000))

    def world(entries, blocks=(), pairs=(), parameters=(), theory_errors="as-given"):
        """entries: (id, quantity, value, error, more); error a number, a pair or named sources."""
        catalogue = invented_catalogue()
        text, measured, predicted, correlations = ['title = "invented"'], [], [], {}
        for identity, quantity, value, error, more in entries:
            key = "errors" if isinstance(error, dict) else "error"
            unit = catalogue[quantity].unit
            keys = {"id": identity, "quantity": quantity, "value": float(value), key: error, "unit": unit}
            keys |= {"source": "invented"} | more
            text += ["[[measurement]]", *(f"{k} = {toml(v)}" for k, v in keys.items())]
            scale = more.get("inflate", 1.0)
            named = {k: scale * e for k, e in error.items()} if key == "errors" else {}
            plus, minus = (0.0, 0.0) if named else (scale * e for e in np.broadcast_to(error, 2))
            flat = more.get("flat_halfwidth", 0.0)
            measured.append(Measured(identity, value, plus, minus, named, flat, catalogue[quantity].period))
            predicted.append(quantity)
        for identity, quantities, values, errors, matrix in blocks:
            keys = {
                "id": identity,
                "quantities": quantities,
                "values": values,
                "errors": errors,
                "units": "1",
            }
            keys |= {"correlation": matrix, "source": "invented"}
            text += ["[[correlated]]", *(f"{k} = {toml(v)}" for k, v in keys.items())]
            for i, quantity in enumerate(quantities):
                measured.append(Measured(f"{identity}:{quantity}", values[i], errors[i], errors[i]))
                predicted.append(quantity)
                for j in range(i):
                    correlations[f"{identity}:{quantities[j]}", f"{identity}:{quantity}"] = matrix[i][j]
        for first, second, coefficient in pairs:
            text += [
                "[[correlation]]",
                f"between = {toml([first, second])}",
                f"coefficient = {coefficient!r}",
            ]
            correlations[first, second] = coefficient
        for name, keys in dict(parameters).items():
            text += [f"[parameters.{name}]", *(f"{k} = {toml(v)}" for k, v in keys.items())]
        path = tmp_path / f"inputs-{next(count)}.toml"
        path.write_text("\n".join(text), encoding="utf-8")
        problem = Problem(
            load_inputs(path, catalogue=catalogue), theory_errors=theory_errors, catalogue=catalogue
        )
        leaves = [p for p in problem.parameters if not p.name.startswith("range:")]
        names = [p.name for p in leaves]
        order = [e.id for e in problem.inputs.entries]
        pairs_of = sorted(zip(measured, predicted, strict=True), key=lambda pair: order.index(pair[0].id))
        quantities = [quantity for _, quantity in pairs_of]

        predict = predictor(catalogue, quantities, names, problem.fixed)
        start, scales = np.array([p.start for p in leaves]), np.array([p.scale for p in leaves])
        bounds = [np.array([getattr(p, side) for p in leaves]) for side in ("lower", "upper")]
        model = Model(predict, tuple(entry for entry, _ in pairs_of), start, scales, correlations, *bounds)
        return World(problem, model, catalogue)

    return world


def random_world(build, seed, *, linear):
    """Shared and named sources with signs, an asymmetric entry, a block, a pair, two entries on one quantity."""
    rng = np.random.default_rng(seed)
    truth = np.array([1.0, 2.0, 3.0]) + 0.3 * rng.standard_normal(3)
    lines = dict(zip(LINES, np.array(list(LINES.values())) @ truth, strict=True))
    x = lambda name: float(lines[name] + 0.15 * rng.standard_normal())  # noqa: E731
    asymmetric = 0.15 if linear else (0.22, 0.12)
    entries = [
        ("a", "first", x("first"), {"statistical": 0.1, "scale": 0.06}, {}),
        (
            "b",
            "second",
            x("second"),
            {"statistical": 0.12, "scale": -0.05, "tagging": 0.03},
            {"inflate": 1.4},
        ),
        ("c", "first", x("first"), {"statistical": 0.2, "tagging": 0.08}, {}),
        ("d", "third", x("third"), asymmetric, {}),
        ("e", "fourth", x("fourth"), 0.2, {"inflate": 0.8}),
    ]
    if not linear:
        product, power = truth[0] * truth[1], float(np.exp(0.5 * truth[0] - 0.2 * truth[2]))
        entries += [
            ("f", "area", product * (1.0 + 0.05 * rng.standard_normal()), (0.12, 0.18), {}),
            ("g", "growth", power * (1.0 + 0.05 * rng.standard_normal()), 0.05, {}),
        ]
    block = (
        "together",
        ["second", "third"],
        [x("second"), x("third")],
        [0.2, 0.25],
        [[1.0, -0.4], [-0.4, 1.0]],
    )
    return build(entries, [block], [("d", "e", 0.3)])


@pytest.fixture(
    params=[(1, True), (2, True), (3, False), (4, False)], ids=["line-1", "line-2", "curve-3", "curve-4"]
)
def world(request, build):
    return random_world(build, request.param[0], linear=request.param[1])


def test_chi_square_anywhere(world):
    rng = np.random.default_rng(0)
    points = world.problem.start + rng.normal(size=(50, world.problem.n_parameters)) * rng.choice(
        [0.3, 3.0], (50, 1)
    )
    expected = [world.model.chi2(point) for point in points]
    np.testing.assert_allclose(world.problem.chi2(points), expected, rtol=1e-9)


def test_fit_intervals_and_goodness(world):
    result = world.problem.fit(profile=world.problem.parameter_names, derived=["area", "third"])
    assert result.valid, result.message
    best, chi2 = world.model.fit()
    covariance = world.model.covariance(best)
    error = np.sqrt(np.diagonal(covariance))
    degrees = world.model.degrees_of_freedom(best)
    assert result.chi2 == pytest.approx(chi2, abs=1e-6)
    assert result.degrees_of_freedom == degrees
    assert result.p_value == pytest.approx(chi2_distribution.sf(chi2, degrees), rel=1e-5)
    np.testing.assert_allclose(
        np.array(result.covariance_matrix), covariance, rtol=2e-3, atol=2e-3 * error.min() ** 2
    )
    for place, name in enumerate(world.problem.parameter_names):
        found = result.parameters[name]
        assert found.value == pytest.approx(best[place], abs=1e-3 * error[place])
        for interval, level in zip((found.interval_68, found.interval_95), LEVELS, strict=True):
            expected = world.model.interval(place, level, best, error[place])
            assert interval == pytest.approx(expected, abs=ENDS * error[place]), (name, level)
    predicted = world.model.predict(best[None])[0]
    for row, entry, prediction in zip(result.measurements, world.model.measured, predicted, strict=True):
        plus, minus = entry.errors
        difference = entry.value - prediction
        assert row.pull == pytest.approx(difference / (minus if difference > 0 else plus), abs=5e-3)
    assert sum(row.share for row in result.measurements) == pytest.approx(chi2, abs=1e-5)


def test_profile_of_a_derived_quantity(world):
    best, _ = world.model.fit()
    covariance = world.model.covariance(best)
    result = world.problem.fit(derived=["area"], profile=["area"])
    area = result.derived["area"]
    error = area.error
    for interval, level in zip((area.interval_68, area.interval_95), LEVELS, strict=True):
        expected = world.model.extreme_values(
            lambda point: world.value("area", point), level, best, covariance
        )
        assert interval == pytest.approx(expected, abs=ENDS * error)


@pytest.mark.parametrize("quantity", ["first", "second", "third", "fourth"])
def test_indirect_value_and_tension(world, quantity):
    (row,) = indirect(world.problem, [quantity]).rows
    best, _ = world.model.fit()
    own = world.own(quantity)
    rest = world.model.without(own)
    other, _ = rest.fit(best)
    assert set(row.left_out) == set(own)
    low, high = rest.extreme_values(lambda p: world.value(quantity, p), 1.0, other, rest.covariance(other))
    error = 0.5 * (high - low)
    assert row.value == pytest.approx(world.value(quantity, other), abs=1e-3 * error)
    assert row.interval_68 == pytest.approx((low, high), abs=ENDS * error)
    mean, _ = world.model.own_chi2(own)
    assert row.direct == pytest.approx(mean, abs=1e-4 * error)
    assert abs(row.tension) == pytest.approx(world.model.tension(own, best), abs=1e-4)
    assert np.sign(row.tension) == np.sign(row.direct - row.value)


def test_budget_by_refits(world):
    result = budget(world.problem, ["height", "area"])
    best, _ = world.model.fit()
    for name in ("height", "area"):
        shifts = world.model.unit_shifts(lambda point, name=name: world.value(name, point), best)
        for row in result.entries[name]:
            assert row.shift == pytest.approx(shifts[row.name], abs=1e-4 * result.errors[name]), (
                name,
                row.name,
            )


def test_outlook_keeps_correlations(world):
    """All entries at their predictions, two errors changed; shared sources shrink with the error, R stays."""
    best, _ = world.model.fit()
    result = outlook(world.problem, {"a": 0.5, "together:third": 0.25}, ["height", "girth"])
    factor = {"a": 0.5, "together:third": 0.25}
    predicted = world.model.predict(best[None])[0]
    measured = tuple(
        Measured(e.id, float(v), e.plus * f, e.minus * f, {k: x * f for k, x in e.sources.items()})
        for e, v in zip(world.model.measured, predicted, strict=True)
        for f in [factor.get(e.id, 1.0)]
    )
    then = Model(world.model.predict, measured, best, world.model.scales, world.model.correlations)
    error = np.sqrt(np.diagonal(then.covariance(best)))
    for row in result.rows:
        place = world.problem.parameter_names.index(row.name)
        for interval, level in zip((row.future_68, row.future_95), LEVELS, strict=True):
            assert interval == pytest.approx(
                then.interval(place, level, best, error[place]), abs=ENDS * error[place]
            )


def test_part_of_a_block_keeps_its_correlation(build):
    """Leaving out the middle of three: the other two keep their own coefficient."""
    matrix = [[1.0, 0.5, 0.2], [0.5, 1.0, -0.3], [0.2, -0.3, 1.0]]
    block = ("trio", ["first", "second", "third"], [1.1, 3.2, 1.4], [0.1, 0.2, 0.3], matrix)
    world = build([("extra", "fourth", -0.4, 0.2, {})], [block])
    left = world.problem.without("trio:second")
    points = np.array([[1.0, 2.0, 3.0], [1.2, 2.5, 2.0], [0.0, 0.0, 0.0]])
    plain = world.model.without(["trio:second"])
    np.testing.assert_allclose(left.chi2(points), [plain.chi2(p) for p in points], rtol=1e-12)
    assert left.terms.correlation[[e.id for e in left.entries].index("trio:first")].max() == 1.0


# -- angles --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("quantity", "value", "other"), [("heading", 175.0, -178.0), ("lean", 88.0, -87.0)])
def test_angles_across_the_seam(build, quantity, value, other):
    """Two measurements on either side of the end of the period: residuals, fit, intervals, direct average."""
    entries = [("near", quantity, value, 3.0, {}), ("far", quantity, other, (4.0, 5.0), {})]
    world = build(entries, parameters={"bearing": {"start": value - 3.0, "lower": -720.0, "upper": 720.0}})
    angles = np.linspace(-400.0, 400.0, 161)[:, None] + 0.123
    np.testing.assert_allclose(world.problem.chi2(angles), [world.model.chi2(a) for a in angles], rtol=1e-9)
    result = world.problem.fit(derived=[quantity], profile=["bearing"])
    best, chi2 = world.model.fit()
    assert result.chi2 == pytest.approx(chi2, abs=1e-6)
    period = world.catalogue[quantity].period
    found = result.parameters["bearing"]
    turns = period * np.rint((found.value - best[0]) / period)
    assert found.value - turns == pytest.approx(best[0], abs=3e-3)
    for interval, level in zip((found.interval_68, found.interval_95), LEVELS, strict=True):
        expected = world.model.interval(0, level, best, 2.5)
        assert np.array(interval) - turns == pytest.approx(expected, abs=2.5 * ENDS)
    for row in result.measurements:
        assert abs(row.pull) < 2.0


def test_tension_of_an_angle_across_the_seam(build):
    pair = [("one", "heading", 179.0, 3.0, {}), ("two", "heading", -177.0, 4.0, {})]
    setting = {"start": 172.0, "lower": -720.0, "upper": 720.0}
    world = build([*pair, ("own", "bearing", 170.0, 5.0, {})], parameters={"bearing": setting})
    (row,) = indirect(world.problem, ["heading"]).rows
    mean = (179.0 / 9.0 + 183.0 / 16.0) / (1.0 / 9.0 + 1.0 / 16.0)
    error = (1.0 / 9.0 + 1.0 / 16.0) ** -0.5
    assert np.cos(np.deg2rad(row.direct - mean)) == pytest.approx(1.0, abs=1e-9)
    assert row.direct_error == pytest.approx((error, error), rel=1e-3)
    assert row.tension == pytest.approx((mean - 170.0) / np.hypot(error, 5.0), rel=1e-4)


# -- theory errors -------------------------------------------------------------------------------------------------


def ranged(build, theory_errors):
    entries = [
        ("a", "first", 1.2, 0.1, {"flat_halfwidth": 0.15}),
        ("b", "second", 3.4, (0.2, 0.1), {"flat_halfwidth": 0.1}),
        ("c", "area", 1.7, 0.1, {}),
        ("d", "depth", 2.0, 0.1, {}),
    ]
    return build(entries, theory_errors=theory_errors)


def test_flat_half_widths_are_bounded_shifts(build):
    """As given: chi-square minimised over a shift of every entry with a range, found by brute force."""
    world = ranged(build, "as-given")
    result = world.problem.fit()
    best, chi2 = world.model.fit()
    assert result.valid, result.message
    assert result.chi2 == pytest.approx(chi2, abs=1e-4)
    assert result.p_value is None
    # nuisances in neither count: four terms, two parameters
    assert result.degrees_of_freedom == 2
    for place, name in enumerate(("height", "depth")):
        assert world.problem.parameter_names[place] == name
        found = result.parameters[name]
        # the range of the quantity over all points of the set, by the profile of the plain model
        for interval, level in zip((found.interval_68, found.interval_95), LEVELS, strict=True):
            expected = world.model.interval(place, level, best, 0.1)
            assert interval == pytest.approx(expected, abs=2e-3 * (expected[1] - expected[0])), (name, level)


def test_gaussian_half_widths_add_in_quadrature(build):
    world = ranged(build, "gaussian")
    plain = tuple(
        Measured(e.id, e.value, np.hypot(e.plus, e.flat), np.hypot(e.minus, e.flat))
        for e in world.model.measured
    )
    model = Model(world.model.predict, plain, world.model.start, world.model.scales)
    result = world.problem.fit()
    best, chi2 = model.fit()
    assert result.chi2 == pytest.approx(chi2, abs=1e-6)
    assert result.p_value == pytest.approx(chi2_distribution.sf(chi2, 2), rel=1e-5)
    assert result.parameters["height"].value == pytest.approx(best[0], abs=1e-4)


def test_gaussian_half_width_of_a_correlated_entry_is_independent(build):
    """The half-width widens the diagonal of the covariance alone."""
    entries = [
        ("a", "first", 1.2, {"statistical": 0.1, "scale": 0.1}, {"flat_halfwidth": 0.2}),
        ("b", "second", 3.4, {"statistical": 0.1, "scale": 0.2}, {}),
        ("c", "depth", 2.0, 0.1, {}),
    ]
    world = build(entries, theory_errors="gaussian")
    covariance = np.diag([0.01 + 0.01 + 0.04, 0.01 + 0.04, 0.01])
    covariance[0, 1] = covariance[1, 0] = 0.02
    difference = np.array([0.9, 3.1, 2.2]) - [1.2, 3.4, 2.0]
    expected = difference @ np.linalg.solve(covariance, difference)
    assert world.problem.chi2(np.array([0.9, 2.2])) == pytest.approx(expected)


def test_tension_of_entries_with_ranges(build):
    """Two entries of one quantity that their ranges reconcile: their own chi-square counts the ranges too."""
    entries = [
        ("a", "first", 1.0, 0.1, {"flat_halfwidth": 0.4}),
        ("b", "first", 1.7, 0.1, {"flat_halfwidth": 0.4}),
        ("c", "height", 2.6, 0.1, {}),
    ]
    world = build(entries)
    (row,) = indirect(world.problem, ["first"]).rows
    _, chi2 = world.model.fit()
    pair = world.model.without(["c"])
    _, own = pair.fit()
    assert own == pytest.approx(0.0, abs=1e-9)
    _, rest = world.model.without(["a", "b"]).fit()
    assert "not-converged" not in row.flags
    assert abs(row.tension) == pytest.approx(np.sqrt(chi2 - rest - own), abs=1e-3)


# -- redundant parameters, constants -------------------------------------------------------------------------------


def test_rank_with_a_redundant_parameter(build):
    """fourth alone sees depth and girth only together: rank 2 of 3, one degree of freedom with three entries."""
    entries = [("a", "first", 1.0, 0.1, {}), ("b", "first", 1.3, 0.1, {}), ("c", "fourth", -0.4, 0.1, {})]
    world = build(entries)
    result = world.problem.fit(derived=["second", "fourth"])
    assert result.degrees_of_freedom == 1
    assert result.chi2 == pytest.approx(0.3**2 / 0.02, rel=1e-6)
    assert "unconstrained" in result.flags
    assert result.parameters["depth"].error is None
    assert result.parameters["depth"].interval_68 is None
    assert result.derived["second"].error is None
    assert result.derived["fourth"].error == pytest.approx(0.1, rel=1e-3)
    assert result.parameters["height"].error == pytest.approx(0.1 / np.sqrt(2.0), rel=1e-4)


def test_measuring_a_constant_frees_it(build):
    entries = [("a", "pull_of_gauge", 2.4, 0.1, {}), ("b", "height", 1.0, 0.05, {})]
    held = build(entries)
    assert "gauge" not in held.problem.parameter_names
    freed = build([*entries, ("g", "gauge", 2.0, 0.2, {})])
    assert "gauge" in freed.problem.parameter_names
    _, chi2 = freed.model.fit()
    assert freed.problem.fit().chi2 == pytest.approx(chi2, abs=1e-6)
    assert chi2 < held.problem.fit().chi2
    fixed = build(entries, parameters={"gauge": {"start": 2.4}})
    assert fixed.problem.fixed == {"gauge": 2.4}
    assert fixed.problem.fit().chi2 == pytest.approx(0.0, abs=1e-9)


# -- bounds, priors, scale factors -----------------------------------------------------------------------------------


@pytest.mark.parametrize("measured", [-0.15, -0.02, 0.05])
def test_a_parameter_at_its_bound(build, measured):
    """Best fit on or near height = 0: no parabola, and intervals of what leans on it stay on the right side."""
    entries = [("a", "height", measured, 0.1, {}), ("b", "depth", 2.0, 0.1, {})]
    world = build(entries, parameters={"height": {"lower": 0.0, "upper": 5.0}})
    result = world.problem.fit(derived=["area"])
    assert result.valid, result.message
    assert "near-bound" in result.flags
    lowest = min(measured, 0.0) ** 2 / 0.01
    assert result.chi2 == pytest.approx(lowest, abs=1e-6)
    assert result.parameters["height"].error is None
    area = result.derived["area"]
    assert area.error is None
    for level, height, product in (
        (LEVELS[0], result.parameters["height"].interval_68, area.interval_68),
        (LEVELS[1], result.parameters["height"].interval_95, area.interval_95),
    ):
        budget_left = lowest + level
        assert height[1] == pytest.approx(measured + 0.1 * budget_left**0.5, abs=1e-4)
        assert height[0] == pytest.approx(max(0.0, measured - 0.1 * level**0.5), abs=1e-4)
        # brute force: the largest depth allowed with each height
        heights = np.linspace(max(0.0, measured - 0.1 * budget_left**0.5), height[1], 20_001)
        room = np.sqrt(np.clip(budget_left - ((heights - measured) / 0.1) ** 2, 0.0, None))
        assert product[1] == pytest.approx(np.max(heights * (2.0 + 0.1 * room)), abs=2e-4)
        assert product[0] == pytest.approx(np.min(heights * (2.0 - 0.1 * room)), abs=2e-4)


@pytest.mark.parametrize(
    ("bounds", "prior"),
    [
        ((0.0, 4.0), None),
        ((-1.0, 9.0), {"kind": "uniform", "lower": 2.0, "upper": 5.0}),
        ((0.9, 9.0), {"kind": "normal", "mean": 1.0, "error": 0.3}),
        ((4.0, 9.0), {"kind": "normal", "mean": 1.0, "error": 0.3}),
        ((-9.0, 9.0), {"kind": "normal", "mean": 1.0, "error": 0.3}),
        ((0.5, 5.0), {"kind": "log-uniform", "lower": 0.1, "upper": 10.0}),
    ],
)
def test_priors_integrate_to_one(build, bounds, prior):
    """Proper priors are densities: an evidence is only as good as their normalisation."""
    setting = {"lower": bounds[0], "upper": bounds[1]} | ({} if prior is None else {"prior": prior})
    world = build([("a", "height", 2.0, 0.1, {})], parameters={"height": setting})
    x = np.linspace(*bounds, 400_001)[:, None]
    # half the difference of the two edges' densities times the step is the error of the sum
    assert np.trapezoid(np.exp(world.problem.log_prior(x)), x[:, 0]) == pytest.approx(1.0, abs=1e-4)
    assert world.problem.log_posterior(x[200_000]) == pytest.approx(
        world.problem.log_prior(x[200_000]) - 0.5 * world.problem.chi2(x[200_000])
    )


def test_fingerprint_changes_with_whatever_changes_numbers(build):
    entries = [
        ("a", "first", 1.0, 0.1, {}),
        ("b", "pull_of_gauge", 2.0, 0.1, {}),
        ("c", "second", 3.0, 0.1, {}),
    ]
    variants = [
        build(entries),
        build([("a", "first", 1.1, 0.1, {}), *entries[1:]]),
        build([("a", "first", 1.0, 0.11, {}), *entries[1:]]),
        build([("a", "first", 1.0, (0.1, 0.11), {}), *entries[1:]]),
        build([("a", "first", 1.0, 0.1, {"flat_halfwidth": 0.1}), *entries[1:]]),
        build([("a", "first", 1.0, 0.1, {"kind": "theory"}), *entries[1:]]),
        build([("a", "first", 1.0, 0.1, {"inflate": 1.1}), *entries[1:]]),
        build(entries, pairs=[("a", "c", 0.1)]),
        build(entries, pairs=[("a", "c", 0.2)]),
        build(entries, theory_errors="gaussian"),
        build(entries, parameters={"height": {"lower": 0.0}}),
        build(entries, parameters={"gauge": {"start": 2.1}}),
        build(entries, parameters={"depth": {"start": 2.1, "fixed": True}}),
        build(entries, parameters={"height": {"prior": {"kind": "normal", "mean": 1.0, "error": 0.1}}}),
    ]
    assert build(entries).problem.fingerprint == variants[0].problem.fingerprint
    assert len({world.problem.fingerprint for world in variants}) == len(variants)


def test_scale_factor_of_a_group_follows_its_members(build, tmp_path):
    """S = sqrt(chi2 / (N - 1)) of the members present; changed numbers are what the resolved file says."""
    entries = [
        (n, "first", v, 0.1, {"inflate_group": "pair"}) for n, v in (("a", 1.0), ("b", 1.6), ("c", 1.1))
    ]
    world = build([*entries, ("d", "depth", 2.0, 0.1, {})])
    values = np.array([1.0, 1.6, 1.1])
    factor = np.sqrt(np.sum((values - values.mean()) ** 2) / 0.01 / 2.0)
    assert [e.inflate for e in world.problem.entries[:3]] == pytest.approx([factor] * 3)
    left = world.problem.without("b")
    assert [e.inflate for e in left.entries[:2]] == [
        1.0,
        1.0,
    ]  # chi2 0.5 for one degree of freedom: no scaling
    two = world.problem.without("c")
    assert [e.plus for e in two.entries[:2]] == pytest.approx([0.1 * np.sqrt(18.0)] * 2)
    changed = world.problem.with_entries([replace(world.problem.entries[0], value=1.2)])
    path = tmp_path / "resolved.toml"
    path.write_text(changed.inputs.resolved_toml(), encoding="utf-8")
    again = load_inputs(path, catalogue=world.catalogue)
    assert [e.plus for e in again.entries] == pytest.approx([e.plus for e in changed.entries])


# -- the published averages ----------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def averages():
    problem = Problem.load("averages-2026")
    names = problem.parameter_names
    quantities = [e.quantity for e in problem.entries]

    predict = predictor(public, quantities, names, problem.fixed)
    measured = tuple(Measured(e.id, e.value, e.plus, e.minus, period=e.period) for e in problem.entries)
    model = Model(predict, measured, problem.start, np.array([p.scale for p in problem.parameters]))
    return World(problem, model, public)


@pytest.fixture(scope="module")
def averages_best(averages):
    return averages.model.fit()[0]


def test_published_averages(averages, averages_best):
    result = averages.problem.fit()
    model, best = averages.model, averages_best
    error = np.sqrt(np.diagonal(model.covariance(best)))
    assert result.chi2 == pytest.approx(model.chi2(best), abs=1e-6)
    assert result.degrees_of_freedom == model.degrees_of_freedom(best) == 9
    assert result.p_value == pytest.approx(chi2_distribution.sf(result.chi2, 9), rel=1e-9)
    for name in FOUR:
        place = averages.problem.parameter_names.index(name)
        found = result.parameters[name]
        assert found.value == pytest.approx(best[place], abs=1e-3 * error[place])
        assert found.error == pytest.approx(error[place], rel=2e-3)
        expected = model.interval(place, 1.0, best, error[place])
        assert found.interval_68 == pytest.approx(expected, abs=ENDS * error[place])


def test_published_tensions(averages, averages_best):
    for name, listed in TENSIONS.items():
        plain = averages.model.tension(averages.own(name), averages_best)
        assert plain == pytest.approx(abs(listed), abs=0.08), name
    for row in indirect(
        averages.problem, ["magnitude_V_ud", "mixing_frequency_Bs", "isospin_alpha"], starts=4
    ).rows:
        plain = averages.model.tension(averages.own(row.quantity), averages_best)
        assert abs(row.tension) == pytest.approx(plain, abs=2e-3), row.quantity
        assert row.tension == pytest.approx(TENSIONS[row.quantity], abs=0.08), row.quantity


def test_flat_theory_errors_of_the_published_averages():
    """Every theory entry a range of its parameter: SciPy's bounded least squares from random corners of the ranges.

    The best fit in A is unique, but chi-square stays within 0.01 of it over a width of 0.0017.
    """
    problem = Problem.load("averages-2026", theory_errors="flat")
    result = problem.fit()
    names = problem.parameter_names
    quantities = [e.quantity for e in problem.entries]

    predict = predictor(public, quantities, names, problem.fixed)
    measured = tuple(Measured(e.id, e.value, e.plus, e.minus, period=e.period) for e in problem.entries)
    lower, upper = (np.array([getattr(p, side) for p in problem.parameters]) for side in ("lower", "upper"))
    scales = np.array([p.scale for p in problem.parameters])
    model = Model(predict, measured, problem.start, scales, {}, lower, upper)
    theory = {e.quantity: e for e in problem.inputs.entries if e.kind == "theory"}
    assert len(theory) == 9
    assert "top_mass_msbar" not in theory  # measured, and Gaussian in every treatment
    assert not set(theory) & set(quantities)
    for place, parameter in enumerate(problem.parameters):
        if parameter.name in theory:
            entry = theory[parameter.name]
            assert (lower[place], upper[place]) == pytest.approx(
                (entry.value - entry.minus, entry.value + entry.plus)
            )
    rng = np.random.default_rng(0)
    flat = [i for i, p in enumerate(problem.parameters) if p.name in theory]
    fits = []
    for _ in range(4):
        start = problem.start.copy()
        start[flat] = rng.uniform(lower[flat], upper[flat])
        fits.append(model.fit(start))
    best, chi2 = min(fits, key=lambda fit: fit[1])
    assert result.chi2 == pytest.approx(chi2, abs=1e-4)
    assert result.p_value is None
    for name, deviation in (("wolfenstein_A", 0.01), ("wolfenstein_rhobar", 0.006)):
        place = names.index(name)
        assert result.parameters[name].value == pytest.approx(best[place], abs=0.01 * deviation)
        for end in result.parameters[name].interval_68:
            found = min(model.profiled(place, end, fit[0])[0] for fit in fits)
            assert found - chi2 == pytest.approx(1.0, abs=5e-3), (name, end)
