"""Indirect determinations: what everything else says about a quantity, and how far its own measurement is off."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fitcore.minimise.minima import distinct_minima, find_minima, start_points
from fitcore.studies.determined import is_determined
from observables.errors import ConvergenceError, InputError, UnknownNameError

__all__ = ["IndirectResult", "IndirectRow", "indirect", "measured_quantities"]

#: Delta chi2 of the 68.27 % and 95.0 % intervals of one quantity.
LEVELS = (1.0, 3.841458820694124)
#: Delta chi2 up to which a combination of entries with flat ranges counts as equally good.
FLAT_TO = 1e-3


@dataclass(frozen=True)
class IndirectRow:
    """A quantity as everything else implies it, beside its own measurement.

    Attributes
    ----------
    quantity, unit : str
    value : float or None
        Implied by everything else; None when nothing else determines it.
    interval_68, interval_95 : (float, float) or None
        Delta chi2 = 1.000 and 3.841, profiled; infinite where nothing bounds the quantity.
    direct, direct_error : float, (float, float), or None
        Own measurement (combined, where there are several) with its (plus, minus) error.
    tension : float or None
        sqrt(chi2(all) - chi2(without) - chi2(own alone)) with the sign of direct minus indirect; one degree of
        freedom.
    left_out : tuple of str
        Ids that were left out: its own entries and those that overlap with them.
    flags : tuple of str
        ``undetermined`` (nothing else determines it), ``direct-is-a-range`` (its entry is a flat range: no tension),
        ``overlap-left-out``, ``several-minima`` (another one within Delta chi2 3.84), ``open-interval``,
        ``interval-not-found``, ``not-converged``.
    """

    quantity: str
    unit: str
    value: float | None = None
    interval_68: tuple[float, float] | None = None
    interval_95: tuple[float, float] | None = None
    direct: float | None = None
    direct_error: tuple[float, float] | None = None
    tension: float | None = None
    left_out: tuple[str, ...] = ()
    flags: tuple[str, ...] = ()


@dataclass(frozen=True)
class IndirectResult:
    """All rows asked for, and the chi-square of the fit to everything."""

    chi2: float
    rows: tuple[IndirectRow, ...] = field(default_factory=tuple)

    def to_dict(self) -> dict[str, Any]:
        """Plain data with the documented keys."""
        return {
            "chi2": self.chi2,
            "quantities": {
                row.quantity: {
                    "value": row.value,
                    "interval_68": _listed(row.interval_68),
                    "interval_95": _listed(row.interval_95),
                    "direct": row.direct,
                    "direct_error": _symmetric(row.direct_error),
                    "tension": row.tension,
                    "unit": row.unit,
                    "left_out": list(row.left_out),
                    "flags": list(row.flags),
                }
                for row in self.rows
            },
        }


def indirect(
    problem: Any,
    names: Iterable[str] | None = None,
    *,
    starts: int = 32,
    rng: np.random.Generator | int | None = 0,
    progress: Callable[[int, int], None] | None = None,
) -> IndirectResult:
    """Indirect values, intervals and tensions.

    Parameters
    ----------
    problem : Problem
    names : iterable of str, optional
        Quantities; by default all that have an entry of kind "experiment".
    starts : int
        Starts of each refit's search for minima, besides the minima of the full fit.
    rng : Generator or seed
    progress : callable, optional
        Called with (done, total).

    Returns
    -------
    IndirectResult

    Raises
    ------
    ConvergenceError
        The fit to everything has no converged minimum.
    InputError, UnknownNameError
        A name that nothing in the problem determines.

    Notes
    -----
    The tension is a profile likelihood ratio and asymptotic (Wilks). Entries correlated with those left out stay in:
    the ratio respects the correlation, because the full chi-square has it.
    """
    full = find_minima(problem, size=2 * starts, rng=rng)
    if not full or not full[0].converged:
        raise ConvergenceError("the fit to all inputs has no converged minimum; see weakmix fit", full)
    wanted = tuple(names) if names is not None else measured_quantities(problem)
    for name in wanted:
        if not problem.determines(name):
            if name not in {e.quantity for e in problem.entries}:
                problem.linearise_quantities(problem.start, [name])  # raises with the reason
            raise InputError(f"{name!r} cannot be computed in this problem")
    known = np.array([m.theta for m in full])
    rows = []
    for done, name in enumerate(wanted):
        if progress is not None:
            progress(done, len(wanted))
        rows.append(_one(problem, name, full[0].chi2, known, starts, rng))
    if progress is not None:
        progress(len(wanted), len(wanted))
    return IndirectResult(full[0].chi2, tuple(rows))


def measured_quantities(problem: Any) -> tuple[str, ...]:
    """Quantities with an entry of kind "experiment", in the order of the inputs."""
    return tuple(dict.fromkeys(e.quantity for e in problem.entries if e.kind == "experiment"))


def _one(problem: Any, name: str, chi2_all: float, known: np.ndarray, starts: int, rng: Any) -> IndirectRow:
    from fitcore.minimise.batch_solver import minimise_batch
    from fitcore.minimise.profile import profile_intervals

    # with flat theory errors an entry may be a range of its parameter and no term: it is left out like the others
    every = problem.inputs.entries
    own = [entry for entry in every if entry.quantity == name]
    ids = {entry.id for entry in own}
    overlapping = {e.id for e in every if e.id not in ids and (ids & set(e.overlaps))}
    overlapping |= {
        other for entry in own for other in entry.overlaps if other in {e.id for e in every}
    } - ids
    left_out = tuple(sorted(ids | overlapping))
    unit = problem.unit_of(name)
    flags: list[str] = []
    direct, direct_error, chi2_own = None, None, 0.0
    if own and ids <= {entry.id for entry in problem.entries}:
        direct, direct_error, chi2_own = _direct(problem, name)
    elif own:
        flags.append("direct-is-a-range")
    try:
        rest = problem.without(*left_out, keep_free=True) if left_out else problem
        # A free direction would let the quantity run to anything: then nothing else determines it.
        determined = rest.determines(name) and is_determined(rest, _near(rest, known, problem), name)
    except (InputError, UnknownNameError):
        determined = False
    if not determined:
        return IndirectRow(
            name,
            unit,
            direct=direct,
            direct_error=direct_error,
            left_out=left_out,
            flags=(*flags, "undetermined"),
        )
    columns = [problem.parameter_names.index(n) for n in rest.parameter_names if n in problem.parameter_names]
    starting = start_points(rest, starts, rng=rng)
    extra = np.tile(rest.start, (len(known), 1))
    places = [i for i, n in enumerate(rest.parameter_names) if n in problem.parameter_names]
    extra[:, places] = known[:, columns]
    starting = np.concatenate([extra, starting])
    starting = starting[np.isfinite(rest.chi2(starting))]
    found = minimise_batch(rest, starting)
    minima = distinct_minima(rest, found.theta, found.chi2, found.converged, starting)
    best = minima[0]
    if not best.converged:
        flags.append("not-converged")
    if len(minima) > 1 and minima[1].chi2 < best.chi2 + 3.84:
        flags.append("several-minima")
    # Interval ends are found from the minimum: the closer, the closer they are.
    theta, chi2_rest = minimise_batch(rest, best.theta[None], tolerance=1e-15).theta[0], best.chi2
    table = profile_intervals(rest, theta, [name], delta_chi2=LEVELS)
    for _ in range(2):
        if table.better_minimum is None:
            break
        # the search for the interval fell into a lower minimum: count from there
        theta, chi2_rest = table.better_minimum, float(rest.chi2(table.better_minimum))
        table = profile_intervals(rest, theta, [name], delta_chi2=LEVELS)
    value = float(rest.values(theta, [name])[name])
    pair = table[name]
    if any(pair[0][2:]):
        flags.append("open-interval")
    if table.flagged:
        flags.append("interval-not-found")
    tension = None
    if direct is not None:
        excess = chi2_all - chi2_rest - chi2_own
        if overlapping:
            flags.append("overlap-left-out")
            excess = _excess_without_overlap(problem, overlapping, chi2_rest, chi2_own, known)
        if excess < -1e-3:  # more data never fit better
            flags.append("not-converged")
        difference = direct - value
        if (period := problem.period_of(name)) is not None:
            difference -= period * round(difference / period)
        tension = math.copysign(math.sqrt(max(excess, 0.0)), difference)
    return IndirectRow(
        name,
        unit,
        value,
        (float(pair[0][0]), float(pair[0][1])),
        (float(pair[1][0]), float(pair[1][1])),
        direct,
        direct_error,
        tension,
        left_out,
        tuple(flags),
    )


def _near(rest: Any, known: np.ndarray, problem: Any) -> np.ndarray:
    """Best fit of everything, as a point of the problem without some entries."""
    theta = np.array(rest.start)
    for i, parameter in enumerate(rest.parameter_names):
        if parameter in problem.parameter_names:
            theta[i] = known[0][problem.parameter_names.index(parameter)]
    return theta


def _excess_without_overlap(
    problem: Any, overlapping: set[str], chi2_rest: float, chi2_own: float, known: np.ndarray
) -> float:
    """chi2(everything but the overlapping entries) - chi2(rest) - chi2(own alone)."""
    from fitcore.minimise.batch_solver import minimise_batch

    reduced = problem.without(*sorted(overlapping), keep_free=True)
    starting = np.tile(reduced.start, (len(known), 1))
    for i, parameter in enumerate(reduced.parameter_names):
        if parameter in problem.parameter_names:
            starting[:, i] = known[:, problem.parameter_names.index(parameter)]
    return float(minimise_batch(reduced, starting).chi2.min()) - chi2_rest - chi2_own


def _direct(problem: Any, name: str) -> tuple[float, tuple[float, float], float]:
    """Own entries combined: value, (plus, minus) at Delta chi2 = 1, and their chi-square at the combination.

    Flat ranges of the entries count: within them a measured value costs nothing, and the combination is the middle of
    what fits best.
    """
    places = [i for i, entry in enumerate(problem.entries) if entry.quantity == name]
    entries = [problem.entries[i] for i in places]
    halves = np.array([problem.ranges.get(entry.id, 0.0) for entry in entries])
    if len(entries) == 1:
        half = float(halves[0])
        return entries[0].value, (entries[0].plus + half, entries[0].minus + half), 0.0

    from scipy.optimize import brentq, minimize_scalar

    chi2_at = _own_chi2(problem.terms, places, halves)
    centre = np.array([e.value for e in entries])
    if (period := problem.period_of(name)) is not None:  # the images nearest to the first
        centre -= period * np.rint((centre - centre[0]) / period)
    reach = float(max(max(e.plus, e.minus) for e in entries) + halves.max())
    bounds = (float(centre.min()) - reach, float(centre.max()) + reach)
    best = minimize_scalar(chi2_at, bounds=bounds, method="bounded", options={"xatol": 1e-10 * reach})
    value, lowest = float(best.x), float(best.fun)

    def crossing(sign: float, level: float) -> float:
        edge = value + sign * reach
        while chi2_at(edge) < lowest + level:
            edge += sign * reach
        return float(brentq(lambda v: chi2_at(v) - lowest - level, value, edge))

    low, high = crossing(-1.0, 1.0), crossing(1.0, 1.0)
    if halves.any():
        value = 0.5 * (crossing(-1.0, FLAT_TO) + crossing(1.0, FLAT_TO))
    return value, (high - value, value - low), lowest


def _own_chi2(terms: Any, places: list[int], halves: np.ndarray) -> Callable[[float], float]:
    """chi-square of some entries alone, as a function of the one value that they measure: their correlations among
    themselves, without those to others, and with the best shift of each inside its flat range."""
    root = np.linalg.cholesky(terms.correlation[np.ix_(places, places)])
    ranged = np.flatnonzero(halves)

    def whitened(value: float, shifts: np.ndarray) -> np.ndarray:
        predicted = terms.values.copy()
        predicted[places] = value
        predicted[np.array(places)[ranged]] += shifts
        return np.asarray(np.linalg.solve(root, terms.standardised(predicted[:, None])[places, 0]))

    def chi2_at(value: float) -> float:
        if not ranged.size:
            return float(np.sum(whitened(value, np.zeros(0)) ** 2))
        from scipy.optimize import least_squares

        # in units of the ranges; whitened residuals of one quantity are smooth in them
        width = halves[ranged]
        found = least_squares(
            lambda s: whitened(value, s * width),
            np.zeros(ranged.size),
            bounds=(-1.0, 1.0),
            xtol=1e-12,
            ftol=1e-12,
            gtol=1e-12,
        )
        return float(2.0 * found.cost)

    return chi2_at


def _listed(pair: tuple[float, float] | None) -> list[float | None] | None:
    return None if pair is None else [x if math.isfinite(x) else None for x in pair]


def _symmetric(pair: tuple[float, float] | None) -> Any:
    if pair is None:
        return None
    return pair[0] if pair[0] == pair[1] else list(pair)
