"""Which entries make a constraint of their own on one or two quantities, each with the inputs that it needs.

A problem's entries fall into parts, seen from a frame in one or two quantities (for instance the neighbourhood of
the apex of the unitarity triangle). Entries of one quantity that changes visibly over the frame *speak*: they make
one constraint. Theory inputs and other measured nuisance parameters *serve*: each constraint takes those that it
depends on. The remaining entries, which hardly change over the frame, *fix* the directions that the frame does not
show (lambda and A, seen from the apex). They hardly change, but they do; so that no band is bent by them, a constraint
takes from them only what they say about those directions with the two quantities held at the best fit, as a Gaussian
in the parameters that it needs. A fixing entry that owes most of its theory uncertainty to the same inputs as a
speaking quantity cancels that uncertainty when both are taken together: that pair is a constraint as well (the ratio
of two oscillation frequencies is known better than either), and it fixes nothing.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.held_quantities import HeldQuantities
from fitcore.minimise.profile import Profile, profile
from fitcore.minimise.uncertainty import curvature_at

__all__ = ["Constraint", "Division", "Held", "divide", "problem_of", "profile_constraint"]

#: A quantity speaks when its prediction moves by so many of its uncertainties over half the frame.
SPEAKS = 0.6
#: Shared part of the theory variance (as a correlation) from which two quantities make a pair.
SHARED = 0.5
#: Frames that a parameter may leave along the direction in which the frame itself is crossed, before it feels its hold.
FREE_FRAMES = 100.0
#: Error, in scales of a parameter, with which it is as good as free.
FREE_SCALES = 1000.0
#: Eigenvalues of the normalised information matrix below this count as zero.
NOTHING = 1e-10


@dataclass(frozen=True)
class Held:
    """What the fixing entries say about a parameter.

    Attributes
    ----------
    parameter : str
    value : float
        With the quantities of the frame at the best fit.
    sources : tuple of float
        Signed errors from independent sources, the same ones for all parameters: their products sum to the covariance.
    across : bool
        Whether the parameter changes across the frame, so that it is free along that direction.
    """

    parameter: str
    value: float
    sources: tuple[float, ...]
    across: bool = False

    @property
    def error(self) -> float:
        """Standard deviation."""
        return math.hypot(*self.sources)


@dataclass(frozen=True)
class Constraint:
    """Entries that constrain the frame together.

    Attributes
    ----------
    quantities : tuple of str
        One, or two for a pair that shares theory uncertainties.
    entries : tuple of str
        Their ids.
    company : tuple of str
        Ids of the entries that go with them: the inputs needed.
    held : tuple of Held
        Parameters needed that the fixing entries know.
    groups : tuple of str
        Groups of the entries.
    chi2 : float
        Contribution of the entries to chi-square at the best fit of everything (for a pair: of the first quantity).
    """

    quantities: tuple[str, ...]
    entries: tuple[str, ...]
    company: tuple[str, ...]
    held: tuple[Held, ...]
    groups: tuple[str, ...]
    chi2: float

    @property
    def name(self) -> str:
        """Quantities joined by a plus sign."""
        return "+".join(self.quantities)


@dataclass(frozen=True)
class Division:
    """How a problem divides.

    Attributes
    ----------
    constraints : tuple of Constraint
    fixing : tuple of str
        Ids of the entries that fix the directions which the frame does not show.
    held : tuple of Held
        What they say about the parameters that any constraint needs.
    chi2 : float
        Of the best fit of everything.
    """

    constraints: tuple[Constraint, ...]
    fixing: tuple[str, ...]
    held: tuple[Held, ...]
    chi2: float


def divide(problem: Any, theta: np.ndarray, names: Sequence[str], half_widths: Sequence[float]) -> Division:
    """Divide the entries of a problem into constraints on one or two quantities.

    Parameters
    ----------
    problem : Problem
    theta : array, shape (n,)
        The best fit.
    names : sequence of str
        One or two parameters or real quantities.
    half_widths : sequence of float
        Half the size of the frame in each.

    Returns
    -------
    Division
    """
    theta = np.asarray(theta, dtype=float)
    # not those of the problem: with flat theory errors an input is a range there and no entry
    entries = problem.inputs.entries
    quantities = tuple(dict.fromkeys(entry.quantity for entry in entries))
    _, slopes = problem.linearise_quantities(theta, quantities)
    slope = dict(zip(quantities, np.nan_to_num(slopes), strict=True))
    _, axes = problem.linearise_quantities(theta, names)
    members = {q: [i for i, entry in enumerate(entries) if entry.quantity == q] for q in quantities}
    axis_names = set(names)

    def serves(quantity: str) -> bool:
        theory = all(entries[i].kind == "theory" for i in members[quantity])
        leaf = quantity in problem.parameter_names and quantity not in axis_names
        return theory or (leaf and not _moves(axes, problem.parameter_names.index(quantity)))

    serving = [q for q in quantities if serves(q)]
    measured = [q for q in quantities if q not in serving]
    # (k, n): uncertainty of every serving input as a step of the parameters
    place = {q: problem.parameter_names.index(q) for q in serving if q in problem.parameter_names}
    spread = {q: _combined_error(entries, members[q]) for q in quantities}

    def theory_part(quantity: str) -> np.ndarray:
        return np.array([slope[quantity][at] * spread[s] for s, at in place.items()])

    moves = _moves_of_frame(problem, theta, axes, half_widths)
    speaking = []
    for q in measured:
        uncertainty = math.hypot(spread[q], float(np.linalg.norm(theory_part(q))))
        if np.linalg.norm(moves @ slope[q]) > SPEAKS * uncertainty:
            speaking.append(q)
    quiet = [q for q in measured if q not in speaking]
    partners = {
        q: [p for p in quiet if _share_of_theory(theory_part(q), theory_part(p), spread[q], spread[p])]
        for q in speaking
    }
    fixing = [q for q in quiet if not any(q in some for some in partners.values())]

    def needed(of: Sequence[str]) -> list[str]:
        """Serving inputs of quantities, and those of these inputs' own ingredients."""
        support = np.any([slope[q] != 0.0 for q in of], axis=0) if of else np.zeros(theta.size, dtype=bool)
        taken: list[str] = []
        while more := [s for s in serving if s not in taken and (support & (slope[s] != 0.0)).any()]:
            taken += more
            support = support | np.any([slope[s] != 0.0 for s in more], axis=0)
        return taken

    def ids(of: Sequence[str]) -> tuple[str, ...]:
        return tuple(entries[i].id for i in sorted(i for q in of for i in members[q]))

    held: tuple[Held, ...] = ()
    if fixing:
        theory = {s for s in place if all(entries[i].kind == "theory" for i in members[s])}
        wanted = np.any([slope[q] != 0.0 for q in (*speaking, *needed(speaking))], axis=0) if speaking else []
        parameters = [
            p
            for p, asked in zip(problem.parameter_names, wanted, strict=False)
            if asked and p not in theory and p not in axis_names
        ]
        held = _hold(problem, theta, names, moves, ids((*fixing, *needed(fixing))), parameters)
    known = {h.parameter for h in held}
    share = dict(zip((entry.id for entry in problem.entries), _shares(problem, theta), strict=True))

    def make(*of: str) -> Constraint:
        # what is held knows the measurements of that parameter already
        served = [s for s in needed(of) if s not in known]
        support = np.any([slope[q] != 0.0 for q in (*of, *served)], axis=0)
        used = tuple(h for h in held if support[problem.parameter_names.index(h.parameter)])
        own = [entries[i] for q in of for i in members[q]]
        groups = dict.fromkeys(g for entry in own for g in entry.groups)
        chi2 = float(sum(share.get(entries[i].id, 0.0) for i in members[of[0]]))
        return Constraint(of, tuple(e.id for e in own), ids(served), used, tuple(groups), chi2)

    constraints = []
    for q in speaking:
        constraints.append(make(q))
        if partners[q]:
            constraints.append(make(q, *partners[q]))
    fixing_ids = tuple(entries[i].id for q in fixing for i in members[q])
    return Division(tuple(constraints), fixing_ids, held, float(problem.chi2(theta)))


def _hold(
    problem: Any,
    theta: np.ndarray,
    names: Sequence[str],
    moves: np.ndarray,
    company: Sequence[str],
    parameters: Sequence[str],
) -> tuple[Held, ...]:
    """What some entries say about parameters while the quantities of the frame stay at the best fit.

    Notes
    -----
    The information matrix J^T J of the entries, without the directions that lead across the frame, is inverted and
    restricted to the parameters: their covariance with everything else left free. Along the directions across the
    frame the parameters stay free. Flat theory errors count as Gaussian here.
    """
    reduced = problem.only(*company)
    full = list(problem.parameter_names)
    at = [full.index(name) for name in reduced.parameter_names if name in full]
    start = np.array([theta[full.index(n)] if n in full else s for n, s in _starts(reduced)])
    if all(name in reduced.parameter_names or reduced.determines(name) for name in names):
        best, _ = problem.linearise_quantities(theta, names)
        found = HeldQuantities(reduced, names).solve(best[None], start[None], tolerance=1e-8)
        start = found.theta[0] if found.good[0] else start
    else:  # these entries know nothing of the frame: nothing to hold
        found_free = minimise_batch(reduced, start[None], tolerance=1e-8)
        start = found_free.theta[0] if found_free.converged[0] else start
    centre = dict(zip(reduced.parameter_names, start, strict=True))

    jacobian = np.zeros((reduced.n_entries, theta.size))
    own = [k for k, name in enumerate(reduced.parameter_names) if name in full]
    jacobian[:, at] = np.nan_to_num(reduced.jacobian(start))[:, own]
    _, axes = problem.linearise_quantities(theta, names)
    before = np.linalg.norm(jacobian, axis=0)
    jacobian = jacobian - (jacobian @ moves.T) @ np.linalg.solve(axes @ moves.T, axes)
    norm = np.linalg.norm(jacobian, axis=0)
    norm = np.where(
        norm > 1e-9 * before, norm, 0.0
    )  # what is left of a parameter that is an axis is rounding
    unit = 1.0 / np.where(norm > 0.0, norm, np.inf)
    values, vectors = np.linalg.eigh((jacobian * unit).T @ (jacobian * unit))
    strong = values > NOTHING
    across = moves / np.array([p.scale for p in problem.parameters])
    loose = (np.abs(vectors[:, ~strong] * (norm > 0.0)[:, None]) > 1e-3).any(axis=1)
    loose &= ~(np.abs(across) > 1e-9).any(axis=0)
    rows = [full.index(p) for p in parameters if norm[full.index(p)] > 0.0 and not loose[full.index(p)]]
    spread = (vectors[:, strong] / np.sqrt(values[strong]))[rows] * unit[rows][:, None]
    spread = np.hstack([spread, FREE_FRAMES * moves[:, rows].T])
    # as few sources as parameters: the triangular factor
    factor = np.asarray(np.linalg.qr(spread.T, mode="r")).T if rows else spread
    crossed = (np.abs(across) > 1e-9).any(axis=0)
    return tuple(
        Held(full[row], float(centre[full[row]]), tuple(float(v) for v in factor[k]), bool(crossed[row]))
        for k, row in enumerate(rows)
    )


def _starts(problem: Any) -> list[tuple[str, float]]:
    return [(p.name, float(p.start)) for p in problem.parameters]


def problem_of(problem: Any, constraint: Constraint) -> Any:
    """The problem of one constraint: its entries, the inputs that serve it, and what is held as measurements.

    Parameters
    ----------
    problem : Problem
        The one that was divided.
    constraint : Constraint
    """
    inputs = problem.inputs.select(only=(*constraint.entries, *constraint.company))
    pattern = inputs.entries[0]
    extra = []
    for held in constraint.held:
        errors = {f"fixing {k}": error for k, error in enumerate(held.sources) if error}
        entry = replace(
            pattern,
            id=f"fixing:{held.parameter}",
            quantity=held.parameter,
            value=held.value,
            plus=held.error,
            minus=held.error,
            errors=errors,
            flat_halfwidth=0.0,
            kind="experiment",
            groups=(),
            inflate=1.0,
            inflate_group=None,
            overlaps=(),
            block=None,
            unit=problem.unit_of(held.parameter),
            period=problem.period_of(held.parameter),
        )
        declared = replace(
            pattern.declared, value=held.value, error=None, errors=errors, flat_halfwidth=0.0, unit=entry.unit
        )
        extra.append(replace(entry, declared=declared))
    return problem.with_inputs(replace(inputs, entries=(*inputs.entries, *extra)))


def profile_constraint(
    problem: Any,
    constraint: Constraint,
    names: Sequence[str],
    frames: Sequence[Sequence[np.ndarray]],
    theta: np.ndarray,
) -> list[Profile]:
    """Profile one constraint alone, with its company, on one or more grids.

    Parameters
    ----------
    problem : Problem
        The one that was divided.
    constraint : Constraint
    names : sequence of str
    frames : sequence of grids
        Each as `profile` takes them.
    theta : array, shape (n,)
        Best fit of everything: where the search starts.

    Returns
    -------
    list of Profile
        One per frame; empty when these entries alone do not determine the quantities. Their `minimum` is the lowest
        chi-square known anywhere, also outside the frame.
    """
    alone = problem_of(problem, _reaching(problem, constraint, names, theta))
    if not all(alone.determines(name) for name in names):
        return []
    known = dict(zip(problem.parameter_names, np.asarray(theta, dtype=float), strict=True))
    start = np.array([known.get(name, value) for name, value in _starts(alone)])
    near = minimise_batch(alone, start[None])
    return [profile(alone, names, grids, start=near.theta[0]) for grids in frames]


def _reaching(problem: Any, constraint: Constraint, names: Sequence[str], theta: np.ndarray) -> Constraint:
    """The constraint with parameters that only the quantities of the frame need, practically free."""
    alone = problem_of(problem, constraint)
    if all(alone.determines(name) for name in names):
        return constraint
    _, slopes = problem.linearise_quantities(np.asarray(theta, dtype=float), names)
    extra = tuple(
        Held(
            p.name,
            float(theta[k]),
            (*[0.0] * (len(constraint.held) + number), FREE_SCALES * p.scale),
            across=True,
        )
        for number, (k, p) in enumerate(
            (k, p)
            for k, p in enumerate(problem.parameters)
            if slopes[:, k].any() and p.name not in alone.parameter_names
        )
    )
    return replace(constraint, held=(*constraint.held, *extra))


def _moves(axes: np.ndarray, parameter: int) -> bool:
    return bool((axes[:, parameter] != 0.0).any())


def _combined_error(entries: Sequence[Any], places: Sequence[int]) -> float:
    """Error of the average of the entries, correlations neglected: good enough to sort by."""
    weight = sum(1.0 / (entries[i].plus * entries[i].minus) for i in places)
    return 1.0 / math.sqrt(weight)


def _moves_of_frame(
    problem: Any, theta: np.ndarray, axes: np.ndarray, half_widths: Sequence[float]
) -> np.ndarray:
    """Steps of the parameters (one per axis) that lead to the edge of the frame.

    Where a quantity can be moved by several parameters, those move that are known worst relative to their size: the
    step is shortest in units of sigma^2 / |value|.
    """
    covariance = curvature_at(problem, theta).covariance
    scales = np.array([p.scale for p in problem.parameters])
    variance = np.diagonal(covariance)
    variance = np.where(variance > 0.0, variance, scales**2)
    metric = variance**2 / np.maximum(theta**2, variance)
    inner = (axes * metric) @ axes.T
    steps = metric[:, None] * axes.T @ np.linalg.pinv(inner, hermitian=True)
    return np.asarray((steps * np.asarray(half_widths)).T)


def _share_of_theory(first: np.ndarray, second: np.ndarray, error_1: float, error_2: float) -> bool:
    """Whether two predictions move together with their common inputs, visibly against the measured errors."""
    if not first.size:
        return False
    total = math.hypot(float(np.linalg.norm(first)), error_1) * math.hypot(
        float(np.linalg.norm(second)), error_2
    )
    return total > 0.0 and abs(float(first @ second)) > SHARED * total


def _shares(problem: Any, theta: np.ndarray) -> np.ndarray:
    """Contribution of every entry to chi-square: u_i (R^-1 u)_i, which add up to the whole."""
    terms = getattr(problem, "terms", None)
    if terms is None:
        return np.asarray(problem.residuals(theta)) ** 2
    u = np.asarray(terms.standardised(np.asarray(problem.predictions(theta))[:, None]))[:, 0]
    return np.asarray(u * np.linalg.solve(np.asarray(terms.correlation), u))
