"""Calibration with pseudo-experiments: is 2.3 sigma 2.3 sigma?

Measured values, auxiliary theory inputs included, are thrown from each term's own distribution around a fitted point;
every pseudo-experiment is refitted completely. Parameters without interest are set to their profiled values at the
point tested (the "plug-in" or profiled construction): exact where the distribution of the test statistic does not
depend on them, an approximation otherwise.

References
----------
G. J. Feldman, R. D. Cousins, Phys. Rev. D 57, 3873 (1998): ordering by the likelihood ratio.
B. Sen, M. Walker, M. Woodroofe, Statistica Sinica 19, 301 (2009): profiled nuisance parameters in it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import Executor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import threshold
from fitcore.minimise.uncertainty import curvature_at
from fitcore.scaleout import SerialExecutor, portable, run_tasks
from fitcore.studies.calibrated_region import finish_region
from fitcore.studies.calibration_plan import Plan
from fitcore.studies.calibration_result import (
    CalibratedPValue,
    CalibrationResult,
    CoverageRow,
    TestedPoint,
)
from fitcore.studies.pseudo_experiments import Truth, run_block
from fitcore.studies.toy_store import Columns, ToyStore
from observables.errors import ConvergenceError, InputError, UnknownNameError

__all__ = ["BLOCK", "calibrate"]

#: Pseudo-experiments per task.
BLOCK = 1000
#: A result with a larger share of failed pseudo-experiments is not valid.
TOLERATED_FAILURES = 0.01
ALL = "all"

Progress = Callable[[int, int], None]


def calibrate(
    problem: Any,
    toys: int = 1000,
    *,
    rng: np.random.Generator | int | None = None,
    executor: Executor | None = None,
    store: str | Path | None = None,
    points: Mapping[str, float] | Iterable[Mapping[str, float]] | None = None,
    intervals: Iterable[str | tuple[str, ...]] | Mapping[Any, Any] = (),
    cl: float | Sequence[float] = 0.683,
    coverage: Iterable[str] = (),
    progress: Progress | None = None,
) -> CalibrationResult:
    """Calibrate the goodness of fit, chosen points, intervals and coverage with pseudo-experiments.

    Parameters
    ----------
    problem : Problem
    toys : int
        Pseudo-experiments per point that they are thrown from.
    rng : Generator, int or None
        Seed. The same seed gives the same numbers on any executor and after any interruption.
    executor : concurrent.futures.Executor, optional
        Where blocks of pseudo-experiments run; see `fitcore.scaleout.open_executor`. This process by default.
    store : path, optional
        File that keeps finished blocks: repeated after an interruption, the same call goes on from there.
    points : mapping of name to value, or several of them, optional
        One or two quantities each: the test of these values.
    intervals : iterable of name or (name, name), or mapping of these to grids, optional
        Quantities whose calibrated interval (region for two) is wanted. A grid gives the values where
        pseudo-experiments are thrown; the threshold is interpolated between them.
    cl : float or sequence of float
        Confidence levels of intervals and coverage; 0.683 and 0.954 mean 68.27 and 95.45 %.
    coverage : iterable of str
        Quantities whose coverage and pulls are wanted; ``"all"`` is every free parameter that is no flat range.
    progress : callable, optional
        Called with (pseudo-experiments done, in all) after every block.

    Returns
    -------
    CalibrationResult

    Raises
    ------
    InputError, UnknownNameError
        Zero toys, unknown or complex quantities, more than two at once, values that are not finite.
    ConvergenceError
        The data themselves cannot be fitted.
    StoreError
        The store belongs to another calibration.

    Notes
    -----
    A pseudo-experiment whose fit does not converge is kept and counted so that p-values and intervals can only become
    larger and coverage only smaller: for the goodness of fit by its lowest chi-square found, which lies above its
    minimum; for likelihood ratios as infinitely extreme. Flat ranges are not thrown: each test is repeated with every
    range at its lower and its upper edge (the rest profiled), and the largest p-value and threshold count.
    """
    levels = tuple(float(level) for level in np.atleast_1d(cl))
    wanted_points = _checked_points(problem, points)
    wanted_regions = _checked_regions(problem, intervals)
    covered = _checked_coverage(problem, coverage)
    if toys < 1 or int(toys) != toys:
        raise InputError(
            f"{toys} pseudo-experiments: at least one is needed, and 1000 for a p-value good to 0.016"
        )
    for level in levels:
        threshold(level, 1)  # raises for levels that are none
    entropy = _entropy(rng)

    minima = find_minima(problem)
    if not minima or not minima[0].converged:
        raise ConvergenceError(
            "the data cannot be fitted, so there is nothing to throw from; see weakmix fit", minima
        )
    plan = Plan(problem, minima)
    plan.add_goodness(covered)
    for values in wanted_points:
        plan.add_point(values)
    for names, grids in wanted_regions:
        plan.add_region(names, grids, levels)

    executor = executor or SerialExecutor()
    with ToyStore(store, _header(problem, entropy, plan)) as kept:
        stored = {truth["label"]: truth for truth in kept.header["truths"]}
        truths = [_restored(truth, stored[truth.label]) for truth in plan.truths.values()]
        blocks = _run(problem, truths, int(toys), entropy, executor, kept, progress)
    return _result(problem, plan, blocks, truths, int(toys), entropy, levels)


# -- what is asked ----------------------------------------------------------------------------------------------------


def _checked_points(problem: Any, points: Any) -> list[dict[str, float]]:
    if points is None:
        return []
    listed = [points] if isinstance(points, Mapping) else list(points)
    checked = []
    for values in listed:
        if not 1 <= len(values) <= 2:
            raise InputError(f"a point to test has one or two quantities, not {len(values)}")
        for name, value in values.items():
            _check_name(problem, name)
            if not np.isfinite(value):
                raise InputError(f"{name} = {value}: give a finite number")
        checked.append({name: float(value) for name, value in values.items()})
    return checked


def _checked_regions(problem: Any, intervals: Any) -> list[tuple[tuple[str, ...], Any]]:
    if isinstance(intervals, str):
        intervals = (intervals,)
    asked = intervals.items() if isinstance(intervals, Mapping) else [(names, None) for names in intervals]
    checked = []
    for names, grids in asked:
        names = (names,) if isinstance(names, str) else tuple(names)
        if not 1 <= len(names) <= 2 or len(set(names)) < len(names):
            raise InputError(
                f"an interval has one quantity and a region two different ones, not {', '.join(names)}"
            )
        for name in names:
            _check_name(problem, name)
        if grids is not None:
            grids = (grids,) if np.ndim(grids[0]) == 0 else grids
        checked.append((names, grids))
    return checked


def _checked_coverage(problem: Any, coverage: Iterable[str]) -> tuple[str, ...]:
    names: list[str] = []
    for name in (coverage,) if isinstance(coverage, str) else coverage:
        if name == ALL:
            names += [p.name for p in problem.parameters if not getattr(p, "is_range", False)]
        else:
            _check_name(problem, name)
            names.append(name)
    return tuple(dict.fromkeys(names))


def _check_name(problem: Any, name: str) -> None:
    if name in problem.parameter_names:
        return
    try:
        problem.linearise_quantities(np.array([p.start for p in problem.parameters])[None], (name,))
    except KeyError as error:  # a problem that is no `Problem`
        raise UnknownNameError(name, "quantity") from error


def _entropy(rng: np.random.Generator | int | None) -> int:
    if isinstance(rng, np.random.Generator):
        return int(rng.integers(2**63))
    return int(np.random.SeedSequence(rng).entropy)  # type: ignore[arg-type]


# -- running ----------------------------------------------------------------------------------------------------------


def _header(problem: Any, entropy: int, plan: Plan) -> dict[str, Any]:
    from fitcore.provenance import versions

    inputs = getattr(problem, "inputs", None)
    return {
        "weakmix": versions()["weakmix"],
        "fingerprint": problem.fingerprint,
        "hypothesis": getattr(problem, "hypothesis", ""),
        "theory_errors": getattr(problem, "theory_errors", ""),
        "inputs": "" if inputs is None else inputs.resolved_toml(),
        "parameters": list(problem.parameter_names),
        "scales": [float(p.scale) for p in problem.parameters],
        "seed": entropy,
        "block": BLOCK,
        "truths": [
            {
                "label": truth.label,
                "theta": truth.theta.tolist(),
                "held": [list(pair) for pair in truth.held],
                "covered": [list(pair) for pair in truth.covered],
                "starts": [start.tolist() for start in truth.starts],
                "held_starts": [start.tolist() for start in truth.held_starts],
            }
            for truth in plan.truths.values()
        ],
    }


def _restored(truth: Truth, stored: Mapping[str, Any]) -> Truth:
    """The truth as the store has it, to the last digit."""
    return replace(
        truth,
        theta=np.array(stored["theta"]),
        covered=tuple((name, value) for name, value in stored["covered"]),
        starts=tuple(np.array(start) for start in stored["starts"]),
        held_starts=tuple(np.array(start) for start in stored["held_starts"]),
    )


def _run(
    problem: Any,
    truths: Sequence[Truth],
    toys: int,
    entropy: int,
    executor: Executor,
    kept: ToyStore,
    progress: Progress | None,
) -> dict[str, Columns]:
    """All blocks of all truths, those in the store included; columns joined per truth."""
    sent = portable(problem, executor)
    sizes = [min(BLOCK, toys - first) for first in range(0, toys, BLOCK)]
    keys = {
        truth.label: [f"{truth.label} | {block} | {size}" for block, size in enumerate(sizes)]
        for truth in truths
    }
    tasks = {
        keys[truth.label][block]: (sent, truth, size, entropy, (number, block))
        for number, truth in enumerate(truths)
        for block, size in enumerate(sizes)
        if keys[truth.label][block] not in kept.blocks
    }
    total = toys * len(truths)
    done = total - sum(task[2] for task in tasks.values())
    if progress is not None:
        progress(done, total)
    for key, columns in run_tasks(executor, run_block, tasks):
        kept.add(key, columns)
        done += tasks[key][2]
        if progress is not None:
            progress(done, total)
    return {
        label: {
            name: np.concatenate([kept.blocks[key][name] for key in blocks])
            for name in kept.blocks[blocks[0]]
        }
        for label, blocks in keys.items()
    }


# -- what comes out ---------------------------------------------------------------------------------------------------


def _largest(
    blocks: Mapping[str, Columns], labels: Sequence[str], column: str, observed: float
) -> CalibratedPValue | None:
    counted = [
        CalibratedPValue.count(blocks[label][column], observed, int(blocks[label]["failed"].sum()), label)
        for label in labels
    ]
    return max(counted, key=lambda found: found.value, default=None)


def _result(
    problem: Any,
    plan: Plan,
    blocks: Mapping[str, Columns],
    truths: Sequence[Truth],
    toys: int,
    entropy: int,
    levels: tuple[float, ...],
) -> CalibrationResult:
    from scipy.special import chdtrc

    from fitcore.provenance import provenance

    chi2 = plan.minima[0].chi2
    terms = getattr(problem, "terms", None)
    counted = problem.n_entries if terms is None else terms.degrees_of_freedom
    degrees = int(counted - curvature_at(problem, plan.best).rank)
    goodness = _largest(blocks, plan.goodness, "chi2", chi2)
    failed = int(sum(columns["failed"].sum() for columns in blocks.values()))
    thrown = toys * len(blocks)
    flags, messages = list(plan.flags), list(plan.messages)
    if failed:
        flags.append("failed-toys")
        messages.append(
            f"{failed} of {thrown} pseudo-experiments did not converge; they are counted so that p-values and "
            "intervals can only become larger"
        )
    if any(plan.minima[i].chi2 < chi2 + 4.0 for i in range(1, len(plan.minima))):
        flags.append("several-minima")
        messages.append(
            "another minimum lies within Delta chi2 = 4: pseudo-experiments are thrown from the best one"
        )

    points = tuple(
        TestedPoint(
            point.values,
            {name: problem.unit_of(name) for name in point.values},
            point.delta_chi2,
            float(chdtrc(len(point.values), point.delta_chi2)),
            _largest(blocks, point.truths, "t", point.delta_chi2),
            point.message,
        )
        for point in plan.points
    )
    regions = tuple(
        finish_region(region, [[blocks[label] for label in node] for node in nodes], problem.unit_of)
        for region, nodes in plan.regions
    )
    fit = blocks["fit"]
    coverage = tuple(
        CoverageRow.count(
            name,
            problem.unit_of(name),
            value,
            level,
            threshold(level, 1),
            fit[f"t {name}"],
            fit[f"pull {name}"],
            int(fit["failed"].sum()),
        )
        for name, value in truths[0].covered
        for level in levels
    )
    return CalibrationResult(
        valid=failed <= TOLERATED_FAILURES * thrown,
        flags=tuple(flags),
        message="; ".join(messages),
        chi2=chi2,
        degrees_of_freedom=degrees,
        goodness=goodness,
        asymptotic=None if plan.ranges or degrees <= 0 else float(chdtrc(degrees, chi2)),
        toy_chi2=blocks[goodness.truth]["chi2"] if goodness is not None else np.empty(0),
        points=points,
        regions=regions,
        coverage=coverage,
        toys=toys,
        thrown=thrown,
        failed=failed,
        seed=entropy,
        fitted={name: float(value) for name, value in zip(problem.parameter_names, plan.best, strict=True)},
        provenance=provenance(problem),
    )
