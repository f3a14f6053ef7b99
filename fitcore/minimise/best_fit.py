"""The best fit: multi-start, MIGRAD from its own start, HESSE, intervals, and everything one says about it.

Two minimisers that share no code, the batch solver and MIGRAD, have to agree; a result is valid only then.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fitcore.minimise.minima import Minimum, find_minima
from fitcore.minimise.uncertainty import Curvature, curvature_at, hessian
from fitcore.result import Estimate, FitResult, MeasurementRow, OtherMinimum

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

#: Delta chi-square of interval_68 (68.27 %) and interval_95 (95.0 %).
LEVELS = (1.0, 3.841458820694124)
#: The two minimisers agree when no parameter differs by more than this many of its standard deviations.
AGREEMENT = 1e-3
#: Within this many standard deviations of a bound the parabola says nothing.
NEAR_BOUND = 3.0


@dataclass
class _Notes:
    """What happened on the way."""

    flags: list[str] = field(default_factory=list)
    messages: list[str] = field(default_factory=list)
    calls: dict[str, int] = field(default_factory=dict)

    def add(self, flag: str, message: str) -> None:
        if flag not in self.flags:
            self.flags.append(flag)
        self.messages.append(message)


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
    names = tuple(derived) if derived is not None else tuple(n for n in DEFAULT_DERIVED if problem.determines(n))
    asked = tuple(dict.fromkeys(profile or ()))
    names = tuple(dict.fromkeys((*names, *(n for n in asked if n not in problem.parameter_names))))
    if names:  # raises early, before any work is done
        problem.linearise_quantities(problem.start, names)
    notes = _Notes()
    minima = find_minima(problem, size=starts, rng=rng) if problem.n_parameters else _only_point(problem)
    if not minima:
        return _failed(problem, notes, "no start of the search is a possible point: check bounds and [parameters] starts")
    notes.calls["starts"] = starts

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
    if best.chi2 < chi2 - 1e-3:  # the better one is reported, but two that differ are no proof of each other
        theta, chi2 = best.theta, best.chi2
    curvature = curvature_at(problem, theta)
    ok &= _agree(problem, found, best, curvature, notes)
    if not curvature.positive:
        notes.add("curvature-not-positive", "the second derivatives at the minimum are not positive: errors are unreliable")
        ok = False
    ok &= best.converged

    wanted = [n for n in PROFILED if n in problem.parameter_names]
    if bounded:  # a parabola knows nothing of ranges: every interval is a profile
        notes.add("flat-ranges", "flat theory ranges: intervals are profiles, parabolic errors and the p-value are left out")
        wanted += [p.name for p in problem.parameters if not p.is_range and p.name not in wanted]
        wanted += names
    wanted += [n for n in asked if n not in wanted]
    parameters, derived_estimates = _estimates(problem, theta, curvature, names, wanted, notes)
    if curvature.unconstrained.any():
        loose = [n for n, free in zip(problem.parameter_names, curvature.unconstrained, strict=True) if free]
        notes.add("unconstrained", f"the inputs do not constrain {', '.join(loose)}")
        # Points along a valley are no minima of their own.
        minima = [minima[0], *(m for m in minima[1:] if m.chi2 > minima[0].chi2 + 1e-3)]
    others = tuple(OtherMinimum(_named(problem, m.theta), m.chi2) for m in minima if m is not best)
    if any(m.chi2 < chi2 + LEVELS[1] for m in others):
        notes.add("several-minima", "another minimum lies within Delta chi2 = 3.84: intervals belong to the best one only")
    return FitResult(
        valid=bool(ok),
        flags=tuple(notes.flags),
        message="; ".join(notes.messages),
        chi2=chi2,
        **_goodness(problem, chi2, curvature),
        **_identity(problem),
        parameters=parameters,
        derived=derived_estimates,
        measurements=_measurement_rows(problem, theta, curvature.covariance),
        parameter_names=problem.parameter_names,
        correlation_names=problem.parameter_names,
        correlation_matrix=_tuples(_correlation(curvature.covariance)),
        covariance_matrix=_tuples(curvature.covariance),
        other_minima=others,
        n_calls=notes.calls,
    )


# -- minimising -----------------------------------------------------------------------------------------------------


def _migrad(problem: Any, best: Minimum, minima: Sequence[Minimum], notes: _Notes) -> tuple[np.ndarray, bool]:
    """MIGRAD and HESSE with the exact gradient, from the start of the search, not from where the search ended."""
    from iminuit import Minuit

    scales = np.array([p.scale for p in problem.parameters])
    calls = {"chi2": 0, "gradient": 0, "hessian": 0}

    def attempt(start: np.ndarray) -> Minuit:
        def value(x: np.ndarray) -> float:
            calls["chi2"] += 1
            result = problem.chi2(start + np.asarray(x) * scales)
            # MIGRAD backs off from a large finite wall, not from infinity.
            return result if math.isfinite(result) else 1e12

        def gradient(x: np.ndarray) -> np.ndarray:
            calls["gradient"] += 1
            return problem.linearise((start + np.asarray(x) * scales)[None]).gradient[0] * scales

        def second(x: np.ndarray) -> np.ndarray:
            calls["hessian"] += 1
            point = start + np.asarray(x) * scales
            curve = hessian(problem, point, 0.02 * scales) * np.outer(scales, scales)
            if np.linalg.eigvalsh(curve)[0] <= 0:  # far from the minimum: J^T J is never negative
                curve = 2.0 * problem.linearise(point[None]).normal.dense()[0] * np.outer(scales, scales)
            # A ridge keeps unconstrained directions from stopping the linear algebra.
            return curve + 1e-9 * np.diag(np.maximum(np.diagonal(curve), 1e-3))

        engine = Minuit(value, np.zeros(len(start)), grad=gradient, hessian=second, name=problem.parameter_names)
        engine.errordef = Minuit.LEAST_SQUARES
        engine.limits = [
            ((p.lower - s) / c if math.isfinite(p.lower) else None, (p.upper - s) / c if math.isfinite(p.upper) else None)
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

    tried = []
    for start in (problem.start, best.start):
        if any(np.array_equal(start, other) for other in tried) or not math.isfinite(problem.chi2(start)):
            continue
        tried.append(start)
        engine = attempt(start)
        theta = start + np.array(engine.values) * scales
        if engine.fval < best.chi2 + 1e-3:
            break
    notes.calls |= calls
    ok = bool(engine.valid)
    if not ok:
        notes.add("migrad-not-converged", f"MIGRAD did not converge (estimated distance {engine.fmin.edm:.2g})")
    if any(abs(engine.fval - m.chi2) < 1e-3 for m in minima[1:]) and engine.fval > best.chi2 + 1e-3:
        notes.add("migrad-elsewhere", "MIGRAD stopped in another minimum than the best one found")
    return theta, ok


def _trust_region(problem: Any, best: Minimum, minima: Sequence[Minimum], notes: _Notes) -> tuple[np.ndarray, bool]:
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
    lowest = [m for m in minima if m.chi2 < minima[0].chi2 + 1e-4]
    return min(lowest, key=lambda m: float(np.sum((_difference(problem, theta, m.theta) / scales) ** 2)))


def _difference(problem: Any, left: np.ndarray, right: np.ndarray) -> np.ndarray:
    """left - right, angles modulo their periods."""
    gap = left - right
    for i, parameter in enumerate(problem.parameters):
        if parameter.period:
            gap[i] -= parameter.period * np.rint(gap[i] / parameter.period)
    return gap


def _only_point(problem: Any) -> list[Minimum]:
    """Where nothing varies there is one point, if it is possible."""
    point = np.zeros(0)
    chi2 = float(problem.chi2(point))
    return [Minimum(point, chi2, point, 1, True)] if math.isfinite(chi2) else []


def _agree(problem: Any, theta: np.ndarray, best: Minimum, curvature: Curvature, notes: _Notes) -> bool:
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


# -- describing -----------------------------------------------------------------------------------------------------


def _estimates(
    problem: Any, theta: np.ndarray, curvature: Curvature, names: tuple[str, ...], wanted: list[str], notes: _Notes
) -> tuple[dict[str, Estimate], dict[str, Estimate]]:
    sigma = np.sqrt(np.clip(np.diagonal(curvature.covariance), 0.0, None))
    lower = np.array([p.lower for p in problem.parameters])
    upper = np.array([p.upper for p in problem.parameters])
    at_bound = ((theta - lower) < NEAR_BOUND * sigma) | ((upper - theta) < NEAR_BOUND * sigma)
    # With flat ranges about, no parabola is to be trusted.
    at_bound |= any(p.is_range for p in problem.parameters)
    near = [n for n, b, loose in zip(problem.parameter_names, at_bound, curvature.unconstrained, strict=True) if b and not loose]
    # A flat range has no interval of interest; it is reported by its value alone unless asked for.
    ranged = {p.name for p in problem.parameters if p.is_range}
    wanted = [*wanted, *(n for n in near if n not in wanted and n not in ranged)]
    intervals = _profile(problem, theta, curvature, wanted, notes)
    if not ranged and (near_named := near):
        notes.add("near-bound", f"{', '.join(near_named)} near a bound: no parabolic error")

    parameters = {}
    for i, parameter in enumerate(problem.parameters):
        loose = bool(curvature.unconstrained[i])
        error = None if loose or at_bound[i] or sigma[i] == 0 else float(sigma[i])
        parameters[parameter.name] = _estimate(parameter.name, theta[i], error, parameter.unit, intervals, loose)
    derived = {}
    if names:
        values, gradient = problem.linearise_quantities(theta, names)
        for name, value, slope in zip(names, values, gradient, strict=True):
            variance = float(slope @ curvature.covariance @ slope)
            touched = curvature.leaves_loose(slope)
            bad = touched or bool(ranged) or not math.isfinite(variance)
            error = None if bad else math.sqrt(max(variance, 0.0))
            derived[name] = _estimate(name, value, error, problem.unit_of(name), intervals, touched)
    return parameters, derived


def _estimate(
    name: str, value: float, error: float | None, unit: str, intervals: dict[str, Any], loose: bool
) -> Estimate:
    value = float(value)
    if name in intervals and not loose:
        first, second = intervals[name]
        return Estimate(value, error, first, second, "profile", unit)
    if error is None:
        return Estimate(value, None, None, None, "linear", unit)
    widths = [math.sqrt(level) * error for level in LEVELS]
    return Estimate(
        value, error, (value - widths[0], value + widths[0]), (value - widths[1], value + widths[1]), "linear", unit
    )


def _profile(
    problem: Any, theta: np.ndarray, curvature: Curvature, wanted: list[str], notes: _Notes
) -> dict[str, tuple[Any, Any]]:
    from fitcore.minimise.profile import profile_intervals

    loose = {n for n, free in zip(problem.parameter_names, curvature.unconstrained, strict=True) if free}
    wanted = [n for n in wanted if n not in loose]
    if not wanted:
        return {}
    found = profile_intervals(problem, theta, wanted, delta_chi2=LEVELS)
    result = {}
    if found.better_minimum is not None:
        notes.add("better-minimum", f"the profiles met a lower minimum, chi2 = {found.minimum:.6g}: fit again from there")
    for name in dict.fromkeys(name for name, *_ in found.flagged):
        notes.add("profile-failed", f"an end of the interval of {name} could not be found: it reaches at least that far")
    for name, pair in found.items():
        if any(not (lo <= hi) for lo, hi, *_ in pair):
            notes.add("profile-failed", f"the profile of {name} could not be followed to its crossing")
            continue
        result[name] = tuple((float(lo), float(hi)) for lo, hi, *_ in pair)
        if any(lo_open or hi_open for _, _, lo_open, hi_open in pair):
            notes.add("open-interval", f"an interval of {name} ends at a bound")
    return result


def _goodness(problem: Any, chi2: float, curvature: Curvature) -> dict[str, Any]:
    from scipy.special import chdtrc

    degrees = problem.terms.degrees_of_freedom - curvature.rank
    has_ranges = any(p.is_range for p in problem.parameters)
    p_value = None if has_ranges or degrees <= 0 else float(chdtrc(degrees, chi2))
    return {"degrees_of_freedom": int(degrees), "p_value": p_value}


def _identity(problem: Any) -> dict[str, Any]:
    from fitcore.provenance import provenance

    inputs = problem.inputs
    return {
        "hypothesis": problem.hypothesis,
        "theory_errors": problem.theory_errors,
        "title": inputs.title,
        "inputs_name": inputs.name,
        "inputs_sha256": inputs.sha256,
        "inputs_revision": inputs.revision or 0,
        "notices": tuple((notice.kind, notice.id, notice.text) for notice in inputs.notices),
        "fixed": dict(problem.fixed),
        "provenance": provenance(problem),
    }


def _measurement_rows(problem: Any, theta: np.ndarray, covariance: np.ndarray) -> tuple[MeasurementRow, ...]:
    quantities = tuple(dict.fromkeys(entry.quantity for entry in problem.entries))
    _, gradient = problem.linearise_quantities(theta, quantities)
    spread = dict(
        zip(quantities, np.sqrt(np.clip(np.einsum("qi,ij,qj->q", gradient, covariance, gradient), 0.0, None)), strict=True)
    )
    predicted = problem.predictions(theta)
    u = problem.terms.standardised(predicted[:, None])[:, 0]
    pulled = u.copy()
    for block in problem.terms.correlation_blocks:
        pulled[block.indices] = block.inverse @ u[block.indices]
    rows = []
    for entry, fitted, share in zip(problem.entries, predicted, u * pulled, strict=True):
        difference = entry.value - fitted
        if entry.period:
            difference -= entry.period * round(difference / entry.period)
            fitted = entry.value - difference
        error = entry.minus if difference > 0 else entry.plus
        rows.append(
            MeasurementRow(
                id=entry.id,
                quantity=entry.quantity,
                measured=entry.value,
                error_plus=entry.plus,
                error_minus=entry.minus,
                fitted=float(fitted),
                pull=float(difference / error),
                unit=entry.unit,
                kind=entry.kind,
                groups=tuple(entry.groups),
                fitted_error=float(spread[entry.quantity]),
                share=float(share),
            )
        )
    return tuple(rows)


def _failed(problem: Any, notes: _Notes, message: str) -> FitResult:
    notes.add("no-start", message)
    return FitResult(valid=False, flags=tuple(notes.flags), message=message, **_identity(problem))


def _named(problem: Any, theta: np.ndarray) -> dict[str, float]:
    return {name: float(value) for name, value in zip(problem.parameter_names, theta, strict=True)}


def _correlation(covariance: np.ndarray) -> np.ndarray:
    sigma = np.sqrt(np.clip(np.diagonal(covariance), 0.0, None))
    with np.errstate(all="ignore"):
        matrix = covariance / np.outer(sigma, sigma)
    return np.asarray(np.clip(matrix, -1.0, 1.0))


def _tuples(matrix: np.ndarray) -> tuple[tuple[float, ...], ...]:
    return tuple(tuple(float(x) for x in row) for row in matrix)
