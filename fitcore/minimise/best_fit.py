"""The best fit: multi-start, MIGRAD from its own start, HESSE, intervals, and everything one says about it.

Two minimisers that share no code, the batch solver and MIGRAD, have to agree; a result is valid only then.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from fitcore.minimise.description import (
    LEVELS,
    Notes,
    correlation,
    estimates,
    goodness,
    identity,
    known_covariance,
    measurement_rows,
    named,
    tuples,
)
from fitcore.minimise.minima import Minimum, find_minima
from fitcore.minimise.uncertainty import Curvature, curvature_at, hessian
from fitcore.result import FitResult, OtherMinimum

__all__ = ["DEFAULT_DERIVED", "PROFILED", "fit"]

#: Parameters whose intervals are always found by refitting.
PROFILED = ("wolfenstein_lambda", "wolfenstein_A", "wolfenstein_rhobar", "wolfenstein_etabar")

#: Derived quantities reported when nothing else is asked for, where the inputs determine them.
DEFAULT_DERIVED = (
    "jarlskog",
    *(f"magnitude_V_{up}{down}" for up in "uct" for down in "dsb"),
    "angle_alpha",
    "angle_beta",
    "angle_gamma",
    "angle_beta_s",
    "side_Rb",
    "side_Rt",
)

#: The two minimisers agree when no parameter differs by more than this many of its standard deviations.
AGREEMENT = 1e-3
#: Estimated distance to the minimum, in chi-square, at which MIGRAD has converged.
NEAR_ENOUGH = 1e-5
#: How often a fit starts again from a lower minimum that a profile met.
RESTARTS = 3


def fit(
    problem: Any,
    *,
    derived: Iterable[str] | None = None,
    profile: Iterable[str] | None = None,
    starts: int = 64,
    rng: np.random.Generator | int | None = 0,
) -> FitResult:
    """Find the best fit and describe it.

    Parameters
    ----------
    problem : Problem
    derived : iterable of str, optional
        Derived quantities to report; by default `DEFAULT_DERIVED`, as far as the inputs determine them.
    profile : iterable of str, optional
        Parameters and derived quantities whose intervals are found by refitting everything else, besides the four
        Wolfenstein parameters. Other intervals are propagated linearly and say so.
    starts : int
        Starts of the search for all minima.
    rng : Generator or seed
        Of the starts.

    Returns
    -------
    FitResult
        ``valid`` only when MIGRAD and the batch solver converged to the same point and the curvature there is
        positive. Intervals hold as far as chi-square differences follow a chi-square distribution (Wilks).

    Raises
    ------
    UnknownNameError, InputError
        A derived quantity that does not exist, is complex, or that the inputs do not determine.
    """
    names = (
        tuple(derived) if derived is not None else tuple(n for n in DEFAULT_DERIVED if problem.determines(n))
    )
    asked = tuple(dict.fromkeys(profile or ()))
    names = tuple(dict.fromkeys((*names, *(n for n in asked if n not in problem.parameter_names))))
    if names:  # raises early, before any work is done
        problem.linearise_quantities(problem.start, names)
    lower: list[np.ndarray] = []
    while True:
        notes = Notes()
        result = _fit_once(problem, names, asked, notes, {"size": starts, "rng": rng, "extra": lower})
        if notes.better is None:
            break
        if len(lower) == RESTARTS:
            return replace(result, valid=False)
        lower.append(notes.better)
    if lower:
        flags = (*result.flags, "restarted")
        said = f"a profile met a lower minimum: fitted again from there ({len(lower)} times)"
        result = replace(result, flags=flags, message="; ".join(filter(None, (said, result.message))))
    return result


def _fit_once(
    problem: Any, names: tuple[str, ...], asked: tuple[str, ...], notes: Notes, search: dict[str, Any]
) -> FitResult:
    minima = find_minima(problem, **search) if problem.n_parameters else _only_point(problem)
    if not minima:
        return _failed(
            problem, notes, "no start of the search is a possible point: check bounds and [parameters] starts"
        )
    notes.calls["starts"] = search["size"]

    best = minima[0]
    if not best.converged:
        notes.add("solver-not-converged", "the search for minima did not converge")
    bounded = any(p.is_range for p in problem.parameters)
    if problem.n_parameters:
        found, ok = (_trust_region if bounded else _migrad)(problem, best, minima, notes)
    else:
        found, ok = best.theta, True
    best = _twin(problem, found, minima)
    theta, chi2 = found, float(problem.chi2(found))
    if best.chi2 < chi2:  # the better one is reported, but two that differ are no proof of each other
        theta, chi2 = best.theta, best.chi2
    curvature = curvature_at(problem, theta)
    ok &= _agree(problem, found, best, curvature, notes)
    if not curvature.positive:
        notes.add(
            "curvature-not-positive",
            "the second derivatives at the minimum are not positive: errors are unreliable",
        )
        ok = False
    ok &= best.converged

    wanted = [n for n in PROFILED if n in problem.parameter_names]
    if bounded:  # a parabola knows nothing of ranges: every interval is a profile
        notes.add(
            "flat-ranges",
            "flat theory ranges: intervals are profiles, parabolic errors and the p-value are left out",
        )
        wanted += [p.name for p in problem.parameters if not p.is_range and p.name not in wanted]
        wanted += names
    wanted += [n for n in asked if n not in wanted]
    parameters, derived_estimates = estimates(problem, theta, curvature, names, wanted, notes)
    if curvature.unconstrained.any():
        loose = [n for n, free in zip(problem.parameter_names, curvature.unconstrained, strict=True) if free]
        notes.add("unconstrained", f"the inputs do not constrain {', '.join(loose)}")
        # Points along a valley are no minima of their own.
        minima = [best, *(m for m in minima if m.chi2 > best.chi2 + 1e-3)]
    others = tuple(OtherMinimum(named(problem, m.theta), m.chi2) for m in minima if m is not best)
    if any(m.chi2 < chi2 + LEVELS[1] for m in others):
        notes.add(
            "several-minima",
            "another minimum lies within Delta chi2 = 3.84: intervals belong to the best one only",
        )
    known = known_covariance(problem, curvature)
    return FitResult(
        valid=bool(ok),
        flags=tuple(notes.flags),
        message="; ".join(notes.messages),
        chi2=chi2,
        **goodness(problem, chi2, curvature),
        **identity(problem),
        parameters=parameters,
        derived=derived_estimates,
        measurements=measurement_rows(problem, theta, curvature.covariance),
        parameter_names=problem.parameter_names,
        correlation_names=problem.parameter_names,
        correlation_matrix=tuples(correlation(known)),
        covariance_matrix=tuples(known),
        other_minima=others,
        n_calls=notes.calls,
    )


# -- minimising -----------------------------------------------------------------------------------------------------


def _migrad(problem: Any, best: Minimum, minima: Sequence[Minimum], notes: Notes) -> tuple[np.ndarray, bool]:
    """MIGRAD and HESSE with the exact gradient, from the start of the search, not from where the search ended."""
    from iminuit import Minuit

    scales = np.array([p.scale for p in problem.parameters])
    calls = {"chi2": 0, "gradient": 0, "hessian": 0}
    # At a bound the curvature in MIGRAD's own variables is that of its transformation, which a second derivative in
    # ours does not have: its estimated distance would be that to a minimum beyond the bound.
    on_bound = any(not p.lower < x < p.upper for p, x in zip(problem.parameters, best.theta, strict=True))

    def attempt(start: np.ndarray) -> Minuit:
        def value(x: np.ndarray) -> float:
            calls["chi2"] += 1
            result = problem.chi2(start + np.asarray(x) * scales)
            # MIGRAD backs off from a large finite wall, not from infinity.
            return result if math.isfinite(result) else 1e12

        def gradient(x: np.ndarray) -> np.ndarray:
            calls["gradient"] += 1
            point = start + np.asarray(x) * scales
            return np.asarray(problem.linearise(point[None]).gradient[0] * scales)

        def second(x: np.ndarray) -> np.ndarray:
            calls["hessian"] += 1
            point = start + np.asarray(x) * scales
            curve = hessian(problem, point, 0.02 * scales) * np.outer(scales, scales)
            if np.linalg.eigvalsh(curve)[0] <= 0:  # far from the minimum: J^T J is never negative
                curve = 2.0 * problem.linearise(point[None]).normal.dense()[0] * np.outer(scales, scales)
            # A ridge keeps unconstrained directions from stopping the linear algebra.
            return curve + 1e-9 * np.diag(np.maximum(np.diagonal(curve), 1e-3))

        engine = Minuit(
            value,
            np.zeros(len(start)),
            grad=gradient,
            hessian=None if on_bound else second,
            name=problem.parameter_names,
        )
        engine.errordef = Minuit.LEAST_SQUARES
        engine.limits = [
            (
                (p.lower - s) / c if math.isfinite(p.lower) else None,
                (p.upper - s) / c if math.isfinite(p.upper) else None,
            )
            for p, s, c in zip(problem.parameters, start, scales, strict=True)
        ]
        engine.errors = np.ones(len(start))
        engine.strategy = 0
        engine.tol = 1e-4
        for _ in range(3):
            engine.migrad(ncall=20_000)
            engine.hesse()
            if engine.valid:
                break
        return engine

    # Last resort where MIGRAD falls into another valley on its way: two steps from the minimum in every direction.
    aside = best.theta + 2.0 * scales * np.where(np.arange(len(scales)) % 2, -1.0, 1.0)
    aside = np.clip(aside, [p.lower for p in problem.parameters], [p.upper for p in problem.parameters])
    tried: list[np.ndarray] = []
    engine: Minuit | None = None
    for start in (problem.start, best.start, aside):
        if any(np.array_equal(start, other) for other in tried) or not math.isfinite(problem.chi2(start)):
            continue
        tried.append(start)
        latest = attempt(start)
        if engine is None or latest.fval < engine.fval:
            engine, theta = latest, start + np.array(latest.values) * scales
        if engine.fval < best.chi2 + 1e-3:
            break
    if engine is None:
        notes.add("migrad-not-converged", "MIGRAD has no possible point to start from")
        return best.theta, False
    notes.calls |= calls
    # MIGRAD's own criterion is far below what matters; next to a bound it cannot be met.
    ok = bool(engine.valid or engine.fmin.edm < NEAR_ENOUGH)
    if not ok:
        notes.add(
            "migrad-not-converged", f"MIGRAD did not converge (estimated distance {engine.fmin.edm:.2g})"
        )
    if any(abs(engine.fval - m.chi2) < 1e-3 for m in minima[1:]) and engine.fval > best.chi2 + 1e-3:
        notes.add("migrad-elsewhere", "MIGRAD stopped in another minimum than the best one found")
    return theta, ok


def _trust_region(
    problem: Any, best: Minimum, minima: Sequence[Minimum], notes: Notes
) -> tuple[np.ndarray, bool]:
    """SciPy's bounded trust-region solver in place of MIGRAD, which stalls where flat ranges leave directions open."""
    from scipy.optimize import least_squares

    start = best.start
    bounds = np.array([(p.lower, p.upper) for p in problem.parameters]).T
    width = np.where(np.isfinite(bounds[1] - bounds[0]), bounds[1] - bounds[0], 1.0)
    inside = np.clip(start, bounds[0] + 1e-9 * width, bounds[1] - 1e-9 * width)
    scales = np.array([p.scale for p in problem.parameters])
    found = least_squares(
        lambda x: np.nan_to_num(problem.residuals(x), nan=1e3),
        inside,
        jac=lambda x: np.nan_to_num(problem.jacobian(x)),
        bounds=bounds,
        x_scale=scales,
        xtol=1e-12,
        ftol=1e-13,
        gtol=1e-12,
        max_nfev=2000,
    )
    notes.calls |= {"residuals": int(found.nfev), "jacobian": int(found.njev)}
    if not found.success:
        notes.add("trust-region-not-converged", f"the trust-region solver did not converge: {found.message}")
    return np.asarray(found.x), bool(found.success)


def _twin(problem: Any, theta: np.ndarray, minima: Sequence[Minimum]) -> Minimum:
    """The minimum of the search to compare with: of several equally low ones (mirror images) the nearest."""
    scales = np.array([p.scale for p in problem.parameters])
    lowest = [m for m in minima if m.chi2 <= minima[0].chi2 + 1e-4]
    return min(lowest, key=lambda m: float(np.sum((_difference(problem, theta, m.theta) / scales) ** 2)))


def _difference(problem: Any, left: np.ndarray, right: np.ndarray) -> np.ndarray:
    """left - right, angles modulo their periods."""
    gap = left - right
    for i, parameter in enumerate(problem.parameters):
        if parameter.period:
            gap[i] -= parameter.period * np.rint(gap[i] / parameter.period)
    return np.asarray(gap)


def _only_point(problem: Any) -> list[Minimum]:
    """Where nothing varies there is one point, if it is possible."""
    point = np.zeros(0)
    chi2 = float(problem.chi2(point))
    return [Minimum(point, chi2, point, 1, True)] if math.isfinite(chi2) else []


def _agree(problem: Any, theta: np.ndarray, best: Minimum, curvature: Curvature, notes: Notes) -> bool:
    sigma = np.sqrt(np.clip(np.diagonal(curvature.covariance), 0.0, None))
    solid = (sigma > 0) & ~curvature.unconstrained
    # On a flat range any point is as good as another; the ranges are compared through chi-square only.
    solid &= np.array([not p.is_range for p in problem.parameters], dtype=bool)
    ranges = any(p.is_range for p in problem.parameters)
    difference = _difference(problem, theta, best.theta)
    worst = float(np.max(np.abs(difference[solid]) / sigma[solid], initial=0.0))
    chi2_gap = abs(float(problem.chi2(theta)) - best.chi2)
    if chi2_gap > (1e-3 if ranges else 1e-4) or (worst > AGREEMENT and not ranges):
        notes.add(
            "minimisers-disagree",
            f"the two minimisers disagree by {worst:.2g} standard deviations, {chi2_gap:.2g} in chi-square",
        )
        return False
    return True


def _failed(problem: Any, notes: Notes, message: str) -> FitResult:
    notes.add("no-start", message)
    return FitResult(valid=False, flags=tuple(notes.flags), message=message, **identity(problem))
