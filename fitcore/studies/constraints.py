"""Which entries make a constraint of their own on one or two quantities, each with the inputs that it needs.

A problem's entries fall into parts, seen from a frame in one or two quantities (for instance the neighbourhood of
the apex of the unitarity triangle). Entries of one quantity that changes visibly over the frame *speak*: they make
one constraint. Theory inputs and other measured nuisance parameters *serve*: each constraint takes those that it
depends on. The remaining entries, which hardly change over the frame, fix the directions that the frame does not show
and accompany every constraint. One of them that owes most of its theory uncertainty to the same inputs as a speaking
quantity cancels that uncertainty when both are taken together: that pair is a constraint as well (the ratio of two
oscillation frequencies is known better than either).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import Profile, profile
from fitcore.minimise.uncertainty import curvature_at

__all__ = ["Constraint", "Division", "divide", "profile_constraint"]

#: A quantity speaks when its prediction moves by so many of its uncertainties over half the frame.
SPEAKS = 0.6
#: Shared part of the theory variance (as a correlation) from which two quantities make a pair.
SHARED = 0.5


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
        Ids of the entries that go with them: those that fix the other directions, and the inputs needed.
    groups : tuple of str
        Groups of the entries.
    chi2 : float
        Contribution of the entries to chi-square at the best fit of everything (for a pair: of the first quantity).
    """

    quantities: tuple[str, ...]
    entries: tuple[str, ...]
    company: tuple[str, ...]
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
        Ids of the entries that accompany every constraint.
    chi2 : float
        Of the best fit of everything.
    """

    constraints: tuple[Constraint, ...]
    fixing: tuple[str, ...]
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
    fixing = [q for q in measured if q not in speaking]

    def needed(of: Sequence[str]) -> list[str]:
        support = np.any([slope[q] != 0.0 for q in (*of, *fixing)], axis=0)
        return [s for s in serving if (support & (slope[s] != 0.0)).any()]

    share = dict(zip((entry.id for entry in problem.entries), _shares(problem, theta), strict=True))

    def make(*of: str) -> Constraint:
        own = [i for q in of for i in members[q]]
        company = [i for q in (*fixing, *needed(of)) for i in members[q] if i not in own]
        groups = dict.fromkeys(g for i in own for g in entries[i].groups)
        chi2 = float(sum(share.get(entries[i].id, 0.0) for i in members[of[0]]))
        ids = tuple(entries[i].id for i in own)
        return Constraint(of, ids, tuple(entries[i].id for i in sorted(company)), tuple(groups), chi2)

    constraints = []
    for q in speaking:
        partners = [
            p for p in fixing if _share_of_theory(theory_part(q), theory_part(p), spread[q], spread[p])
        ]
        own = make(q)
        # alone means alone: the partner does not sneak in among the entries that fix the rest
        absent = {entries[i].id for p in partners for i in members[p]}
        company = tuple(i for i in own.company if i not in absent)
        constraints.append(Constraint(own.quantities, own.entries, company, own.groups, own.chi2))
        if partners:
            constraints.append(make(q, *partners))
    fixing_ids = tuple(entries[i].id for q in fixing for i in members[q])
    return Division(tuple(constraints), fixing_ids, float(problem.chi2(theta)))


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
    alone = problem.only(*constraint.entries, *constraint.company)
    if not all(alone.determines(name) for name in names):
        return []
    start = np.array(alone.start)
    known = dict(zip(problem.parameter_names, np.asarray(theta, dtype=float), strict=True))
    for k, parameter in enumerate(alone.parameter_names):
        start[k] = known.get(parameter, start[k])
    near = minimise_batch(alone, start[None])
    # alone, a constraint is often better met far away: a profile that learns so on its way would start anew
    seeds = [near.theta[0], *(m.theta for m in find_minima(alone, size=16)[:1])]
    seeds.sort(key=lambda theta: float(alone.chi2(theta)))
    return [profile(alone, names, grids, start=seeds[0], minima=seeds[1:]) for grids in frames]


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
