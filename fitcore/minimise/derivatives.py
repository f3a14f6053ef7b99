"""Exact forward derivatives on batches, sparse by support.

A `Dual` is an array together with one tangent array per parameter it depends on, and only those. Formulas written
with NumPy's ufuncs (and ``np.where``, ``np.sum``, ``np.angle``, ``np.real``, ``np.imag``, indexing) run on it
unchanged, through NumPy's dispatch protocols. A formula that uses anything else is differentiated by central
differences in its own few arguments, which `call_with_derivatives` arranges.

Complex arrays carry complex tangents with respect to the real parameters, so ``np.abs`` and ``np.conjugate``, which
have no complex derivative, are no exception.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.lib.mixins import NDArrayOperatorsMixin

__all__ = ["Dual", "UnsupportedOperationError", "call_with_derivatives", "seed", "tangents_of"]

Support = tuple[int, ...]

#: Two terms that cancel to less than this share of their size have cancelled.
NOISE = 32 * np.finfo(float).eps


class UnsupportedOperationError(TypeError):
    """An operation that has no derivative rule here."""


@lru_cache(maxsize=65536)
def _join(left: Support, right: Support) -> tuple[Support, int, Any, bool]:
    """Union of two supports: the left one's rows first, then what is new.

    Returns
    -------
    union : tuple of int
    n_left : int
        Rows of the left support.
    rows : slice or ndarray
        Where the right support's rows go.
    apart : bool
        Whether the two have nothing in common.
    """
    union = left + tuple(p for p in right if p not in left)
    index = [union.index(p) for p in right]
    if index == list(range(index[0], index[0] + len(index))):
        rows: Any = slice(index[0], index[0] + len(index))
    else:
        rows = np.array(index)
    return union, len(left), rows, len(union) == len(left) + len(right)


class Dual(NDArrayOperatorsMixin):
    """An array and its derivatives with respect to some parameters.

    Parameters
    ----------
    value : ndarray
        Any shape.
    support : tuple of int
        Parameters it depends on, in any order.
    tangents : ndarray
        Shape ``(len(support), *value.shape)``, or broadcastable to it in the trailing axes.
    """

    __slots__ = ("support", "tangents", "value")

    def __init__(self, value: Any, support: Support, tangents: Any) -> None:
        self.value = value
        self.support = support
        self.tangents = tangents

    # -- what arrays have -----------------------------------------------------------------------------------------

    @property
    def shape(self) -> tuple[int, ...]:
        return np.shape(self.value)

    @property
    def ndim(self) -> int:
        return np.ndim(self.value)

    @property
    def dtype(self) -> Any:
        return np.asarray(self.value).dtype

    @property
    def real(self) -> Dual:
        return Dual(np.real(self.value), self.support, np.real(self.tangents))

    @property
    def imag(self) -> Dual:
        return Dual(np.imag(self.value), self.support, np.imag(self.tangents))

    def conj(self) -> Dual:
        return Dual(np.conjugate(self.value), self.support, np.conjugate(self.tangents))

    conjugate = conj

    def sum(self, axis: int = -1) -> Dual:
        return _sum(self, axis=axis)

    def __len__(self) -> int:
        return len(self.value)

    def __getitem__(self, key: Any) -> Dual:
        full = key if isinstance(key, tuple) else (key,)
        tangents = np.broadcast_to(self.tangents, (len(self.support), *self.shape))
        return Dual(self.value[key], self.support, tangents[(slice(None), *full)])

    # The four rules of arithmetic skip the dispatch below: it costs more than a short batch.

    def __add__(self, other: Any) -> Dual:
        return _combine(self.value + _plain(other), self, None, other, None)

    __radd__ = __add__

    def __sub__(self, other: Any) -> Dual:
        return _combine(self.value - _plain(other), self, None, other, -1.0)

    def __rsub__(self, other: Any) -> Dual:
        return _combine(_plain(other) - self.value, other, None, self, -1.0)

    def __mul__(self, other: Any) -> Dual:
        plain = _plain(other)
        return _combine(self.value * plain, self, plain, other, self.value)

    __rmul__ = __mul__

    def __truediv__(self, other: Any) -> Dual:
        return _divide(self, other)

    def __rtruediv__(self, other: Any) -> Dual:
        return _divide(other, self)

    def __neg__(self) -> Dual:
        return Dual(-self.value, self.support, -self.tangents)

    def __array__(self, *_: Any, **__: Any) -> Any:
        # Without this, np.asarray would make an array of objects and the derivatives would be lost in silence.
        raise UnsupportedOperationError("a derivative-carrying array cannot become a plain array")

    def __float__(self) -> float:
        raise UnsupportedOperationError("a derivative-carrying array cannot become a plain number")

    __complex__ = __int__ = __float__

    def __bool__(self) -> bool:
        raise UnsupportedOperationError("the truth value of a batch is undefined; use np.where")

    def __repr__(self) -> str:
        return f"Dual(shape={self.shape}, support={self.support})"

    # -- NumPy's dispatch -----------------------------------------------------------------------------------------

    def __array_ufunc__(self, ufunc: np.ufunc, method: str, *inputs: Any, **kwargs: Any) -> Any:
        if method != "__call__" or any(value is not None for value in kwargs.values()):
            raise UnsupportedOperationError(f"{ufunc.__name__}.{method} with {sorted(kwargs)}")
        if len(inputs) == 1:
            return _unary(ufunc, inputs[0])
        if len(inputs) == 2:
            return _binary(ufunc, inputs[0], inputs[1])
        raise UnsupportedOperationError(ufunc.__name__)

    def __array_function__(self, function: Any, types: Any, args: Any, kwargs: Any) -> Any:
        rule = _FUNCTIONS.get(function)
        if rule is None:
            raise UnsupportedOperationError(function.__name__)
        return rule(*args, **kwargs)


def seed(values: np.ndarray) -> list[Dual]:
    """Independent variables.

    Parameters
    ----------
    values : ndarray, shape (n, B)

    Returns
    -------
    list of Dual
        One per row, each with itself as support.
    """
    one = np.ones((1, 1))
    return [Dual(row, (i,), one) for i, row in enumerate(values)]


def tangents_of(result: Any, support: Support, batch: int) -> np.ndarray:
    """Tangents of a result on a given support, shape ``(len(support), batch)``; zeros for plain arrays."""
    if not isinstance(result, Dual):
        return np.zeros((len(support), batch))
    tangents = np.broadcast_to(result.tangents, (len(result.support), batch))
    if result.support == support:
        return tangents
    if len(result.support) == len(support):
        return tangents[[result.support.index(p) for p in support]]
    full = np.zeros((len(support), batch), dtype=tangents.dtype)
    full[[support.index(p) for p in result.support]] = tangents
    return full


def call_with_derivatives(function: Callable[..., Any], arguments: list[Any]) -> Any:
    """Call a formula on arrays and Duals; where it leaves the differentiable operations, use differences."""
    if not any(isinstance(a, Dual) for a in arguments):
        return function(*arguments)
    try:
        return function(*arguments)
    except (TypeError, AttributeError):
        # UnsupportedOperationError, or a method or argument that only plain arrays have; an error of the formula's own
        # comes out of the plain call.
        return _by_differences(function, arguments)


# -- rules --------------------------------------------------------------------------------------------------------

# Slopes of the elementary functions, given the argument and the result.
_SLOPES: dict[Any, Callable[[Any, Any], Any]] = {
    np.exp: lambda x, y: y,
    np.expm1: lambda x, y: y + 1.0,
    np.log: lambda x, y: 1.0 / x,
    np.log10: lambda x, y: 1.0 / (x * np.log(10.0)),
    np.log2: lambda x, y: 1.0 / (x * np.log(2.0)),
    np.log1p: lambda x, y: 1.0 / (1.0 + x),
    np.sqrt: lambda x, y: 0.5 / y,
    np.cbrt: lambda x, y: 1.0 / (3.0 * y * y),
    np.square: lambda x, y: 2.0 * x,
    np.reciprocal: lambda x, y: -y * y,
    np.sin: lambda x, y: np.cos(x),
    np.cos: lambda x, y: -np.sin(x),
    np.tan: lambda x, y: 1.0 + y * y,
    np.arcsin: lambda x, y: 1.0 / np.sqrt(1.0 - x * x),
    np.arccos: lambda x, y: -1.0 / np.sqrt(1.0 - x * x),
    np.arctan: lambda x, y: 1.0 / (1.0 + x * x),
    np.sinh: lambda x, y: np.cosh(x),
    np.cosh: lambda x, y: np.sinh(x),
    np.tanh: lambda x, y: 1.0 - y * y,
    np.arcsinh: lambda x, y: 1.0 / np.sqrt(x * x + 1.0),
    np.arccosh: lambda x, y: 1.0 / np.sqrt(x * x - 1.0),
    np.arctanh: lambda x, y: 1.0 / (1.0 - x * x),
    np.deg2rad: lambda x, y: np.pi / 180.0,
    np.radians: lambda x, y: np.pi / 180.0,
    np.rad2deg: lambda x, y: 180.0 / np.pi,
    np.degrees: lambda x, y: 180.0 / np.pi,
}
_FLAT = {np.sign, np.floor, np.ceil, np.rint, np.trunc}
_BOOLEAN = {
    np.less, np.less_equal, np.greater, np.greater_equal, np.equal, np.not_equal,
    np.isfinite, np.isnan, np.isinf, np.signbit,
}  # fmt: skip


def _plain(x: Any) -> Any:
    return x.value if isinstance(x, Dual) else x


def _scale(slope: Any, argument: Dual, ndim: int) -> Any:
    """slope * tangents, where the result has ``ndim`` axes: tangents keep their own axis in front."""
    return _times(slope, _lift(argument.tangents, ndim))


def _lift(tangents: Any, ndim: int) -> Any:
    missing = ndim + 1 - tangents.ndim
    if missing <= 0:
        return tangents
    return tangents.reshape(tangents.shape[0], *(1,) * missing, *tangents.shape[1:])


def _unary(ufunc: np.ufunc, x: Dual) -> Any:
    if ufunc in _BOOLEAN:
        return ufunc(x.value)
    if ufunc is np.negative:
        return Dual(-x.value, x.support, -x.tangents)
    if ufunc is np.positive:
        return x
    if ufunc is np.conjugate:
        return x.conj()
    if ufunc is np.absolute or ufunc is np.fabs:
        return _absolute(x)
    value = ufunc(x.value)
    if ufunc in _FLAT:
        return value
    slope = _SLOPES.get(ufunc)
    if slope is None:
        raise UnsupportedOperationError(ufunc.__name__)
    return Dual(value, x.support, _scale(slope(x.value, value), x, np.ndim(value)))


def _absolute(x: Dual) -> Dual:
    value = np.absolute(x.value)
    if np.iscomplexobj(x.value):
        # d|z| = Re(z* dz)/|z|; at z = 0 there is no slope and nan says so.
        phase = x.value / value
        return Dual(
            value, x.support, _remainder(phase.real * x.tangents.real, phase.imag * np.imag(x.tangents))
        )
    return Dual(value, x.support, np.sign(x.value) * x.tangents)


def _remainder(a: Any, b: Any) -> Any:
    """a + b, and zero where the two cancel to rounding.

    A real factor of z does not turn it, a phase does not stretch it: what rounding leaves of such a derivative would be
    taken for information.
    """
    total = a + b
    return np.where(np.abs(total) <= NOISE * (np.abs(a) + np.abs(b)), 0.0, total)


def _times(slope: Any, tangents: Any, out: Any = None) -> Any:
    """slope * tangents; None means slope 1. A real slope meets complex tangents as complex: cheaper than casting."""
    if slope is None:
        if out is None:
            return tangents
        out[...] = tangents
        return out
    if tangents.dtype.kind == "c" and np.ndim(slope) and slope.dtype.kind != "c":
        slope = slope.astype(complex)
    return np.multiply(slope, tangents, out=out)


def _combine(value: Any, left: Any, left_slope: Any, right: Any, right_slope: Any) -> Dual:
    """Result of a two-argument operation from its slopes; None means slope 1."""
    ndim = np.ndim(value)
    if not isinstance(right, Dual):
        return Dual(value, left.support, _times(left_slope, _lift(left.tangents, ndim)))
    if not isinstance(left, Dual):
        return Dual(value, right.support, _times(right_slope, _lift(right.tangents, ndim)))
    a, b = _lift(left.tangents, ndim), _lift(right.tangents, ndim)
    if left.support == right.support:
        return Dual(value, left.support, _times(left_slope, a) + _times(right_slope, b))
    union, n_left, rows, apart = _join(left.support, right.support)
    kind = np.result_type(a, b, *(x for x in (left_slope, right_slope) if x is not None))
    total = np.empty((len(union), *np.shape(value)), dtype=kind)
    _times(left_slope, a, out=total[:n_left])
    if apart:
        _times(right_slope, b, out=total[n_left:])
    else:
        total[n_left:] = 0.0
        total[rows] += _times(right_slope, b)
    return Dual(value, union, total)


def _binary(ufunc: np.ufunc, x: Any, y: Any) -> Any:
    a, b = _plain(x), _plain(y)
    if ufunc is np.add:
        return _combine(a + b, x, None, y, None)
    if ufunc is np.subtract:
        return _combine(a - b, x, None, y, -1.0)
    if ufunc is np.multiply:
        return _combine(a * b, x, b, y, a)
    if ufunc is np.true_divide:
        return _divide(x, y)
    if ufunc in _BOOLEAN or ufunc in (np.logical_and, np.logical_or, np.logical_xor):
        return ufunc(a, b)
    if ufunc is np.power or ufunc is np.float_power:
        return _power(x, y, a, b)
    value = ufunc(a, b)
    if ufunc is np.arctan2:
        square = a * a + b * b
        return _combine(value, x, b / square, y, -a / square)
    if ufunc is np.hypot:
        return _combine(value, x, a / value, y, b / value)
    if ufunc in (np.maximum, np.minimum):  # a nan on either side wins
        return _where((value == a) | np.isnan(a), x, y)
    if ufunc in (np.fmax, np.fmin):
        return _where(value == a, x, y)
    if ufunc is np.copysign and not isinstance(y, Dual):
        return Dual(value, x.support, _scale(np.copysign(1.0, b) * np.sign(a), x, np.ndim(value)))
    if ufunc is np.remainder and not isinstance(y, Dual):
        return Dual(value, x.support, _lift(x.tangents, np.ndim(value)))
    raise UnsupportedOperationError(ufunc.__name__)


def _divide(x: Any, y: Any) -> Dual:
    a, b = _plain(x), _plain(y)
    value = a / b
    inverse = 1.0 / b
    return _combine(value, x, inverse, y, -value * inverse if isinstance(y, Dual) else None)


def _power(x: Any, y: Any, a: Any, b: Any) -> Dual:
    if not isinstance(y, Dual):
        if np.ndim(b) == 0 and b == 2:
            return Dual(a * a, x.support, _scale(2.0 * a, x, np.ndim(a)))
        value = np.power(a, b)
        return Dual(value, x.support, _scale(b * np.power(a, b - 1), x, np.ndim(value)))
    value = np.power(a, b)
    if not isinstance(x, Dual):
        return Dual(value, y.support, _scale(value * np.log(a), y, np.ndim(value)))
    return _combine(value, x, b * np.power(a, b - 1), y, value * np.log(a))


# -- functions that are not ufuncs ---------------------------------------------------------------------------------


def _where(condition: Any, x: Any, y: Any) -> Any:
    """Selection; tangents are selected too, never multiplied by zero, so a nan stays in its own branch."""
    condition = np.asarray(_plain(condition))
    value = np.where(condition, _plain(x), _plain(y))
    supports = [s.support for s in (x, y) if isinstance(s, Dual)]
    union = tuple(sorted(set().union(*supports)))

    def rows(argument: Any) -> Any:
        if not isinstance(argument, Dual):
            return 0.0
        lifted = _lift(argument.tangents, value.ndim)
        if argument.support == union:
            return lifted
        full = np.zeros((len(union), *lifted.shape[1:]), dtype=lifted.dtype)
        full[[union.index(p) for p in argument.support]] = lifted
        return full

    tangents = np.where(condition, rows(x), rows(y))
    return Dual(value, union, np.broadcast_to(tangents, (len(union), *value.shape)))


def _sum(x: Dual, axis: int = -1) -> Dual:
    tangents = np.broadcast_to(x.tangents, (len(x.support), *x.shape))
    if axis is None or axis >= 0:
        raise UnsupportedOperationError(
            "np.sum takes axis=-1, -2, ... here, so that any leading batch shape works"
        )
    return Dual(np.sum(x.value, axis=axis), x.support, np.sum(tangents, axis=axis))


def _angle(z: Dual, deg: bool = False) -> Dual:
    value = np.angle(z.value, deg=deg)
    square = z.value.real**2 + np.imag(z.value) ** 2
    if np.iscomplexobj(z.value):
        slope = _remainder(z.value.real * z.tangents.imag, -z.value.imag * z.tangents.real) / square
    else:
        slope = np.zeros(np.shape(z.tangents))
    return Dual(value, z.support, np.rad2deg(slope) if deg else slope)


_FUNCTIONS: dict[Any, Callable[..., Any]] = {
    np.where: _where,
    np.sum: _sum,
    np.angle: _angle,
    np.real: lambda x: x.real,
    np.imag: lambda x: x.imag,
    np.shape: lambda x: x.shape,
    np.ndim: lambda x: x.ndim,
    np.iscomplexobj: lambda x: np.iscomplexobj(x.value),
    np.clip: lambda x, lower, upper: np.minimum(np.maximum(x, lower), upper),
}


# -- the fallback ---------------------------------------------------------------------------------------------------


def _by_differences(function: Callable[..., Any], arguments: list[Any]) -> Any:
    """Chain rule with central differences in the function's own arguments, along each parameter's tangent."""
    plain = [_plain(a) for a in arguments]
    value = np.asarray(function(*plain))
    duals = [a for a in arguments if isinstance(a, Dual)]
    union = tuple(sorted(set().union(*(d.support for d in duals))))
    tangents = np.empty((len(union), *value.shape), dtype=value.dtype)
    for row, parameter in enumerate(union):
        directions = [
            a.tangents[a.support.index(parameter)] if isinstance(a, Dual) and parameter in a.support else None
            for a in arguments
        ]
        moved = [(np.abs(p), np.abs(d)) for p, d in zip(plain, directions, strict=True) if d is not None]
        # Step so that no argument moves by more than eps^(1/3) of itself, which balances the two errors.
        # An argument that is exactly zero has no size of its own and waits for the others.
        limits = [np.where((d > 0) & (size > 0), size / np.where(d > 0, d, 1.0), np.inf) for size, d in moved]
        step = 6e-6 * np.minimum.reduce(limits)
        step = np.where(np.isfinite(step), step, 6e-6)

        def at(sign: float, directions: list[Any] = directions, step: Any = step) -> Any:
            return function(
                *(p if d is None else p + sign * step * d for p, d in zip(plain, directions, strict=True))
            )

        tangents[row] = (at(1.0) - at(-1.0)) / (2.0 * step)
    return Dual(value, union, tangents)
