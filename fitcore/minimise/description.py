"""What one says about a best fit: intervals, goodness of fit, pulls, origin."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from fitcore.minimise.uncertainty import AT_BOUND, Curvature
from fitcore.result import Estimate, MeasurementRow

__all__ = [
    "LEVELS",
    "Notes",
    "correlation",
    "estimates",
    "goodness",
    "identity",
    "known_covariance",
    "measurement_rows",
    "named",
    "tuples",
]

#: Delta chi-square of interval_68 (68.27 %) and interval_95 (95.0 %).
LEVELS = (1.0, 3.841458820694124)
#: Within this many standard deviations of a bound the parabola says nothing.
NEAR_BOUND = 3.0
#: A derived quantity leans on a parameter that makes more than this part of its uncertainty.
LEANING = 0.01


@dataclass
class Notes:
    """What happened on the way."""

    flags: list[str] = field(default_factory=list)
    messages: list[str] = field(default_factory=list)
    calls: dict[str, int] = field(default_factory=dict)
    better: np.ndarray | None = None

    def add(self, flag: str, message: str) -> None:
        if flag not in self.flags:
            self.flags.append(flag)
        self.messages.append(message)


def estimates(
    problem: Any,
    theta: np.ndarray,
    curvature: Curvature,
    names: tuple[str, ...],
    wanted: list[str],
    notes: Notes,
) -> tuple[dict[str, Estimate], dict[str, Estimate]]:
    sigma = np.sqrt(np.clip(np.diagonal(curvature.covariance), 0.0, None))
    lower = np.array([p.lower for p in problem.parameters])
    upper = np.array([p.upper for p in problem.parameters])
    room = np.minimum(theta - lower, upper - theta)
    steps = np.array([p.scale for p in problem.parameters])
    at_bound = room <= np.maximum(NEAR_BOUND * sigma, AT_BOUND * steps)
    # With flat ranges about, no parabola is to be trusted.
    at_bound |= any(p.is_range for p in problem.parameters)
    near = [
        n
        for n, b, loose in zip(problem.parameter_names, at_bound, curvature.unconstrained, strict=True)
        if b and not loose
    ]
    # A flat range has no interval of interest; it is reported by its value alone unless asked for.
    ranged = {p.name for p in problem.parameters if p.is_range}
    wanted = [*wanted, *(n for n in near if n not in wanted and n not in ranged)]
    # What leans on a parameter near its bound has no parabola either; on the bound its own is gone.
    empty = (np.zeros(0), np.zeros((0, len(theta))))
    values, gradient = problem.linearise_quantities(theta, names) if names else empty
    reach = np.where(at_bound & (sigma == 0), steps, sigma)
    leaning = {
        name
        for name, slope in zip(names, gradient, strict=True)
        if np.any(np.abs(slope * reach)[at_bound] > LEANING * np.linalg.norm(slope * reach))
    }
    if not ranged:
        wanted += [name for name in names if name in leaning and name not in wanted]
    intervals = _profile(problem, theta, curvature, wanted, notes)
    if not ranged and (near_named := near):
        notes.add("near-bound", f"{', '.join(near_named)} near a bound: no parabolic error")

    parameters = {}
    for i, parameter in enumerate(problem.parameters):
        if parameter.is_range:  # what is allowed, not what is likely
            bounds = (float(parameter.lower), float(parameter.upper))
            parameters[parameter.name] = Estimate(
                float(theta[i]), None, bounds, bounds, "range", parameter.unit
            )
            continue
        loose = bool(curvature.unconstrained[i])
        error = None if loose or at_bound[i] or sigma[i] == 0 else float(sigma[i])
        parameters[parameter.name] = _estimate(
            parameter.name, theta[i], error, parameter.unit, intervals, loose
        )
    derived = {}
    for name, value, slope in zip(names, values, gradient, strict=True):
        variance = float(slope @ curvature.covariance @ slope)
        touched = curvature.leaves_loose(slope)
        bad = touched or bool(ranged) or name in leaning or not math.isfinite(variance)
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
        value,
        error,
        (value - widths[0], value + widths[0]),
        (value - widths[1], value + widths[1]),
        "linear",
        unit,
    )


def _profile(
    problem: Any, theta: np.ndarray, curvature: Curvature, wanted: list[str], notes: Notes
) -> dict[str, tuple[Any, ...]]:
    from fitcore.minimise.profile import profile_intervals

    loose = {n for n, free in zip(problem.parameter_names, curvature.unconstrained, strict=True) if free}
    wanted = [n for n in wanted if n not in loose]
    if not wanted:
        return {}
    found = profile_intervals(problem, theta, wanted, delta_chi2=LEVELS)
    result: dict[str, tuple[Any, ...]] = {}
    if found.better_minimum is not None:
        notes.add("better-minimum", f"the profiles met a lower minimum, chi2 = {found.minimum:.6g}")
        notes.better = np.asarray(found.better_minimum, dtype=float)
    cut = list(dict.fromkeys(name for name, *_ in found.flagged))
    open_ended = []
    for name, pair in found.items():
        if any(not (lo <= hi) for lo, hi, *_ in pair):
            cut += [name] if name not in cut else []
            continue
        result[name] = tuple((float(lo), float(hi)) for lo, hi, *_ in pair)
        if any(lo_open or hi_open for _, _, lo_open, hi_open in pair):
            open_ended.append(name)
    if cut:
        notes.add(
            "profile-failed",
            f"an end of the interval of {', '.join(cut)} could not be found: it reaches at least that far",
        )
    if open_ended:
        notes.add("open-interval", f"an interval of {', '.join(open_ended)} ends at a bound")
    return result


def goodness(problem: Any, chi2: float, curvature: Curvature) -> dict[str, Any]:
    from scipy.special import chdtrc

    degrees = problem.terms.degrees_of_freedom - curvature.rank
    has_ranges = any(p.is_range for p in problem.parameters)
    p_value = None if has_ranges or degrees <= 0 else float(chdtrc(degrees, chi2))
    return {"degrees_of_freedom": int(degrees), "p_value": p_value}


def identity(problem: Any) -> dict[str, Any]:
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


def known_covariance(problem: Any, curvature: Curvature) -> np.ndarray:
    """The covariance matrix as far as it means anything: nan for unconstrained parameters and with flat ranges."""
    matrix = curvature.covariance.copy()
    if any(p.is_range for p in problem.parameters):
        matrix[:] = np.nan
    matrix[curvature.unconstrained] = np.nan
    matrix[:, curvature.unconstrained] = np.nan
    return matrix


def measurement_rows(problem: Any, theta: np.ndarray, covariance: np.ndarray) -> tuple[MeasurementRow, ...]:
    """Every entry, measured against fitted; no fitted error with flat ranges, where it is no parabola's."""
    quantities = tuple(dict.fromkeys(entry.quantity for entry in problem.entries))
    spread: dict[str, float | None] = dict.fromkeys(quantities)
    if not any(p.is_range for p in problem.parameters):
        _, gradient = problem.linearise_quantities(theta, quantities)
        variances = np.clip(np.einsum("qi,ij,qj->q", gradient, covariance, gradient), 0.0, None)
        spread = {name: float(error) for name, error in zip(quantities, np.sqrt(variances), strict=True)}
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
                fitted_error=spread[entry.quantity],
                share=float(share),
                source=getattr(entry, "source", "") or "",
            )
        )
    return tuple(rows)


def named(problem: Any, theta: np.ndarray) -> dict[str, float]:
    return {name: float(value) for name, value in zip(problem.parameter_names, theta, strict=True)}


def correlation(covariance: np.ndarray) -> np.ndarray:
    sigma = np.sqrt(np.clip(np.diagonal(covariance), 0.0, None))
    with np.errstate(all="ignore"):
        matrix = covariance / np.outer(sigma, sigma)
    return np.asarray(np.clip(matrix, -1.0, 1.0))


def tuples(matrix: np.ndarray) -> tuple[tuple[float, ...], ...]:
    return tuple(tuple(float(x) for x in row) for row in matrix)
