"""Forward derivatives: every rule against mpmath, complex steps or a closed form."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fitcore.minimise import derivatives
from fitcore.minimise.derivatives import (
    Dual,
    UnsupportedOperationError,
    call_with_derivatives,
    seed,
    tangents_of,
)

POINTS = np.array([0.3, 0.55, 0.9])

#: ufunc -> the same function in mpmath, and where on the real axis it is tried.
ELEMENTARY = {
    np.exp: (mpmath.exp, (-1.5, 0.3, 2.0)),
    np.expm1: (mpmath.expm1, (-1.5, 1e-9, 2.0)),
    np.log: (mpmath.log, (1e-6, 0.3, 7.0)),
    np.log10: (mpmath.log10, (1e-6, 0.3, 7.0)),
    np.log2: (lambda x: mpmath.log(x) / mpmath.log(2), (1e-6, 0.3, 7.0)),
    np.log1p: (mpmath.log1p, (-0.5, 1e-9, 3.0)),
    np.sqrt: (mpmath.sqrt, (1e-6, 0.3, 7.0)),
    np.cbrt: (mpmath.cbrt, (1e-6, 0.3, 7.0)),
    np.square: (lambda x: x**2, (-1.5, 0.3, 7.0)),
    np.reciprocal: (lambda x: 1 / x, (-1.5, 0.3, 7.0)),
    np.sin: (mpmath.sin, (-1.5, 0.3, 7.0)),
    np.cos: (mpmath.cos, (-1.5, 0.3, 7.0)),
    np.tan: (mpmath.tan, (-1.2, 0.3, 7.0)),
    np.arcsin: (mpmath.asin, (-0.8, 0.3, 0.9)),
    np.arccos: (mpmath.acos, (-0.8, 0.3, 0.9)),
    np.arctan: (mpmath.atan, (-5.0, 0.3, 0.9)),
    np.sinh: (mpmath.sinh, (-1.5, 0.3, 3.0)),
    np.cosh: (mpmath.cosh, (-1.5, 0.3, 3.0)),
    np.tanh: (mpmath.tanh, (-1.5, 0.3, 3.0)),
    np.arcsinh: (mpmath.asinh, (-1.5, 0.3, 3.0)),
    np.arccosh: (mpmath.acosh, (1.1, 2.0, 9.0)),
    np.arctanh: (mpmath.atanh, (-0.8, 0.3, 0.9)),
    np.deg2rad: (lambda x: x * mpmath.pi / 180, (-90.0, 0.3, 200.0)),
    np.radians: (lambda x: x * mpmath.pi / 180, (-90.0, 0.3, 200.0)),
    np.rad2deg: (lambda x: x * 180 / mpmath.pi, (-1.0, 0.3, 2.0)),
    np.degrees: (lambda x: x * 180 / mpmath.pi, (-1.0, 0.3, 2.0)),
    np.negative: (lambda x: -x, (-1.0, 0.3, 2.0)),
    np.positive: (lambda x: x, (-1.0, 0.3, 2.0)),
    np.absolute: (mpmath.fabs, (-1.0, 0.3, 2.0)),
    np.fabs: (mpmath.fabs, (-1.0, 0.3, 2.0)),
    np.conjugate: (lambda x: x, (-1.0, 0.3, 2.0)),
}
REAL_ONLY = {np.cbrt, np.deg2rad, np.radians, np.rad2deg, np.degrees, np.absolute, np.fabs, np.conjugate}


def one(values):
    return seed(np.atleast_2d(np.asarray(values, dtype=float)))[0]


def two(x, y):
    return seed(np.array(np.broadcast_arrays(np.atleast_1d(x), np.atleast_1d(y)), dtype=float))


def full_tangents(result, n, batch):
    """Tangents on parameters 0..n-1, shape (n, batch)."""
    return tangents_of(result, tuple(range(n)), batch)


def mp_slope(function, *at, index=0):
    with mpmath.workdps(40):
        order = [0] * len(at)
        order[index] = 1
        return mpmath.diff(function, at if len(at) > 1 else at[0], order if len(at) > 1 else 1)


def test_every_rule_is_tried():
    assert set(derivatives._SLOPES) <= set(ELEMENTARY)


@pytest.mark.parametrize("ufunc", ELEMENTARY, ids=lambda u: u.__name__)
def test_elementary_functions(ufunc):
    exact, points = ELEMENTARY[ufunc]
    result = ufunc(one(points))
    assert np.array_equal(result.value, ufunc(np.array(points)))
    found = full_tangents(result, 1, len(points))[0]
    expected = [float(mp_slope(exact, x)) for x in points]
    np.testing.assert_allclose(found, expected, rtol=1e-13)


@pytest.mark.parametrize("ufunc", [u for u in ELEMENTARY if u not in REAL_ONLY], ids=lambda u: u.__name__)
def test_elementary_functions_of_complex_arguments(ufunc):
    exact, _ = ELEMENTARY[ufunc]
    t = np.array([0.2, 0.7])
    # z(t) = (1 + 0.5 t) e^{i t}, off every cut
    x = one(t)
    z = (1.0 + 0.5 * x) * np.exp(1j * x)
    result = ufunc(z)
    found = np.broadcast_to(result.tangents, (1, 2))[0]
    expected = [complex(mp_slope(lambda s: exact((1 + s / 2) * mpmath.exp(1j * s)), p)) for p in t]
    np.testing.assert_allclose(found, expected, rtol=1e-12)


BINARY = {
    "add": (np.add, lambda x, y: x + y),
    "subtract": (np.subtract, lambda x, y: x - y),
    "multiply": (np.multiply, lambda x, y: x * y),
    "divide": (np.true_divide, lambda x, y: x / y),
    "power": (np.power, lambda x, y: x**y),
    "float_power": (np.float_power, lambda x, y: x**y),
    "arctan2": (np.arctan2, mpmath.atan2),
    "hypot": (np.hypot, mpmath.hypot),
    "operator +": (lambda x, y: x + y, lambda x, y: x + y),
    "operator -": (lambda x, y: x - y, lambda x, y: x - y),
    "operator *": (lambda x, y: x * y, lambda x, y: x * y),
    "operator /": (lambda x, y: x / y, lambda x, y: x / y),
    "operator **": (lambda x, y: x**y, lambda x, y: x**y),
}


@pytest.mark.parametrize("name", BINARY)
@pytest.mark.parametrize("varying", ["both", "left", "right"])
def test_functions_of_two_arguments(name, varying):
    function, exact = BINARY[name]
    a, b = np.array([0.4, 1.7, 2.5]), np.array([1.3, 0.6, 2.0])
    x, y = two(a, b)
    left, right = (x if varying != "right" else a), (y if varying != "left" else b)
    result = function(left, right)
    np.testing.assert_allclose(result.value, function(a, b), rtol=1e-15)
    found = full_tangents(result, 2, 3)
    for index, moves in enumerate((varying != "right", varying != "left")):
        expected = [
            float(mp_slope(exact, p, q, index=index)) if moves else 0.0 for p, q in zip(a, b, strict=True)
        ]
        np.testing.assert_allclose(found[index], expected, rtol=1e-13)


@pytest.mark.parametrize("quadrant", [(1, 1), (-1, 1), (-1, -1), (1, -1)])
def test_arctan2_in_every_quadrant(quadrant):
    a, b = 0.7 * quadrant[0], 1.9 * quadrant[1]
    found = full_tangents(np.arctan2(*two(a, b)), 2, 1)[:, 0]
    np.testing.assert_allclose(found, [b / (a * a + b * b), -a / (a * a + b * b)], rtol=1e-14)


@pytest.mark.parametrize("exponent", [2, 2.0, 3, -1, 0.5, -2.5, 1, 0])
def test_powers_with_a_plain_exponent(exponent):
    x = one(POINTS)
    found = full_tangents(x**exponent, 1, 3)[0]
    np.testing.assert_allclose(found, exponent * POINTS ** (exponent - 1.0), rtol=1e-14)


def test_powers_of_negative_numbers():
    x = one([-0.5, -2.0])
    np.testing.assert_allclose(full_tangents(x**3, 1, 2)[0], [0.75, 12.0], rtol=1e-15)
    with np.errstate(invalid="ignore"):
        assert np.isnan((x**0.5).value).all()


def test_a_plain_number_to_a_varying_power():
    x = one(POINTS)
    np.testing.assert_allclose(full_tangents(2**x, 1, 3)[0], math.log(2) * 2**POINTS, rtol=1e-15)


@pytest.mark.parametrize("exponent", [2, 1.5, -1])
def test_complex_powers(exponent):
    x = one(POINTS)
    found = ((1.0 + 1j * x) ** exponent).tangents
    np.testing.assert_allclose(
        np.broadcast_to(found, (1, 3))[0], exponent * (1 + 1j * POINTS) ** (exponent - 1.0) * 1j, rtol=1e-14
    )


def test_modulus_phase_and_parts_of_complex_numbers():
    t = np.array([0.2, 0.7, 2.9])
    x = one(t)
    z = (2.0 + x) * np.exp(1j * x)
    for function, value, slope in [
        (np.abs, 2.0 + t, np.ones(3)),
        (np.absolute, 2.0 + t, np.ones(3)),
        (np.angle, t, np.ones(3)),
        (lambda z: np.angle(z, deg=True), np.rad2deg(t), np.rad2deg(np.ones(3))),
        (np.real, (2 + t) * np.cos(t), np.cos(t) - (2 + t) * np.sin(t)),
        (np.imag, (2 + t) * np.sin(t), np.sin(t) + (2 + t) * np.cos(t)),
        (lambda z: z.real, (2 + t) * np.cos(t), np.cos(t) - (2 + t) * np.sin(t)),
        (lambda z: z.imag, (2 + t) * np.sin(t), np.sin(t) + (2 + t) * np.cos(t)),
        (lambda z: (z * np.conjugate(z)).real, (2 + t) ** 2, 2 * (2 + t)),
        (lambda z: (z * z.conj()).real, (2 + t) ** 2, 2 * (2 + t)),
        (lambda z: abs(z.conjugate()), 2.0 + t, np.ones(3)),
    ]:
        result = function(z)
        np.testing.assert_allclose(result.value, value, rtol=1e-14)
        tangents = full_tangents(result, 1, 3)[0]
        assert not np.iscomplexobj(tangents)
        np.testing.assert_allclose(tangents, slope, rtol=1e-13, atol=1e-15)


def test_real_numbers_have_parts_and_phases_too():
    x = one([-1.0, 2.0])
    assert np.array_equal(np.imag(x).value, [0.0, 0.0])
    assert np.array_equal(full_tangents(np.imag(x), 1, 2), np.zeros((1, 2)))
    assert np.array_equal(np.angle(x).value, [np.pi, 0.0])
    assert np.array_equal(full_tangents(np.angle(x), 1, 2), np.zeros((1, 2)))
    assert np.array_equal(full_tangents(x.real, 1, 2), np.ones((1, 2)))


def test_a_modulus_of_zero_has_no_slope():
    x = one([0.0, 1.0])
    with np.errstate(all="ignore"):
        tangents = full_tangents(np.abs(x * 1j), 1, 2)[0]
    assert math.isnan(tangents[0])
    assert tangents[1] == 1.0


@pytest.mark.parametrize(
    ("ufunc", "expected"),
    [
        (np.maximum, ([1, 0], [0, 1])),
        (np.minimum, ([0, 1], [1, 0])),
        (np.fmax, ([1, 0], [0, 1])),
        (np.fmin, ([0, 1], [1, 0])),
    ],
)
def test_maximum_and_minimum(ufunc, expected):
    x, y = two([3.0, 1.0], [2.0, 4.0])
    result = ufunc(x, y)
    assert np.array_equal(result.value, ufunc(np.array([3.0, 1.0]), np.array([2.0, 4.0])))
    assert np.array_equal(full_tangents(result, 2, 2), expected)
    for bounded in (ufunc(x, 2.5), ufunc(2.5, x)):
        assert np.array_equal(bounded.value, ufunc(np.array([3.0, 1.0]), 2.5))
        assert np.array_equal(full_tangents(bounded, 2, 2), [expected[0], [0, 0]])


@pytest.mark.parametrize("ufunc", [np.maximum, np.minimum, np.fmax, np.fmin], ids=lambda u: u.__name__)
def test_maximum_and_minimum_treat_nan_as_numpy_does(ufunc):
    a, b = np.array([np.nan, 1.0, np.nan]), np.array([2.0, np.nan, np.nan])
    x, y = two(a, b)
    assert np.array_equal(ufunc(x, y).value, ufunc(a, b), equal_nan=True)
    assert np.array_equal(ufunc(x, 2.0).value, ufunc(a, 2.0), equal_nan=True)
    assert np.array_equal(ufunc(2.0, x).value, ufunc(2.0, a), equal_nan=True)


def test_clip_copysign_remainder_and_steps():
    x = one([-0.5, 0.5, 1.5])
    clipped = np.clip(x, 0.0, 1.0)
    assert np.array_equal(clipped.value, [0.0, 0.5, 1.0])
    assert np.array_equal(full_tangents(clipped, 1, 3)[0], [0.0, 1.0, 0.0])
    signed = np.copysign(x, -1.0)
    assert np.array_equal(signed.value, [-0.5, -0.5, -1.5])
    assert np.array_equal(full_tangents(signed, 1, 3)[0], [1.0, -1.0, -1.0])
    assert np.array_equal((x % 1.0).value, [0.5, 0.5, 0.5])
    assert np.array_equal(full_tangents(x % 1.0, 1, 3)[0], [1.0, 1.0, 1.0])
    for step in (np.sign, np.floor, np.ceil, np.rint, np.trunc):
        assert np.array_equal(step(x), step(np.array([-0.5, 0.5, 1.5])))


def test_comparisons_give_plain_truth_values():
    x, y = two([1.0, 2.0, np.nan], [2.0, 2.0, 2.0])
    for result, expected in [
        (x < y, [True, False, False]),
        (x <= 2.0, [True, True, False]),
        (x > y, [False, False, False]),
        (np.float64(2.0) >= x, [True, True, False]),
        (x == y, [False, True, False]),
        (x != y, [True, False, True]),
        (np.isnan(x), [False, False, True]),
        (np.isfinite(x), [True, True, False]),
        (np.signbit(-x), [True, True, False]),
    ]:
        assert isinstance(result, np.ndarray)
        assert result.tolist()[:2] == expected[:2]


# -- supports ------------------------------------------------------------------------------------------------


def test_only_what_a_value_depends_on_is_carried():
    x, y, z = seed(np.ones((3, 2)))
    assert (x + z).support == (0, 2)
    assert (z + x).support == (2, 0)
    assert (x + 1.0).support == (0,)
    assert ((x + y) * (y + z)).support == (0, 1, 2)


@pytest.mark.parametrize("order", [(0, 1, 2), (2, 1, 0), (1, 2, 0), (0, 2, 1), (2, 0, 1), (1, 0, 2)])
def test_unions_of_supports_in_any_order(order):
    values = np.array([[1.1, 0.3], [0.7, 2.0], [1.9, 0.4]])
    leaves = seed(values)
    a, b, c = (leaves[i] for i in order)
    product = (a * b) * (c * a) / (b + c)
    p, q, r = (values[i] for i in order)
    expected = np.empty((3, 2))
    expected[order[0]] = 2 * p * q * r / (q + r)
    expected[order[1]] = p * p * r * r / (q + r) ** 2
    expected[order[2]] = p * p * q * q / (q + r) ** 2
    np.testing.assert_allclose(full_tangents(product, 3, 2), expected, rtol=1e-14)


def test_tangents_on_a_wider_or_permuted_support():
    x, _, z = seed(np.ones((3, 4)))
    result = 2.0 * z + 3.0 * x
    assert np.array_equal(tangents_of(result, (0, 2), 4), [[3.0] * 4, [2.0] * 4])
    assert np.array_equal(tangents_of(result, (2, 0), 4), [[2.0] * 4, [3.0] * 4])
    assert np.array_equal(tangents_of(result, (1, 0, 2), 4), [[0.0] * 4, [3.0] * 4, [2.0] * 4])
    assert np.array_equal(tangents_of(np.ones(4), (1,), 4), np.zeros((1, 4)))
    assert np.array_equal(tangents_of(5.0, (), 4), np.zeros((0, 4)))


# -- selection -----------------------------------------------------------------------------------------------


def test_a_nan_stays_in_its_own_branch_of_where():
    x = one([-1.0, 4.0])
    with np.errstate(all="ignore"):
        result = np.where(x > 0.0, np.sqrt(x), 3.0 * x)
    assert np.array_equal(result.value, [-3.0, 2.0])
    assert np.array_equal(full_tangents(result, 1, 2)[0], [3.0, 0.25])


def test_where_joins_supports_and_takes_plain_branches():
    x, y = two([1.0, 2.0], [5.0, 6.0])
    chosen = np.array([True, False])
    assert np.array_equal(full_tangents(np.where(chosen, x, y), 2, 2), [[1, 0], [0, 1]])
    assert np.array_equal(full_tangents(np.where(chosen, y, x), 2, 2), [[0, 1], [1, 0]])
    assert np.array_equal(full_tangents(np.where(chosen, x, 7.0), 2, 2), [[1, 0], [0, 0]])
    assert np.array_equal(np.where(chosen, 7.0, y).value, [7.0, 6.0])
    assert np.array_equal(full_tangents(np.where(True, x * y, y), 2, 2), [[5, 6], [1, 2]])
    assert np.array_equal(np.where(chosen, 1j * x, y).tangents, [[1j, 0], [0, 1]])


def test_a_condition_may_depend_on_parameters_alone():
    x, y = two([1.0, -2.0], [5.0, 6.0])
    assert np.where(x > 0, 1.0, 2.0).tolist() == [1.0, 2.0]
    assert (np.where(x > 0, y, 2.0)).support == (1,)


# -- shapes --------------------------------------------------------------------------------------------------


def test_sums_over_trailing_axes():
    nodes, weights = np.array([0.1, 0.4, 0.8]), np.array([0.2, 0.5, 0.3])
    a, b = np.array([1.3, 0.2]), np.array([0.5, 1.1])
    x, y = two(a, b)
    for total in (
        lambda x, y: np.sum(weights * np.exp(x[..., None] * nodes) * y[..., None], axis=-1),
        lambda x, y: (weights * np.exp(x[..., None] * nodes) * y[..., None]).sum(axis=-1),
        lambda x, y: np.sum(y[..., np.newaxis] * (np.exp(nodes * x[..., None]) * weights), -1),
        lambda x, y: y * np.sum(np.exp(x[..., None] * nodes) * weights, axis=-1),
    ):
        result = total(x, y)
        np.testing.assert_allclose(result.value, total(a, b), rtol=1e-15)
        grown = np.exp(a[:, None] * nodes)
        np.testing.assert_allclose(
            full_tangents(result, 2, 2), [b * ((grown * nodes) @ weights), grown @ weights], rtol=1e-14
        )


def test_a_constant_with_more_axes_broadcasts():
    x, y = two([1.0, 2.0], [3.0, 4.0])
    nodes = np.array([1.0, 10.0, 100.0])
    grid = x[..., None] + nodes
    assert grid.shape == (2, 3)
    assert np.array_equal(full_tangents(grid.sum(axis=-1), 2, 2), [[3, 3], [0, 0]])
    both = x[..., None] * nodes + y[..., None] ** 2
    assert np.array_equal(full_tangents(np.sum(both, axis=-1), 2, 2), [[111, 111], [18, 24]])
    chosen = np.where(nodes > 5.0, x[..., None], y[..., None] * nodes)
    assert np.array_equal(full_tangents(np.sum(chosen, axis=-1), 2, 2), [[2, 2], [1, 1]])
    left = np.arctan2(x[..., None], nodes * y[..., None])
    expected = [n * 3.0 / (1.0 + (3.0 * n) ** 2) for n in nodes]
    np.testing.assert_allclose(full_tangents(left.sum(axis=-1), 2, 2)[0, 0], sum(expected), rtol=1e-14)


def test_two_trailing_axes():
    x = one([1.0, 2.0])
    weights = np.arange(6.0).reshape(2, 3)
    result = np.sum(np.sum(x[..., None, None] ** 2 * weights, axis=-1), axis=-1)
    assert np.array_equal(full_tangents(result, 1, 2)[0], [30.0, 60.0])


def test_indexing():
    x = one([1.0, 2.0, 3.0])
    square = x**2
    assert square[1].value == 4.0
    assert square[1].tangents.tolist() == [4.0]
    assert square[1:].tangents.tolist() == [[4.0, 6.0]]
    assert square[np.array([True, False, True])].tangents.tolist() == [[2.0, 6.0]]
    assert square[[2, 0]].tangents.tolist() == [[6.0, 2.0]]
    assert square[..., None].shape == (3, 1)
    assert square[..., None].tangents.shape == (1, 3, 1)
    assert len(x) == 3
    assert x[...].tangents.shape == (1, 3)


def test_sums_over_the_batch_are_refused():
    x = one([1.0, 2.0])
    for axis in (0, None, 1):
        with pytest.raises(UnsupportedOperationError, match="axis=-1"):
            np.sum(x, axis=axis)


def test_what_arrays_have():
    x = one([1.0, 2.0])
    assert (x.shape, x.ndim, np.shape(x), np.ndim(x)) == ((2,), 1, (2,), 1)
    assert x.dtype == float
    assert not np.iscomplexobj(x)
    assert np.iscomplexobj(1j * x)
    assert repr(x) == "Dual(shape=(2,), support=(0,))"


def test_seeds():
    values = np.arange(6.0).reshape(3, 2)
    leaves = seed(values)
    assert [leaf.support for leaf in leaves] == [(0,), (1,), (2,)]
    for i, leaf in enumerate(leaves):
        assert np.array_equal(full_tangents(leaf, 3, 2), np.eye(3)[:, [i, i]])


def test_numpy_scalars_and_arrays_on_the_left():
    x = one([1.0, 2.0])
    for left in (np.float64(3.0), np.array([3.0, 3.0]), 3, 3.0, np.complex128(3.0)):
        for result, slope in ((left + x, 1), (left - x, -1), (left * x, 3)):
            assert isinstance(result, Dual)
            assert np.array_equal(np.broadcast_to(result.tangents, (1, 2)), [[slope] * 2])


# -- the way out ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "convert",
    [float, complex, int, bool, np.asarray, np.array, lambda x: np.asarray(x, dtype=float), lambda x: np.sort(x),
     lambda x: np.sinc(x), lambda x: np.add.reduce(x), lambda x: np.sqrt(x, where=np.array([True])),
     lambda x: np.stack([x, x])],
)  # fmt: skip
def test_what_has_no_rule_says_so_instead_of_dropping_derivatives(convert):
    with pytest.raises(UnsupportedOperationError):
        convert(one([1.0]))


@pytest.mark.parametrize(
    "function",
    [
        lambda x, y: np.interp(x, [0.0, 10.0], [0.0, 5.0]) * y,
        lambda x, y: 0.5 * np.asarray(x) * y,
        lambda x, y: 0.5 * x.copy() * y,
        lambda x, y: 0.5 * np.atleast_1d(x) * y,
        lambda x, y: 0.5 * np.prod(np.stack([x, y]), axis=0),
        lambda x, y: 0.5 * np.sum(x[..., None] * y[..., None], axis=-1, keepdims=True)[..., 0],
        lambda x, y: 0.5 * np.clip(x, a_min=0.0, a_max=99.0) * y,
        lambda x, y: 0.5 * np.multiply(x, y, dtype=float),
        lambda x, y: 0.5 * np.einsum("i,i->i", x, y),
    ],
)
def test_unsupported_functions_fall_back_to_differences(function):
    a, b = np.array([0.4, 3.0]), np.array([2.0, 1e-3])
    result = call_with_derivatives(function, two(a, b))
    assert np.array_equal(result.value, function(a, b))
    np.testing.assert_allclose(full_tangents(result, 2, 2), [0.5 * b, 0.5 * a], rtol=1e-9)


def test_the_fallback_chains_with_exact_derivatives():
    x, y = two([0.4, 3.0], [2.0, 0.7])
    inner = np.exp(x) * y  # exact
    middle = call_with_derivatives(lambda z: np.interp(z, [0.0, 100.0], [0.0, 300.0]) ** 2, [inner])
    outer = np.log(middle) + x
    np.testing.assert_allclose(full_tangents(outer, 2, 2), [[3.0, 3.0], [1.0, 1 / 0.35]], rtol=1e-8)


def test_the_fallback_with_complex_values():
    x, y = two([0.4, 3.0], [2.0, 0.7])
    z = x + 1j * y
    result = call_with_derivatives(lambda z: np.asarray(z) ** 2, [z])
    np.testing.assert_allclose(result.tangents, [2 * z.value, 2j * z.value], rtol=1e-8)


@pytest.mark.parametrize("size", [1e-13, 1e-6, 1.0, 1e12])
def test_the_fallback_knows_no_natural_size(size):
    # Mixing amplitudes in GeV are 1e-13, widths smaller still.
    x = one([0.3 * size, 2.0 * size])
    result = call_with_derivatives(lambda x: np.asarray(x) ** 3 / size**3, [x])
    np.testing.assert_allclose(full_tangents(result, 1, 2)[0], [0.27 / size, 12.0 / size], rtol=1e-8)


def test_the_fallback_at_an_argument_of_zero():
    x, y = two([0.0, 0.0], [0.5, 2.0])
    result = call_with_derivatives(lambda x, y: np.asarray(y) * np.exp(x), [x, y])
    np.testing.assert_allclose(full_tangents(result, 2, 2), [[0.5, 2.0], [1.0, 1.0]], rtol=1e-8)
    alone = call_with_derivatives(lambda x: np.exp(np.asarray(x)), [x])
    np.testing.assert_allclose(full_tangents(alone, 2, 2)[0], [1.0, 1.0], rtol=1e-8)


def test_errors_of_a_formula_come_out():
    def broken(x):
        return x.no_such_thing

    def also_broken(x):
        return np.exp(x, x, x)

    for function, kind in ((broken, AttributeError), (also_broken, TypeError)):
        with pytest.raises(kind):
            call_with_derivatives(function, [one([1.0])])


def test_plain_arguments_are_just_called():
    assert call_with_derivatives(lambda a, b: a + b, [1.0, 2.0]) == 3.0


# -- random expressions --------------------------------------------------------------------------------------

#: Analytic on the whole neighbourhood of the real axis, so that a complex step differentiates them exactly.
UNARY = [
    np.sin,
    np.cos,
    np.arctan,
    np.tanh,
    lambda x: np.exp(0.1 * np.tanh(x)),
    lambda x: np.sqrt(1.0 + x * x),
    lambda x: np.log(2.0 + np.cos(x)),
    lambda x: (1.5 + np.sin(x)) ** 2.5,
    lambda x: 1.0 / (1.0 + x * x),
    lambda x: -x,
    lambda x: x**2,
    lambda x: np.sum(np.sin(x[..., None] * np.array([0.5, 1.0, 1.5])) * np.array([1.0, -2.0, 0.5]), axis=-1),
]
PAIRS = [
    lambda x, y: x + y,
    lambda x, y: x - y,
    lambda x, y: np.tanh(x) * np.tanh(y),
    lambda x, y: x / (2.0 + np.sin(y)),
    lambda x, y: (2.0 + np.cos(x)) ** np.sin(y),
    lambda x, y: np.where(np.real(x) > np.real(y), x * np.cos(y), np.sin(x) + y),
]


def leaves(n):
    return st.one_of(st.integers(0, n - 1), st.floats(-2.0, 2.0))


def grow(children):
    return st.one_of(
        st.tuples(st.sampled_from(range(len(UNARY))), children),
        st.tuples(st.sampled_from(range(len(PAIRS))), children, children),
    )


def build(tree, variables):
    if isinstance(tree, int):
        return variables[tree]
    if isinstance(tree, float):
        return np.float64(tree)
    if len(tree) == 2:
        inner = build(tree[1], variables)
        return UNARY[tree[0]](inner if np.ndim(inner) else np.atleast_1d(inner))
    return PAIRS[tree[0]](build(tree[1], variables), build(tree[2], variables))


@settings(deadline=None, max_examples=150)
@given(st.recursive(leaves(3), grow, max_leaves=12), st.lists(st.floats(-2.0, 2.0), min_size=6, max_size=6))
def test_random_expressions_against_complex_steps(tree, numbers):
    values = np.array(numbers).reshape(3, 2)
    result = build(tree, seed(values))
    found = full_tangents(result, 3, 2)
    step = 1e-30
    for i in range(3):
        moved = values.astype(complex)
        moved[i] += 1j * step
        expected = np.broadcast_to(np.imag(build(tree, moved)) / step, (2,))
        scale = np.max(np.abs(found)) + 1.0
        np.testing.assert_allclose(found[i], expected, rtol=1e-11, atol=1e-12 * scale)


@settings(deadline=None, max_examples=80)
@given(st.recursive(leaves(3), grow, max_leaves=12), st.lists(st.floats(-2.0, 2.0), min_size=15, max_size=15))
def test_random_expressions_batch_equals_point_by_point(tree, numbers):
    values = np.array(numbers).reshape(3, 5)
    whole = full_tangents(build(tree, seed(values)), 3, 5)
    parts = [full_tangents(build(tree, seed(values[:, i : i + 1])), 3, 1) for i in range(5)]
    assert np.array_equal(whole, np.concatenate(parts, axis=1), equal_nan=True)


@settings(deadline=None, max_examples=80)
@given(st.recursive(leaves(3), grow, max_leaves=10), st.recursive(leaves(3), grow, max_leaves=10))
def test_random_complex_expressions(real_tree, imaginary_tree):
    """|z|^2, arg z and z* of z = f + i g, from the derivatives of f and g."""
    values = np.array([[0.3, -1.2], [0.8, 1.5], [-0.6, 0.1]])
    f, g = build(real_tree, seed(values)), build(imaginary_tree, seed(values))
    df, dg = full_tangents(f, 3, 2), full_tangents(g, 3, 2)
    f_value, g_value = (np.broadcast_to(getattr(x, "value", x), (2,)) for x in (f, g))
    if np.any(f_value**2 + g_value**2 < 1e-6):
        return
    z = f + 1j * g
    size = f_value**2 + g_value**2
    scale = 1.0 + np.abs(df).max() + np.abs(dg).max()
    for result, expected in [
        (np.abs(z), (f_value * df + g_value * dg) / np.sqrt(size)),
        (np.angle(z), (f_value * dg - g_value * df) / size),
        (np.imag(np.conjugate(z)), -dg),
        (np.real(z * z), 2 * (f_value * df - g_value * dg)),
    ]:
        np.testing.assert_allclose(full_tangents(result, 3, 2), expected, rtol=1e-10, atol=1e-9 * scale)
