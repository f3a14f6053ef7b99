"""Outlook: what intervals to expect when some uncertainties shrink."""

from __future__ import annotations

import math
import tomllib
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.minimise.batch_solver import minimise_batch
from fitcore.minimise.best_fit import PROFILED
from fitcore.minimise.minima import find_minima
from fitcore.minimise.profile import profile_intervals
from observables.errors import ConvergenceError, InputError

__all__ = ["Future", "OutlookResult", "OutlookRow", "outlook", "read_future"]

LEVELS = (1.0, 3.841458820694124)
#: Expected distance, in chi-square, that ends a minimisation only at the limit of rounding.
EXACT = 1e-15


@dataclass(frozen=True)
class Future:
    """Future uncertainties.

    Attributes
    ----------
    title : str
    factors : dict
        Entry id -> factor on its error.
    absolute : dict
        Entry id -> (plus, minus) in the catalogue's unit.
    """

    title: str
    factors: dict[str, float]
    absolute: dict[str, tuple[float, float]]


@dataclass(frozen=True)
class OutlookRow:
    """One quantity, today and in the future.

    Attributes
    ----------
    name, unit : str
    value : float
        Best fit today, which is the truth assumed for the future.
    now_68, future_68, now_95, future_95 : (float, float)
        Profile intervals of today's data, and of pseudo-data with future errors.
    today_68 : (float, float)
        Profile interval of pseudo-data with today's errors: what the future is fairly compared with.
    gain : float
        Width of `today_68` over that of `future_68`; 1 when no error changes.
    """

    name: str
    unit: str
    value: float
    now_68: tuple[float, float]
    future_68: tuple[float, float]
    now_95: tuple[float, float]
    future_95: tuple[float, float]
    today_68: tuple[float, float]

    @property
    def gain(self) -> float:
        return (self.today_68[1] - self.today_68[0]) / (self.future_68[1] - self.future_68[0])


@dataclass(frozen=True)
class OutlookResult:
    """Rows, and the entries whose errors changed.

    Attributes
    ----------
    title : str
    changed : tuple of (id, error now, error in the future, unit)
        Asymmetric errors as their geometric mean.
    rows : tuple of OutlookRow
    flags : tuple of str
        ``several-minima``, and ``interval-not-found: NAME``.
    """

    title: str
    changed: tuple[tuple[str, float, float, str], ...]
    rows: tuple[OutlookRow, ...]
    flags: tuple[str, ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "title": self.title,
            "flags": list(self.flags),
            "changed": [
                {"id": name, "error_now": now, "error_future": later, "unit": unit}
                for name, now, later, unit in self.changed
            ],
            "quantities": {
                row.name: {
                    "value": row.value,
                    "unit": row.unit,
                    "now_68": list(row.now_68),
                    "future_68": list(row.future_68),
                    "now_95": list(row.now_95),
                    "future_95": list(row.future_95),
                    "today_68": list(row.today_68),
                    "gain": row.gain,
                }
                for row in self.rows
            },
        }


def read_future(path: str | Path, problem: Any) -> Future:
    """Read a file of future uncertainties.

    The file has an optional ``title`` and a table ``[future]``; each key is an entry's id or a group, each value a
    table with either ``factor`` (on the error of every entry meant) or ``error`` (number or [plus, minus]) and
    ``unit``. What is said of an entry by its id comes before what is said of its groups.

    Parameters
    ----------
    path : str or Path
    problem : Problem

    Raises
    ------
    InputError
        With every problem of the file: not TOML, unknown keys, ids that match nothing, errors that are not positive.
    """
    file = Path(path)
    try:
        data = tomllib.loads(file.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot be read ({error}); give the path of a TOML file") from error
    except tomllib.TOMLDecodeError as error:
        raise InputError(f"{path}: not TOML: {error}") from error
    problems = [
        f'{path}: unknown key "{key}"; known are title and future'
        for key in data
        if key not in ("title", "future")
    ]
    table = data.get("future")
    if not isinstance(table, dict) or not table:
        raise InputError(
            [*problems, f'{path}: no [future] table; write future."ID-or-group" = {{ factor = 0.5 }}']
        )
    factors: dict[str, float] = {}
    absolute: dict[str, tuple[float, float]] = {}
    own: dict[str, float] = {}
    for key, setting in table.items():
        where = f'{path}: [future] "{key}"'
        meant = [e for e in problem.inputs.entries if key in e.names]
        if not meant:
            known = sorted({name for e in problem.inputs.entries for name in e.names})
            from difflib import get_close_matches

            close = get_close_matches(key, known, n=3, cutoff=0.3)
            hint = f"; did you mean {', '.join(close)}?" if close else ""
            problems.append(f"{where} matches no entry and no group{hint}")
            continue
        if not isinstance(setting, dict) or set(setting) not in ({"factor"}, {"error", "unit"}):
            problems.append(f"{where} must have either factor, or error and unit")
            continue
        numbers = setting.get("factor", setting.get("error"))
        numbers = numbers if isinstance(numbers, list) else [numbers]
        if (
            len(numbers) not in (1, 2)
            or not all(_positive(x) for x in numbers)
            or ("factor" in setting and len(numbers) != 1)
        ):
            problems.append(f"{where} must be positive, got {setting}")
            continue
        if "factor" in setting:
            (own if len(meant) == 1 and meant[0].id == key else factors).update(
                {e.id: float(numbers[0]) for e in meant}
            )
            continue
        if len(meant) > 1:
            problems.append(
                f"{where} is a group of {len(meant)} entries: an absolute error belongs to one entry"
            )
            continue
        try:
            scale = problem.unit_factor(setting["unit"], meant[0].unit)
        except ValueError as error:
            problems.append(f"{where} {error}")
            continue
        absolute[meant[0].id] = (numbers[0] * scale, numbers[-1] * scale)
    if problems:
        raise InputError(problems)
    # what is said of an entry itself comes before what is said of its groups
    return Future(str(data.get("title", file.stem)), factors | own, absolute)


def outlook(
    problem: Any,
    future: Future | Mapping[str, float],
    names: Iterable[str] | None = None,
    *,
    starts: int = 64,
    rng: np.random.Generator | int | None = 0,
) -> OutlookResult:
    """Expected intervals from pseudo-data at the current best fit with future uncertainties.

    Parameters
    ----------
    problem : Problem
    future : Future, or mapping of entry id -> factor
    names : iterable of str, optional
        Quantities to report; by default the four Wolfenstein parameters.
    starts : int
    rng : Generator or seed

    Raises
    ------
    InputError
        A factor for an entry that does not exist.
    ConvergenceError
        The fit did not converge.

    Notes
    -----
    The pseudo-data are the predictions at the best fit without fluctuation: the intervals are those of a typical
    future experiment, not of a lucky one. Central values of today play no part beyond the best fit.
    """
    plan = future if isinstance(future, Future) else Future("", dict(future), {})
    known = {e.id for e in problem.inputs.entries}
    if unknown := sorted((set(plan.factors) | set(plan.absolute)) - known):
        raise InputError(
            f"no entry {', '.join(unknown)} in {problem.inputs.name}; weakmix show lists the ids"
        )
    bad = [i for i, factor in plan.factors.items() if not _positive(factor)]
    bad += [i for i, pair in plan.absolute.items() if not all(_positive(error) for error in pair)]
    if bad:
        raise InputError(f"future errors must be positive and finite: {', '.join(sorted(set(bad)))}")
    wanted = tuple(names) if names is not None else tuple(n for n in PROFILED if n in problem.parameter_names)
    problem.linearise_quantities(problem.start, wanted)
    minima = find_minima(problem, size=starts, rng=rng)
    if not minima or not minima[0].converged:
        raise ConvergenceError("the fit has no converged minimum; see weakmix fit", minima)
    # Interval ends are found from the minimum: the closer, the closer they are.
    theta = minimise_batch(problem, minima[0].theta[None], tolerance=EXACT).theta[0]
    predicted = dict(zip((e.id for e in problem.entries), problem.predictions(theta), strict=True))
    # an entry that is a flat range of its parameter has no prediction of its own: the parameter's value is one
    place = {name: i for i, name in enumerate(problem.parameter_names)}
    predicted |= {
        e.id: theta[place[e.quantity]]
        for e in problem.inputs.entries
        if e.id not in predicted and e.quantity in place
    }
    entries, same = [], []
    changed = []
    for entry in problem.inputs.entries:
        value = predicted.get(entry.id, entry.value)  # a range of a parameter that is held has no say
        factor = plan.factors.get(entry.id, 1.0)
        plus, minus = plan.absolute.get(entry.id, (entry.plus * factor, entry.minus * factor))
        if (plus, minus) != (entry.plus, entry.minus):
            changed.append(
                (entry.id, math.sqrt(entry.plus * entry.minus), math.sqrt(plus * minus), entry.unit)
            )
        errors = {name: error * plus / entry.plus for name, error in entry.errors.items()}
        same.append(replace(entry, value=float(value)))
        entries.append(replace(entry, value=float(value), plus=plus, minus=minus, errors=errors))
    then, today = problem.with_entries(entries), problem.with_entries(same)
    now_intervals = profile_intervals(problem, theta, wanted, delta_chi2=LEVELS)
    # The pseudo-data sit at the predictions, so today's best fit is also the future one.
    future_intervals = profile_intervals(then, theta, wanted, delta_chi2=LEVELS)
    today_intervals = profile_intervals(today, theta, wanted, delta_chi2=LEVELS[:1])
    values, _ = problem.linearise_quantities(theta, wanted)
    rows = []
    for name, value in zip(wanted, values, strict=True):
        now, later = now_intervals[name], future_intervals[name]
        rows.append(
            OutlookRow(
                name,
                problem.unit_of(name),
                float(value),
                _pair(now[0]),
                _pair(later[0]),
                _pair(now[1]),
                _pair(later[1]),
                _pair(today_intervals[name][0]),
            )
        )
    flags = ["several-minima"] if len(minima) > 1 and minima[1].chi2 < minima[0].chi2 + LEVELS[1] else []
    lost = {
        name for table in (now_intervals, future_intervals, today_intervals) for name, _, _ in table.flagged
    }
    flags += [f"interval-not-found: {name}" for name in wanted if name in lost]
    return OutlookResult(plan.title, tuple(changed), tuple(rows), tuple(flags))


def _pair(interval: Any) -> tuple[float, float]:
    return float(interval[0]), float(interval[1])


def _positive(number: Any) -> bool:
    return (
        isinstance(number, int | float)
        and not isinstance(number, bool)
        and math.isfinite(number)
        and number > 0
    )
