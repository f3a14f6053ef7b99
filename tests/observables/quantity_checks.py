"""What every quantity of a catalogue has to satisfy, as functions that return the faults they find.

The same functions run over the public catalogue (which must have no fault) and over copies with one planted fault
(which must be found). Each fault is one line that starts with the name of the quantity.
"""

from __future__ import annotations

import math

import numpy as np

from fitcore.minimise.derivatives import Dual, call_with_derivatives, seed, tangents_of
from likelihoods import units
from observables.graph import compile_graph, find_parameters

ELEMENTS = [f"V_{up}{down}" for up in "uct" for down in "dsb"]

#: Where the four parameters of the matrix are drawn: both signs of rho-bar and eta-bar, A lambda^2 < 1.
WOLFENSTEIN = {
    "wolfenstein_lambda": (0.18, 0.30),
    "wolfenstein_A": (0.6, 1.1),
    "wolfenstein_rhobar": (-0.9, 0.9),
    "wolfenstein_etabar": (-0.9, 0.9),
}
#: Other parameters are drawn this many of their scales around the start value, inside their bounds.
SPREAD = 10.0
#: Distance kept from the corners of the triangle and from its base, where angles have no derivative.
CLEARANCE = 0.15

#: Rephasing leaves rounding errors of the size of the amplitude; this quantity is the imaginary part of one whose real
#: part is up to 10^4 times larger (charm in the kaon system), and 10^4 x 2^-52 x some operations is 1e-11.
CANCELLATION = {"epsilon_K_charm_top": 10.0}

#: The sine of a phase of up to 3 pi inherits the phase's rounding errors, ten times those of a number of order one.
LARGE_PHASE = {"sine_2beta_plus_gamma": 10.0}

#: Coefficients of the central difference of eighth order (B. Fornberg, Math. Comp. 51, 699 (1988), table 1).
STENCIL = {1: 4 / 5, 2: -1 / 5, 3: 4 / 105, 4: -1 / 280}


class Checker:
    """A catalogue under a hypothesis, compiled with all parameters as inputs, and points to try it at."""

    def __init__(self, catalogue, names=None, hypothesis="standard", size=67, seed=1):
        self.catalogue = catalogue
        self.hypothesis = catalogue.get_hypothesis(hypothesis)
        self.names = tuple(catalogue.names("quantity") if names is None else names)
        leaves = find_parameters(catalogue, self.names, self.hypothesis)
        self.parameters = {name: leaf for name, leaf in leaves.items() if leaf.kind == "parameter"}
        self.inputs = tuple(self.parameters)
        self.graph = compile_graph(catalogue, self.names, self.inputs, {}, self.hypothesis)
        self.rng = np.random.default_rng(seed)
        self.points = self.draw(size)
        self.values = self.evaluate(self.points)

    def draw(self, size):
        """Random points of the physical region, shape (n, size)."""
        rows = []
        for name, leaf in self.parameters.items():
            low, high = leaf.start - SPREAD * leaf.scale, leaf.start + SPREAD * leaf.scale
            low, high = WOLFENSTEIN.get(name, (low, high))
            if math.isfinite(leaf.lower):
                low = max(low, 0.5 * (leaf.lower + leaf.start) if leaf.lower < leaf.start else leaf.lower)
            if math.isfinite(leaf.upper):
                high = min(high, 0.5 * (leaf.upper + leaf.start) if leaf.start < leaf.upper else leaf.upper)
            rows.append(self.rng.uniform(low, high, size))
        points = np.array(rows)
        if {"wolfenstein_rhobar", "wolfenstein_etabar"} <= set(self.inputs):
            rho, eta = self.inputs.index("wolfenstein_rhobar"), self.inputs.index("wolfenstein_etabar")
            for _ in range(1000):
                apex = points[rho] + 1j * points[eta]
                close = (
                    (np.abs(apex) < CLEARANCE) | (np.abs(1 - apex) < CLEARANCE) | (np.abs(points[eta]) < 0.05)
                )
                if not close.any():
                    break
                points[rho, close] = self.rng.uniform(-0.9, 0.9, close.sum())
                points[eta, close] = self.rng.uniform(-0.9, 0.9, close.sum())
        return points

    def evaluate(self, leaves):
        """Name -> values, spread over the batch."""
        shape = np.shape(leaves[0]) if len(leaves) else ()
        return {
            name: np.broadcast_to(value, np.broadcast_shapes(np.shape(value), shape))
            for name, value in zip(self.names, self.graph.evaluate(list(leaves)), strict=True)
        }

    def difference(self, name, left, right):
        """left - right, modulo the period of an angle."""
        period = self.catalogue[name].period
        gap = left - right
        return gap - period * np.rint(gap.real / period) if period else gap

    def size_of(self, name, values):
        """What counts as one: the radian of an angle, else the value or, where it is smaller, the median one.

        A quantity of either sign passes through zero, and rounding errors do not shrink with it.
        """
        period = self.catalogue[name].period
        return np.maximum(
            np.abs(values), period / (2 * np.pi) if period else np.median(np.abs(self.values[name]))
        )


# -- values --------------------------------------------------------------------------------------------------


def batch_is_point_by_point(checker):
    """One point, a batch and its chunks agree bit for bit."""
    whole = checker.values
    size = checker.points.shape[1]
    faults = []
    for step in (1, 16, 50):
        parts = [checker.evaluate(checker.points[:, start : start + step]) for start in range(0, size, step)]
        for name in checker.names:
            joined = np.concatenate([part[name] for part in parts])
            if not np.array_equal(joined, whole[name], equal_nan=True):
                faults.append(f"{name}: {step} points at a time give other numbers than the batch")
    return _first_of_each(faults)


def scalars_agree(checker, tolerance=1e-15):
    """Plain numbers give what a batch of one gives, to 1e-15 of the value."""
    faults = []
    for column in checker.points.T[:8]:
        alone = checker.evaluate([np.float64(x) for x in column])
        batch = checker.evaluate(column[:, None])
        for name in checker.names:
            if np.shape(alone[name]) != ():
                faults.append(f"{name}: a scalar point gives the shape {np.shape(alone[name])}")
                continue
            allowed = tolerance * LARGE_PHASE.get(name, 1.0) * checker.size_of(name, batch[name][0])
            if not np.abs(alone[name] - batch[name][0]) <= allowed:
                faults.append(f"{name}: scalar {alone[name]!r}, batch {batch[name][0]!r}")
    return _first_of_each(faults)


def _first_of_each(faults):
    return list({fault.partition(":")[0]: fault for fault in reversed(faults)}.values())[::-1]


def leading_shapes_are_kept(checker):
    """Points of shape (2, 3) give values of shape (2, 3): those of the same points in a row."""
    row = checker.evaluate(checker.points[:, :6])
    try:
        block = checker.evaluate(checker.points[:, :6].reshape(-1, 2, 3))
    except Exception as error:
        return [f"{_culprit(checker, (2, 3))}: does not take points of shape (2, 3): {error}"]
    return [
        f"{name}: points of shape (2, 3) give the shape {block[name].shape} or other numbers"
        for name in checker.names
        if block[name].shape != (2, 3) or not np.array_equal(block[name].ravel(), row[name])
    ]


def values_are_finite(checker):
    """Finite at all points of the physical region."""
    values = checker.values
    return [
        f"{name}: not finite at {int(np.sum(~np.isfinite(values[name])))} of {checker.points.shape[1]} points"
        for name in checker.names
        if not np.isfinite(values[name]).all()
    ]


def types_are_as_declared(checker):
    """Real quantities are float64, complex ones complex128."""
    values = checker.values
    faults = []
    for name in checker.names:
        expected = complex if checker.catalogue[name].is_complex else float
        if values[name].dtype != np.dtype(expected):
            faults.append(f"{name}: declared {expected.__name__}, returns {values[name].dtype}")
    return faults


def nothing_raises(checker):
    """Domain problems give nan: nothing raises at the bounds, far outside them, or at nan."""
    n = len(checker.inputs)
    bounds = np.array([[leaf.lower, leaf.upper] for leaf in checker.parameters.values()]).reshape(n, 2)
    huge = np.where(np.isfinite(bounds), bounds, np.sign(bounds) * 1e6)
    wild = np.column_stack(
        [huge, huge.mean(axis=1), 3.0 * huge, np.zeros(n), np.full(n, -1.0), np.full(n, np.nan)]
    )
    try:
        checker.evaluate(wild)
        for column in wild.T:
            checker.evaluate([np.float64(x) for x in column])
    except Exception as error:
        return [f"{_culprit(checker, None, wild)}: raises {error!r} instead of returning nan"]
    return []


def _culprit(checker, shape, points=None):
    """The first quantity that raises when it is evaluated alone."""
    for name in checker.names:
        alone = Checker(checker.catalogue, [name], checker.hypothesis, size=6)
        chosen = alone.points if points is None else points[[checker.inputs.index(p) for p in alone.inputs]]
        try:
            alone.evaluate(chosen if shape is None else chosen[:, :6].reshape(-1, *shape))
            for column in chosen.T:
                alone.evaluate([np.float64(x) for x in column])
        except Exception:
            return name
    return "?"


# -- physics -------------------------------------------------------------------------------------------------


def rephasing_changes_nothing(checker, tolerance=1e-12):
    """Random phases on rows and columns of the matrix move no physical quantity."""
    catalogue = checker.catalogue
    if not all(element in catalogue for element in ELEMENTS):
        return []
    size = checker.points.shape[1]
    rows = checker.rng.uniform(0, 2 * np.pi, (3, 1, size))
    columns = checker.rng.uniform(0, 2 * np.pi, (1, 3, size))
    phases = np.exp(1j * (rows + columns)).reshape(9, size)
    at = dict(zip(checker.inputs, checker.points, strict=True))
    plain = catalogue.compute(ELEMENTS, at, checker.hypothesis)
    turned = {element: plain[element] * phase for element, phase in zip(ELEMENTS, phases, strict=True)}
    physical = [name for name in checker.names if catalogue[name].physical and name not in ELEMENTS]
    before = catalogue.compute(physical, at, checker.hypothesis, overrides=plain)
    after = catalogue.compute(physical, at, checker.hypothesis, overrides=turned)
    faults = []
    for name in physical:
        moved = np.abs(checker.difference(name, after[name], before[name])) / checker.size_of(
            name, before[name]
        )
        if not np.all(moved <= tolerance * CANCELLATION.get(name, 1.0)):
            faults.append(
                f"{name}: moves by {np.max(moved):.1e} of itself when the quark fields are rephased"
            )
    return faults


def cp_parity_is_as_declared(checker, tolerance=1e-12):
    """Flipping eta-bar and every other CP-odd parameter does what `cp` declares."""
    odd = np.array([-1.0 if leaf.cp_odd else 1.0 for leaf in checker.parameters.values()])
    before, after = checker.values, checker.evaluate(odd[:, None] * checker.points)
    expected = {
        "even": lambda x: x,
        "odd": lambda x: -x,
        "conjugate": np.conjugate,
    }
    faults = []
    for name in checker.names:
        parity = checker.catalogue[name].cp
        if parity not in expected and parity not in before:
            continue  # the partner is not among the names that are checked
        wanted = expected[parity](before[name]) if parity in expected else before[parity]
        moved = np.abs(checker.difference(name, after[name], wanted)) / checker.size_of(name, wanted)
        moved = np.where((after[name] == 0) & (wanted == 0), 0.0, moved)
        if not np.all(moved <= tolerance):
            faults.append(f"{name}: declared {parity!r} under CP, but off by {np.max(moved):.1e} of itself")
    return faults


# -- declarations --------------------------------------------------------------------------------------------


def unit_is_known(catalogue):
    """The unit is one that an inputs file can convert to and from."""
    faults = []
    for name in catalogue.names():
        unit = catalogue[name].unit
        try:
            units.factor(unit, "1e-30")
        except units.UnitError as error:
            if "cannot be converted" not in str(error):
                faults.append(f"{name}: {error}")
        if unit != unit.strip() or not unit:
            faults.append(f"{name}: unit {unit!r}")
    return _first_of_each(faults)


def periods_fit_units(catalogue):
    """An angle's period is 360 or 180 degrees, or that in radians; nothing else has one."""
    allowed = {"deg": (180.0, 360.0), "rad": (math.pi, 2 * math.pi)}
    return [
        f"{name}: period {node.period} in {node.unit!r}"
        for name, node in ((name, catalogue[name]) for name in catalogue.names())
        if node.period is not None and node.period not in allowed.get(node.unit, ())
    ]


def source_is_stated(catalogue):
    """The source says who and where: some words and a year, volume, identifier or edition."""
    faults = []
    for name in catalogue.names():
        source = catalogue[name].source.strip()
        words = [word for word in source.split() if any(c.isalpha() for c in word)]
        if len(source) < 10 or len(words) < 2:
            faults.append(f"{name}: source {source!r}")
    return faults


def title_is_stated(catalogue):
    """The title says in words what the name abbreviates."""
    faults = []
    for name in (*catalogue.names("quantity"), *catalogue.names("parameter")):
        title = catalogue[name].title.strip()
        if len(title) < 4 or not any(c.isalpha() for c in title) or title in (name, name.replace("_", " ")):
            faults.append(f"{name}: title {title!r}")
    return faults


# -- derivatives ---------------------------------------------------------------------------------------------


def derivatives_are_exact(checker, points=6, tolerance=1e-8):
    """Forward derivatives equal central differences of eighth order for every parameter, and values are unchanged.

    The differences are good to about 1e-13 of (value / step) at steps of one per cent, which is what the tolerance
    allows for cancellation: 1e-8 of the derivative plus 1e-11 of value / step. Where a quantity does not rest on a
    parameter both must be exactly zero.
    """
    base = checker.points[:, :points]
    n = len(base)
    try:
        # No way out into differences here: the catalogue's own formulas have to be differentiable.
        duals = checker.graph.evaluate(seed(base), lambda function, arguments: function(*arguments))
    except (TypeError, AttributeError):
        return [
            f"{name}: not made of differentiable operations ({error})"
            for name in checker.names
            if (error := _undifferentiable(checker, name)) is not None
        ]
    scales = np.array([leaf.scale for leaf in checker.parameters.values()])
    steps = np.maximum(0.01 * np.abs(base), scales[:, None])
    if any(name in checker.inputs for name in WOLFENSTEIN):
        small = [i for i, name in enumerate(checker.inputs) if name in WOLFENSTEIN]
        steps[small] = 2e-3
    # shape (n inputs, offset, n moved, points)
    offsets = [sign * k for k in STENCIL for sign in (1, -1)]
    moved = np.broadcast_to(base[:, None, None, :], (n, len(offsets), n, points)).copy()
    for i in range(n):
        for j, offset in enumerate(offsets):
            moved[i, j, i] += offset * steps[i]
    shifted = checker.evaluate(moved.reshape(n, -1))
    plain = checker.evaluate(base)
    faults = []
    everything = tuple(range(n))
    for name, dual in zip(checker.names, duals, strict=True):
        value = np.broadcast_to(getattr(dual, "value", dual), (points,))
        if not np.array_equal(value, plain[name], equal_nan=True):
            faults.append(f"{name}: carrying derivatives changes its value")
            continue
        exact = tangents_of(dual, everything, points)
        gaps = checker.difference(name, shifted[name].reshape(len(offsets), n, points), plain[name])
        weights = np.array([math.copysign(STENCIL[abs(o)], STENCIL[abs(o)] * o) for o in offsets])
        numeric = np.tensordot(weights, gaps, axes=1) / steps
        allowed = tolerance * np.abs(exact) + 1e-11 * np.abs(plain[name]) / steps
        unused = np.array([i not in checker.graph.supports[name] for i in range(n)])
        wrong = ~(np.abs(exact - numeric) <= allowed)
        wrong[unused] |= (gaps != 0).any(axis=0)[unused] | (exact != 0)[unused]
        if wrong.any():
            i, j = np.argwhere(wrong)[0]
            faults.append(
                f"{name}: derivative with respect to {checker.inputs[i]} is {exact[i, j]!r}, "
                f"differences say {numeric[i, j]!r}"
            )
    return faults


def _undifferentiable(checker, name):
    alone = Checker(checker.catalogue, [name], checker.hypothesis, size=2)
    try:
        alone.graph.evaluate(seed(alone.points), lambda function, arguments: function(*arguments))
    except (TypeError, AttributeError) as error:
        return error
    return None


def fallback_agrees(checker, points=3):
    """`call_with_derivatives` gives the same as the bare formulas on derivative-carrying arrays."""
    base = checker.points[:, :points]
    with_fallback = checker.graph.evaluate(seed(base), call_with_derivatives)
    bare = checker.graph.evaluate(seed(base), lambda function, arguments: function(*arguments))
    return [
        f"{name}: the safe call differs from the plain one"
        for name, left, right in zip(checker.names, with_fallback, bare, strict=True)
        if isinstance(left, Dual) != isinstance(right, Dual)
        or (isinstance(left, Dual) and not np.array_equal(left.tangents, right.tangents, equal_nan=True))
    ]


CHECKS_OF_VALUES = (
    batch_is_point_by_point,
    scalars_agree,
    leading_shapes_are_kept,
    values_are_finite,
    types_are_as_declared,
    nothing_raises,
    rephasing_changes_nothing,
    cp_parity_is_as_declared,
    derivatives_are_exact,
)
CHECKS_OF_DECLARATIONS = (unit_is_known, periods_fit_units, source_is_stated, title_is_stated)
