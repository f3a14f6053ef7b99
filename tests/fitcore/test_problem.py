"""Problems: which leaves vary, points, priors, selections, and changes that must not change the fit."""

from __future__ import annotations

import math

import numpy as np
import pytest

from fitcore import Problem
from fitcore.priors import proper
from likelihoods import load_inputs
from observables.catalogue import Complex, Real
from observables.errors import CatalogueError, InputError, UnknownNameError


@pytest.fixture
def line(make, tables):
    """Three points on a straight line."""
    m = tables.measurement
    return make(
        m("one", "at_one", 1.3, 0.1, groups=["low"]),
        m("two", "at_two", 2.0, 0.2, groups=["low", "middle"]),
        m("three", "at_three", 3.4, 0.3, groups=["high"]),
    )


# -- which leaves vary ---------------------------------------------------------------------------------------


def test_only_what_the_entries_need_is_free(line):
    assert line.parameter_names == ("slope", "offset")
    assert line.n_parameters == 2
    assert (line.n_entries, [e.id for e in line.entries]) == (3, ["one", "two", "three"])
    assert line.fixed == {}
    first = line.parameters[0]
    assert (first.name, first.unit, first.start, first.scale, first.title, first.latex) == (
        "slope", "1", 1.0, 0.1, "the slope", "s",
    )  # fmt: skip
    assert first.period is None
    assert not first.is_range


def test_a_measured_parameter_starts_at_its_measurements(make, tables):
    m = tables.measurement
    problem = make(m("a", "slope", 3.0, 0.1), m("b", "slope", 4.0, 0.2), m("c", "at_one", 1.0, 0.1))
    assert problem.parameters[0].start == pytest.approx((3.0 / 0.01 + 4.0 / 0.04) / (1 / 0.01 + 1 / 0.04))
    assert problem.parameters[0].scale == pytest.approx(0.1)


def test_a_constant_is_held_until_it_is_measured(make, tables):
    m = tables.measurement
    entries = [m("p", "product", 8.0, 0.5, unit="GeV"), m("w", "width", 2.0, 0.1, unit="GeV")]
    held = make(*entries)
    assert "gauge" not in held.parameter_names
    assert "gauge" not in held.fixed, "a constant at its own value is no news"
    assert held.predictions({"slope": 1.0, "width": 2.0})[0] == 4.0
    free = make(*entries, m("g", "gauge", 2.1, 0.05))
    assert free.parameter_names == ("slope", "width", "gauge")
    gauge = free.parameters[2]
    assert (gauge.start, gauge.scale, gauge.lower, gauge.upper) == (2.1, 0.05, -math.inf, math.inf)
    assert free.predictions({"slope": 1.0, "width": 2.0, "gauge": 3.0}).tolist() == [6.0, 2.0, 3.0]


def test_a_constant_may_be_freed_or_moved_by_hand(make, tables):
    entries = [tables.measurement("p", "product", 8.0, 0.5, unit="GeV")]
    free = make(*entries, tables.table("[parameters.gauge]", fixed=False))
    assert free.parameter_names == ("slope", "width", "gauge")
    assert free.parameters[2].scale == 0.1
    moved = make(*entries, tables.table("[parameters.gauge]", fixed=True, start=5.0))
    assert moved.fixed == {"gauge": 5.0}
    assert moved.predictions({"slope": 1.0, "width": 2.0})[0] == 10.0


def test_a_shift_that_is_fixed_by_default(make, tables):
    m = tables.measurement
    entries = [m("s", "shifted", 0.5, 0.1)]
    held = make(*entries)
    assert held.parameter_names == ("offset",)
    assert held.fixed == {"hidden_shift": 0.0}, "what is held by default is reported"
    measured = make(*entries, m("h", "hidden_shift", 0.1, 0.05))
    assert measured.parameter_names == ("offset", "hidden_shift")
    assert measured.fixed == {}
    assert measured.parameters[1].start == pytest.approx(0.1)
    freed = make(*entries, tables.table("[parameters.hidden_shift]", fixed=False))
    assert freed.parameter_names == ("offset", "hidden_shift")
    elsewhere = make(*entries, tables.table("[parameters.hidden_shift]", fixed=True, start=0.3))
    assert elsewhere.fixed == {"hidden_shift": 0.3}
    assert elsewhere.predictions([0.2])[0] == 0.5


def test_penguin_shifts_of_the_public_catalogue():
    problem = Problem.load("averages-2026")
    assert problem.fixed == {"penguin_shift_2beta": 0.0}
    freed = Problem.load("averages-2026", settings=["parameters.penguin_shift_2beta.fixed=false"])
    assert "penguin_shift_2beta" in freed.parameter_names
    assert freed.fixed == {}


def test_a_free_parameter_may_be_held(make, tables):
    m = tables.measurement
    problem = make(m("one", "at_one", 1.3, 0.1), tables.table("[parameters.offset]", fixed=True, start=0.4))
    assert problem.parameter_names == ("slope",)
    assert problem.fixed == {"offset": 0.4}
    assert problem.predictions([1.0])[0] == 1.4


def test_a_measured_parameter_that_is_held_keeps_its_term(make, tables):
    m = tables.measurement
    problem = make(
        m("one", "at_one", 1.3, 0.1),
        m("o", "offset", 0.2, 0.1),
        tables.table("[parameters.offset]", fixed=True, start=0.4),
    )
    assert problem.parameter_names == ("slope",)
    assert problem.chi2([0.9]) == pytest.approx(4.0)
    assert problem.linearise([0.9]).gradient[0, 0] == pytest.approx(0.0, abs=1e-12)


def test_bounds_and_starts_from_the_file(make, tables):
    settings = tables.table("[parameters.width]", start=3000.0, lower=2500.0, upper=4500.0, unit="MeV")
    problem = make(tables.measurement("w", "width", 2.0, 0.1, unit="GeV"), settings)
    width = problem.parameters[0]
    assert (width.start, width.lower, width.upper) == (3.0, 2.5, 4.5)


def test_a_start_on_a_bound_moves_inside(make, tables):
    problem = make(tables.measurement("w", "width", 0.0, 0.1, unit="GeV"))
    assert 0.0 < problem.parameters[0].start <= 0.01
    outside = make(tables.measurement("w", "width", -5.0, 0.1, unit="GeV"))
    assert 0.0 < outside.parameters[0].start <= 0.01


def test_bounds_without_room(make, tables):
    with pytest.raises(InputError, match=r"parameter 'width': the bounds 11.0 and 10.0 leave no room"):
        make(
            tables.measurement("w", "width", 2.0, 0.1, unit="GeV"),
            tables.table("[parameters.width]", lower=11.0),
        )


# -- points --------------------------------------------------------------------------------------------------


def test_points_are_arrays_or_dictionaries(line):
    theta = np.array([[1.0, 0.2], [1.1, 0.1]])
    chi2 = line.chi2(theta)
    assert chi2.shape == (2,)
    assert line.chi2(theta.tolist()).tolist() == chi2.tolist()
    assert isinstance(line.chi2(theta[0]), float)
    assert line.chi2(theta[0]) == chi2[0]
    assert line.chi2({"slope": 1.0, "offset": 0.2}) == chi2[0]
    assert line.chi2({"offset": theta[:, 1], "slope": theta[:, 0]}).tolist() == chi2.tolist()
    assert line.chi2({"offset": 0.2, "slope": theta[:, 0]}).shape == (2,), "single values spread"
    point = {"slope": 1.0, "offset": 0.2}
    assert line.residuals(point).shape == (3,)
    assert line.jacobian(point).shape == (3, 2)
    assert line.predictions(point).shape == (3,)
    assert isinstance(line.log_prior(point), float)
    assert isinstance(line.log_posterior(point), float)
    assert isinstance(line.values(point, ["square"])["square"], float)


@pytest.mark.parametrize("shape", [(3,), (2, 3), (2, 2, 2), ()])
def test_points_of_the_wrong_shape(line, shape):
    with pytest.raises(InputError, match="a point has 2 parameters"):
        line.chi2(np.zeros(shape))


def test_points_with_the_wrong_names(line):
    with pytest.raises(UnknownNameError, match="unknown free parameter 'slop'; did you mean slope"):
        line.chi2({"slop": 1.0, "offset": 0.2})
    with pytest.raises(InputError, match="no value for the parameters offset"):
        line.chi2({"slope": 1.0})


def test_values_real_complex_and_of_parameters(make, tables):
    problem = make(
        tables.measurement("t", "direction", 20.0, 5.0, unit="deg"),
        tables.measurement("o", "offset", 0.2, 0.1),
    )
    theta = np.array([[0.2, 10.0], [0.3, -100.0]])
    assert problem.parameter_names == ("offset", "turn")
    found = problem.values(theta, ["wave", "turn", "gauge", "hidden_shift", "shifted"])
    np.testing.assert_allclose(found["wave"], np.exp(1j * np.deg2rad([10.0, -100.0])), rtol=1e-15)
    assert found["turn"].tolist() == [10.0, -100.0]
    assert found["gauge"].tolist() == [2.0, 2.0]
    assert found["hidden_shift"].tolist() == [0.0, 0.0]
    assert found["shifted"].tolist() == [0.2, 0.3]


def test_values_of_ranges(make, tables):
    problem = make(tables.measurement("one", "slope", 1.3, 0.1, flat_halfwidth=0.5))
    theta = np.array([[1.0, 0.1], [1.1, -0.2]])
    found = problem.values(theta, problem.parameter_names)
    assert np.array_equal(np.column_stack(list(found.values())), theta)
    values, gradient = problem.linearise_quantities(theta, ["range:one", "slope", "square"])
    assert values[:, 0].tolist() == [0.1, -0.2]
    assert gradient[:, 0].tolist() == [[0.0, 1.0]] * 2
    assert gradient[0, 2].tolist() == [2.0, 0.0]


def test_values_of_what_the_inputs_do_not_determine(line):
    with pytest.raises(InputError, match=r"nothing in .* determines width; add a measurement"):
        line.values(line.start, ["root"])
    assert not line.determines("root")
    assert not line.determines("no_such_thing")
    assert line.determines("square")
    with pytest.raises(UnknownNameError, match="squar"):
        line.values(line.start, ["squar"])


def test_gradients_of_quantities(make, tables):
    m = tables.measurement
    problem = make(m("p", "product", 8.0, 0.5, unit="GeV"), m("one", "at_one", 1.3, 0.1))
    theta = np.array([[1.5, 0.2, 3.0], [2.0, 0.1, 4.0]])
    values, gradient = problem.linearise_quantities(theta, ["product", "width", "square", "gauge"])
    assert values.tolist() == [[9.0, 3.0, 2.25, 2.0], [16.0, 4.0, 4.0, 2.0]]
    assert gradient[0].tolist() == [[6.0, 0.0, 3.0], [0.0, 0.0, 1.0], [3.0, 0.0, 0.0], [0.0, 0.0, 0.0]]
    one_value, one_gradient = problem.linearise_quantities(theta[1], ["product"])
    assert (one_value.shape, one_gradient.shape) == ((1,), (1, 3))
    assert one_gradient[0].tolist() == [8.0, 0.0, 4.0]


def test_complex_quantities_have_no_real_gradient(make, tables):
    problem = make(tables.measurement("t", "turn", 20.0, 5.0, unit="deg"))
    assert problem.is_complex("wave")
    with pytest.raises(InputError, match="'wave' is complex"):
        problem.linearise_quantities(problem.start, ["wave"])


def test_descriptions(make, tables):
    problem = make(tables.measurement("t", "direction", 20.0, 5.0, unit="deg", flat_halfwidth=2.0))
    assert problem.unit_of("turn") == "deg"
    assert problem.unit_of("product") == "GeV"
    assert problem.unit_of("range:t") == "deg"
    assert problem.period_of("direction") == 360.0
    assert problem.period_of("offset") is None
    assert problem.title_of("square") == "the square"
    assert problem.latex_of("square") == "square"
    with pytest.raises(UnknownNameError):
        problem.unit_of("nothing")


# -- posterior -----------------------------------------------------------------------------------------------


def test_log_posterior_is_prior_minus_half_chi2(make, tables):
    m = tables.measurement
    problem = make(m("w", "width", 2.0, 0.1, unit="GeV"), m("one", "at_one", 1.3, 0.1, flat_halfwidth=0.5))
    theta = np.array(
        [[1.0, 0.2, 2.0, 0.1], [1.0, 0.2, -0.1, 0.1], [1.0, 0.2, 2.0, 0.6], [1.0, 0.2, 10.1, 0.0]]
    )
    prior, posterior = problem.log_prior(theta), problem.log_posterior(theta)
    assert prior[0] == pytest.approx(-math.log(10.0) - math.log(1.0)), "slope and offset have no bounds"
    assert posterior[0] == pytest.approx(prior[0] - 0.5 * problem.chi2(theta[0]))
    assert np.isneginf(prior[1:]).all()
    assert np.isneginf(posterior[1:]).all()
    assert np.isneginf(problem.log_posterior([1.0, 0.2, math.nan, 0.0]))


@pytest.mark.parametrize(
    ("prior", "expected"),
    [
        # normalised inside the bounds of the width, 0 and 10: the lower one is four deviations below the mean
        (
            {"kind": "normal", "mean": 2.0, "error": 0.5},
            -0.5 * 4.0
            - math.log(0.5 * math.sqrt(2 * math.pi))
            - math.log(0.5 * math.erfc(-4 / math.sqrt(2))),
        ),
        ({"kind": "uniform", "lower": 1.0, "upper": 5.0}, -math.log(4.0)),
        ({"kind": "log-uniform", "lower": 1.0, "upper": 5.0}, -math.log(3.0) - math.log(math.log(5.0))),
    ],
)
def test_priors_from_the_file(make, tables, prior, expected):
    problem = make(
        tables.measurement("w", "width", 2.0, 0.1, unit="GeV"),
        tables.table("[parameters.width]", prior=prior),
    )
    assert problem.log_prior([3.0]) == pytest.approx(expected)
    assert problem.log_prior([12.0]) == -math.inf
    assert problem.chi2([3.0]) == pytest.approx(100.0), "a prior is no part of chi-square"
    assert proper(problem.parameters[0])


def test_priors_integrate_to_one(make, tables):
    grid = np.linspace(-400.0, 400.0, 80_001)
    for prior in (
        {"kind": "uniform", "lower": 1.0, "upper": 5.0},
        {"kind": "log-uniform", "lower": 1.0, "upper": 5.0},
        {"kind": "normal", "mean": 2.0, "error": 0.2},
    ):
        problem = make(
            tables.measurement("w", "width", 2.0, 0.1, unit="GeV"),
            tables.table("[parameters.width]", prior=prior),
        )
        assert np.trapezoid(np.exp(problem.log_prior(grid[:, None])), grid) == pytest.approx(1.0, abs=5e-3), (
            prior
        )
    angle = make(
        tables.measurement("t", "turn", 20.0, 5.0, unit="deg"),
        tables.table("[parameters.turn]", prior={"kind": "isotropic-angle"}, lower=-180.0, upper=180.0),
    )
    assert np.trapezoid(np.exp(angle.log_prior(grid[:, None])), grid) == pytest.approx(1.0, abs=5e-3)


# -- selections and settings ---------------------------------------------------------------------------------


def test_selection_by_id_and_group(line):
    assert [e.id for e in line.only("low").entries] == ["one", "two"]
    assert [e.id for e in line.only("low", "three").entries] == ["one", "two", "three"]
    assert [e.id for e in line.without("middle").entries] == ["one", "three"]
    assert line.only("one").chi2([1.0, 0.2]) == pytest.approx(1.0)
    assert line.n_entries == 3, "the problem itself is untouched"
    with pytest.raises(UnknownNameError, match="lowest"):
        line.only("lowest")
    with pytest.raises(InputError, match="leaves no entry"):
        line.without("low", "high")


def test_selection_cuts_correlations(make, tables):
    block = tables.correlated("b", ["at_one", "at_two", "at_three"], [1.3, 2.0, 3.4], [0.1, 0.2, 0.3],
                              [[1.0, 0.5, 0.2], [0.5, 1.0, 0.3], [0.2, 0.3, 1.0]], ids=["x", "y", "z"])  # fmt: skip
    problem = make(block).without("y")
    u = np.array([1.2 - 1.3, 3.2 - 3.4]) / [0.1, 0.3]
    expected = u @ np.linalg.inv([[1.0, 0.2], [0.2, 1.0]]) @ u
    assert problem.chi2([1.0, 0.2]) == pytest.approx(expected)


def test_settings_change_numbers(make, tables):
    tight = make(tables.measurement("one", "at_one", 1.3, 0.1), settings=["one.error=0.05"])
    assert tight.chi2([1.0, 0.2]) == pytest.approx(4.0)


def test_load_is_the_same_as_reading_and_compiling():
    by_name = Problem.load("averages-2026", only=["tree"])
    inputs = load_inputs("averages-2026", only=["tree"])
    assert by_name.fingerprint == Problem(inputs).fingerprint
    assert by_name.chi2(by_name.start) == Problem(inputs).chi2(by_name.start)


def test_unknown_names_at_loading():
    with pytest.raises(UnknownNameError, match="hypothesis"):
        Problem.load("averages-2026", hypothesis="no-such-physics")
    with pytest.raises((UnknownNameError, InputError)):
        Problem.load("no-such-inputs")
    with pytest.raises(InputError, match="theory errors 'flatt'"):
        Problem.load("averages-2026", theory_errors="flatt")


def test_an_overlay_adds_its_parameters(make, tables, catalogue):
    extra = catalogue.hypothesis("extra", title="something added", source="invented")
    extra.parameter("added", unit="1", start=0.0, lower=-1.0, upper=1.0, scale=0.1, title="added")

    @extra.replaces("at_one")
    def at_one(standard, added) -> Real:
        return standard + added

    entries = [tables.measurement("one", "at_one", 1.3, 0.1), tables.measurement("two", "at_two", 2.0, 0.1)]
    problem = make(*entries, hypothesis="extra")
    assert problem.hypothesis == "extra"
    assert problem.parameter_names == ("slope", "offset", "added")
    standard = make(*entries)
    assert problem.chi2([1.0, 0.2, 0.0]) == standard.chi2([1.0, 0.2])
    assert problem.predictions([1.0, 0.2, 0.1])[0] == pytest.approx(1.3)
    assert problem.unit_of("added") == "1"
    assert problem.fingerprint != standard.fingerprint
    assert problem.only("one").hypothesis == "extra"
    clash = catalogue.hypothesis("clash", title="t", source="s")
    clash.parameter("slope", unit="1", start=0.0, scale=0.1, title="t")
    with pytest.raises(CatalogueError, match="two owners"):
        make(*entries, hypothesis="clash")


def test_the_fingerprint_follows_what_decides_the_numbers(make, tables):
    m = tables.measurement
    base = [m("one", "at_one", 1.3, 0.1), m("p", "product", 3.0, 0.4, unit="GeV")]
    prints = [
        make(*base).fingerprint,
        make(*base, settings=["one.error=0.2"]).fingerprint,
        make(*base, tables.table("[parameters.width]", upper=8.0)).fingerprint,
        make(*base, tables.table("[parameters.gauge]", fixed=True, start=2.5)).fingerprint,
        make(*base, m("g", "gauge", 2.0, 0.1)).fingerprint,
        make(*base, theory_errors="flat").fingerprint,
        make(base[0]).fingerprint,
    ]
    assert len(set(prints)) == len(prints)
    assert make(*base).fingerprint == prints[0]


def test_resolved_inputs_make_the_same_problem(make, tables, tmp_path, catalogue):
    problem = make(
        tables.correlated("b", ["at_one", "at_two"], [1.3, 2.0], [0.1, 0.2], [[1.0, 0.5], [0.5, 1.0]]),
        tables.measurement("w", "width", 2000.0, [100.0, 200.0], unit="MeV", flat_halfwidth=50.0),
        tables.measurement("p", "product", 3.0, {"statistical": 0.1, "common": 0.2}, unit="GeV"),
        tables.measurement("s", "square", 1.0, {"statistical": 0.1, "common": 0.1}),
        tables.table("[parameters.slope]", start=1.1, prior={"kind": "normal", "mean": 1.0, "error": 0.2}),
    )
    path = tmp_path / "resolved.toml"
    path.write_text(problem.inputs.resolved_toml(), encoding="utf-8")
    again = Problem(load_inputs(path, catalogue=catalogue), catalogue=catalogue)
    theta = problem.start + 0.01 * np.arange(3.0)[:, None]
    assert np.array_equal(again.start, problem.start)
    assert np.array_equal(again.chi2(theta), problem.chi2(theta))
    assert np.array_equal(again.log_posterior(theta), problem.log_posterior(theta))
    assert again.fingerprint == problem.fingerprint


# -- theory errors -------------------------------------------------------------------------------------------


def test_ranges_are_bounded_parameters(make, tables):
    problem = make(tables.measurement("one", "at_one", 1.3, 0.1, flat_halfwidth=0.5, kind="theory"))
    shift = problem.parameters[-1]
    assert (shift.name, shift.lower, shift.upper, shift.is_range) == ("range:one", -0.5, 0.5, True)
    assert shift.start == 0.0
    assert problem.chi2([1.0, 0.2, 0.1]) == pytest.approx(0.0, abs=1e-20)


def test_gaussian_theory_errors_add_in_quadrature(make, tables):
    problem = make(
        tables.measurement("one", "at_one", 1.3, [0.3, 0.4], flat_halfwidth=0.4), theory_errors="gaussian"
    )
    assert problem.parameter_names == ("slope", "offset")
    assert problem.entries[0].plus == pytest.approx(0.5)
    assert problem.entries[0].minus == pytest.approx(math.sqrt(0.32))
    assert problem.theory_errors == "gaussian"


def test_gaussian_theory_errors_do_not_correlate(make, tables):
    block = tables.correlated("b", ["at_one", "at_two"], [1.3, 2.0], [0.3, 0.2], [[1.0, 0.5], [0.5, 1.0]],
                              flat_halfwidths=[0.4, 0.0])  # fmt: skip
    problem = make(block, theory_errors="gaussian")
    covariance = np.array([[0.09 + 0.16, 0.5 * 0.3 * 0.2], [0.5 * 0.3 * 0.2, 0.04]])
    d = np.array([1.2 - 1.3, 2.2 - 2.0])
    assert problem.chi2([1.0, 0.2]) == pytest.approx(d @ np.linalg.inv(covariance) @ d)


def test_flat_theory_errors_bound_their_parameter(make, tables):
    m = tables.measurement
    problem = make(
        m("w", "width", 2.0, [0.4, 0.2], unit="GeV", kind="theory", flat_halfwidth=0.1),
        m("p", "product", 8.0, 0.5, unit="GeV"),
        m("s", "slope", 1.0, 0.1),
        theory_errors="flat",
    )
    assert [e.id for e in problem.entries] == ["p", "s"]
    width = problem.parameters[problem.parameter_names.index("width")]
    assert (width.lower, width.upper) == pytest.approx((1.7, 2.5))
    assert width.is_range
    assert width.lower < width.start < width.upper
    assert problem.parameters[0].is_range is False


def test_flat_theory_errors_of_one_parameter_intersect(make, tables):
    m = tables.measurement
    entries = [m("a", "width", 2.0, 0.4, unit="GeV", kind="theory"), m("p", "product", 8.0, 0.5, unit="GeV")]
    problem = make(*entries, m("b", "width", 2.5, 0.3, unit="GeV", kind="theory"), theory_errors="flat")
    width = problem.parameters[problem.parameter_names.index("width")]
    assert (width.lower, width.upper) == pytest.approx((2.2, 2.4))
    with pytest.raises(InputError, match=r"\"b\"\] the flat ranges of 'width' do not meet"):
        make(*entries, m("b", "width", 3.5, 0.3, unit="GeV", kind="theory"), theory_errors="flat")


def test_flat_theory_errors_need_a_parameter(make, tables):
    with pytest.raises(InputError, match="theory entry on 'at_one', which is computed"):
        make(tables.measurement("one", "at_one", 1.3, 0.1, kind="theory"), theory_errors="flat")


def test_all_flat_leaves_nothing_to_fit(make, tables):
    with pytest.raises(InputError, match="every entry became a flat range"):
        make(tables.measurement("w", "width", 2.0, 0.1, unit="GeV", kind="theory"), theory_errors="flat")


def test_correlations_of_entries_that_became_flat_go(make, tables):
    m = tables.measurement
    problem = make(
        m("w", "width", 2.0, 0.4, unit="GeV", kind="theory"),
        m("p", "product", 4.2, 0.5, unit="GeV"),
        m("s", "slope", 1.0, 0.1),
        tables.table("[[correlation]]", between=["w", "p"], coefficient=0.3),
        tables.table("[[correlation]]", between=["p", "s"], coefficient=0.5),
        theory_errors="flat",
    )
    u = np.array([(4.0 - 4.2) / 0.5, 0.0])
    point = {"slope": 1.0, "width": 2.0}
    assert problem.chi2(point) == pytest.approx(u @ np.linalg.inv([[1.0, 0.5], [0.5, 1.0]]) @ u)


# -- changes that must not change the fit --------------------------------------------------------------------


def newton_minimum(problem):
    """Minimum and covariance by Gauss-Newton from the start, with plain linear algebra."""
    theta = problem.start.copy()
    for _ in range(50):
        jacobian = problem.jacobian(theta)
        theta = theta - np.linalg.lstsq(jacobian, problem.residuals(theta), rcond=None)[0]
    jacobian = problem.jacobian(theta)
    return theta, np.linalg.inv(jacobian.T @ jacobian), problem.chi2(theta)


@pytest.fixture
def curved(tables):
    m = tables.measurement
    return [
        m("one", "at_one", 1.3, 0.1),
        m("two", "at_two", 2.0, [0.2, 0.15]),
        m("square", "square", 1.2, 0.1),
        m("root", "root", 1.1, 0.1),
        m("product", "product", 4.6, 0.2, unit="GeV"),
    ]


def test_a_measurement_split_into_two_independent_halves(make, tables, curved):
    whole = newton_minimum(make(*curved))
    halves = [tables.measurement(f"three-{i}", "at_three", 3.9, 0.3 * math.sqrt(2.0)) for i in (1, 2)]
    once = newton_minimum(make(*curved, tables.measurement("three", "at_three", 3.9, 0.3)))
    twice = newton_minimum(make(*curved, *halves))
    for left, right in zip(once, twice, strict=True):
        np.testing.assert_allclose(left, right, rtol=1e-9)
    assert once[2] > whole[2] + 0.01, "the measurement matters"


def test_a_fully_shared_error_is_a_common_shift(make, tables):
    """Two entries with a common source s equal the two without it and a measured common offset."""
    m = tables.measurement
    shared = make(
        m("one", "at_one", 1.3, {"statistical": 0.1, "common": 0.3}),
        m("two", "at_two", 2.0, {"statistical": 0.2, "common": 0.3}),
        m("three", "square", 1.1, 0.1),
        m("o", "offset", 0.1, 0.2),
    )
    # offset enters both predictions with slope 1: give it the common error by a nuisance instead.
    covariance = np.array([[0.01 + 0.09, 0.09], [0.09, 0.04 + 0.09]])
    d = shared.predictions([0.9, 0.3])[:2] - [1.3, 2.0]
    rest = ((0.81 - 1.1) / 0.1) ** 2 + ((0.3 - 0.1) / 0.2) ** 2
    assert shared.chi2([0.9, 0.3]) == pytest.approx(d @ np.linalg.inv(covariance) @ d + rest)
    nuisance = min(
        ((0.9 + 0.3 + 0.3 * z - 1.3) / 0.1) ** 2 + ((1.8 + 0.3 + 0.3 * z - 2.0) / 0.2) ** 2 + z * z
        for z in np.linspace(-1.0, 1.0, 20_001)
    )
    assert shared.chi2([0.9, 0.3]) == pytest.approx(nuisance + rest, abs=1e-6)


def test_other_units_make_the_same_problem(make, tables):
    m = tables.measurement
    one = make(
        m("w", "width", 2.0, 0.1, unit="GeV"),
        m("t", "turn", 90.0, 10.0, unit="deg"),
        m("s", "slope", 0.5, 0.01),
    )
    other = make(
        m("w", "width", 2000.0, 100.0, unit="MeV"),
        m("t", "turn", math.pi / 2, math.pi / 18, unit="rad"),
        m("s", "slope", 50.0, 1.0, unit="%"),
    )
    theta = np.random.default_rng(1).normal(size=(5, 3)) + one.start
    np.testing.assert_allclose(one.chi2(theta), other.chi2(theta), rtol=1e-12)
    np.testing.assert_allclose(one.start, other.start, rtol=1e-14)


def test_an_uninformative_entry_moves_nothing(make, tables, curved):
    before = newton_minimum(make(*curved))
    after = newton_minimum(make(*curved, tables.measurement("blunt", "at_three", 3.0, 1e6)))
    for left, right in zip(before, after, strict=True):
        np.testing.assert_allclose(left, right, rtol=1e-9)


def test_the_order_of_entries_does_not_matter(make, curved):
    before, after = newton_minimum(make(*curved)), newton_minimum(make(*curved[::-1]))
    for left, right in zip(before, after, strict=True):
        np.testing.assert_allclose(left, right, rtol=1e-9)


def test_inflating_everything_scales_chi2(make, tables):
    m = tables.measurement
    plain = make(m("one", "at_one", 1.3, 0.1), m("two", "at_two", 2.0, [0.2, 0.15]))
    blown = make(m("one", "at_one", 1.3, 0.1, inflate=2.0), m("two", "at_two", 2.0, [0.2, 0.15]))
    one = make(m("one", "at_one", 1.3, 0.1))
    theta = [0.9, 0.3]
    assert plain.chi2(theta) - blown.chi2(theta) == pytest.approx(0.75 * one.chi2(theta))


def test_data_at_the_prediction_make_chi2_zero(make, curved):
    problem = make(*curved)
    theta = problem.start + 0.1
    assert problem.chi2(theta, problem.predictions(theta)) == 0.0


def test_a_correlation_of_zero_is_none(make, tables):
    block = tables.correlated("b", ["at_one", "at_two"], [1.3, 2.0], [0.1, 0.2], [[1.0, 0.0], [0.0, 1.0]])
    m = tables.measurement
    plain = make(m("one", "at_one", 1.3, 0.1), m("two", "at_two", 2.0, 0.2))
    assert make(block).chi2([0.9, 0.3]) == plain.chi2([0.9, 0.3])


def test_a_file_may_set_and_measure_parameters_of_a_hypothesis(tmp_path):
    from observables import catalogue

    overlay = catalogue.hypothesis("invented-Bd", title="Something added to B_d mixing", source="invented")
    overlay.parameter("invented_size", unit="1", start=0.0, scale=0.1, title="size of the added term")

    @overlay.replaces("M12_Bd")
    def M12_Bd(standard, invented_size) -> Complex:
        return standard * (1.0 + invented_size)

    path = tmp_path / "with.toml"
    path.write_text(
        'include = ["averages-2026"]\n[parameters.invented_size]\nlower = -0.5\nupper = 0.5\n'
        '[[measurement]]\nid = "size"\nquantity = "invented_size"\nvalue = 0.1\nerror = 0.01\nunit = "1"\n'
        'source = "invented"\n'
    )
    problem = Problem.load(path, "invented-Bd")
    parameter = problem.parameters[problem.parameter_names.index("invented_size")]
    assert (parameter.lower, parameter.upper) == (-0.5, 0.5)
    # Dm_d fixes (1 + size) times the matrix element ratio; the measured size shows in the fit
    assert problem.fit(derived=[]).values["invented_size"] == pytest.approx(0.1, abs=0.02)
    with pytest.raises(UnknownNameError, match="invented_size"):
        Problem.load(path)


# -- at a prompt ---------------------------------------------------------------------------------------------


def test_one_name_alone_is_a_name(line):
    point = np.array([1.0, 0.5])
    assert line.values(point, "slope") == line.values(point, ["slope"]) == {"slope": 1.0}
    values, gradient = line.linearise_quantities(point, "at_two")
    assert (values.shape, gradient.shape) == ((1,), (1, 2))


def test_a_problem_says_what_it_is(line):
    assert repr(line) == (
        f"<Problem {line.inputs.name!r}: 3 entries, 2 free parameters, hypothesis 'standard', theory errors as-given>"
    )


def test_what_is_imported_on_demand_is_listed():
    import fitcore

    assert {"Problem", "FitResult"} <= set(dir(fitcore))
