"""Tables of a posterior: means, widths and credible intervals, in bounded memory."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from fitcore.sampling.density import credible, density_1d
from fitcore.sampling.diagnostics import effective_sample_size
from fitcore.sampling.thinned import ThinnedChain
from observables.errors import InputError, UnknownNameError

__all__ = ["PosteriorRow", "PosteriorSummary", "summarise"]


@dataclass(frozen=True)
class PosteriorRow:
    """Posterior of one parameter or derived quantity.

    Attributes
    ----------
    name, unit : str
    mean, error : float
        Mean and standard deviation.
    mean_error : float
        Monte Carlo error of the mean.
    median : float
    intervals : dict of float -> tuple of (low, high)
        Credible intervals by credibility; several pairs when the region is disconnected.
    effective : float
        Effective sample size.
    kind : {"highest-density", "equal-tailed"}
        What the intervals of this row are.
    reason : str
        Why they are equal-tailed although highest density was asked for: "flat", "not nested" or "".
    """

    name: str
    unit: str
    mean: float
    error: float
    mean_error: float
    median: float
    intervals: dict[float, tuple[tuple[float, float], ...]]
    effective: float
    kind: str = "highest-density"
    reason: str = ""


@dataclass(frozen=True)
class PosteriorSummary:
    """Rows of a posterior's table and how they were made.

    Attributes
    ----------
    rows : tuple of PosteriorRow
    kind : {"highest-density", "equal-tailed"}
        What was asked for; a row may differ (see :func:`~fitcore.sampling.density.credible`).
    steps, walkers, stride : int
        Samples used: every ``stride``-th of ``steps`` steps.
    """

    rows: tuple[PosteriorRow, ...]
    kind: str
    steps: int
    walkers: int
    stride: int

    def __getitem__(self, name: str) -> PosteriorRow:
        for row in self.rows:
            if row.name == name:
                return row
        raise UnknownNameError(name, "parameter of this summary", [row.name for row in self.rows])

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {
            "kind": self.kind,
            "steps": self.steps,
            "walkers": self.walkers,
            "stride": self.stride,
            "parameters": {
                row.name: {
                    "mean": row.mean,
                    "error": row.error,
                    "mean_error": row.mean_error,
                    "median": row.median,
                    "unit": row.unit,
                    "effective": row.effective,
                    "kind": row.kind,
                    "reason": row.reason,
                    "intervals": {
                        f"{cl:g}": [list(pair) for pair in pairs] for cl, pairs in row.intervals.items()
                    },
                }
                for row in self.rows
            },
        }


def summarise(
    chain: Any,
    *,
    names: Sequence[str] | None = None,
    cl: Sequence[float] = (0.683, 0.954),
    kind: Literal["highest-density", "equal-tailed"] = "highest-density",
    bounds: dict[str, tuple[float, float]] | None = None,
    start: int = 0,
) -> PosteriorSummary:
    """Summarise a chain.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    names : sequence of str, optional
        Parameters and stored derived quantities; default: all parameters and all real derived ones.
    cl : sequence of float
        Credibilities; 0.683 and 0.954 mean 68.27 % and 95.45 %.
    kind : {"highest-density", "equal-tailed"}
        Highest-density regions may be disconnected; where the density is flat within its Monte Carlo error,
        or the regions would not lie inside each other, a row has equal-tailed intervals and says so.
    bounds : dict of name -> (lower, upper), optional
        Where densities end sharply; default: the bounds stored with the chain.
    start : int
        First step used.

    Returns
    -------
    PosteriorSummary

    Raises
    ------
    InputError
        For a credibility outside (0, 1) or an unknown kind.
    UnknownNameError
        For a name that the chain does not hold.
    """
    if kind not in ("highest-density", "equal-tailed"):
        raise InputError(f"kind: must be highest-density or equal-tailed, got {kind!r}")
    levels = [exact_credibility(value) for value in cl]
    parameters = list(chain.parameter_names)
    wanted = list(names) if names is not None else parameters + list(chain.derived_names)
    unknown = [n for n in wanted if n not in parameters and n not in chain.derived_names]
    if unknown:
        raise UnknownNameError(
            unknown[0], "parameter or derived quantity", parameters + list(chain.derived_names)
        )
    derived = tuple(n for n in wanted if n not in parameters)
    thinned = ThinnedChain.read(chain, start=start, derived=derived)
    limits = stored_bounds(chain) | (bounds or {})
    units = dict(zip(parameters, chain.header.parameter_units, strict=False))
    units |= {name: chain.derived_label(name)[0] for name in derived}
    rows = []
    for name in wanted:
        if name in parameters:
            draws = thinned.samples[:, :, parameters.index(name)]
        else:
            draws = thinned.derived[name]
            if np.iscomplexobj(draws):
                if names is not None:
                    raise InputError(f"{name}: is complex; summarise a real quantity made from it")
                continue
        rows.append(_row(name, units.get(name, ""), draws, levels, kind, limits.get(name, (-np.inf, np.inf))))
    return PosteriorSummary(tuple(rows), kind, thinned.steps, len(thinned.ensembles), thinned.stride)


def exact_credibility(cl: float) -> float:
    """0.683 and 0.954 stand for 68.27 % and 95.45 %; everything else is taken as it is."""
    if not 0.0 < cl < 1.0:
        raise InputError(f"cl: must be between 0 and 1, got {cl}")
    return {0.683: 0.6827, 0.954: 0.9545}.get(cl, float(cl))


def stored_bounds(chain: Any) -> dict[str, tuple[float, float]]:
    """Bounds of the parameters as stored with the chain."""
    found = {}
    for name, settings in dict(chain.header.description.get("parameters", {})).items():
        lower = float(settings["lower"]) if settings["lower"] is not None else -np.inf
        upper = float(settings["upper"]) if settings["upper"] is not None else np.inf
        found[name] = (lower, upper)
    return found


def _row(
    name: str, unit: str, draws: np.ndarray, levels: list[float], kind: str, limits: tuple[float, float]
) -> PosteriorRow:
    size = effective_sample_size(np.ascontiguousarray(draws.T))
    flat = draws.reshape(-1)
    flat = flat[np.isfinite(flat)]
    if not len(flat):
        raise InputError(f"{name}: is not finite anywhere on the chain")
    intervals: dict[float, tuple[tuple[float, float], ...]] = {}
    reason = ""
    if kind == "highest-density":
        found = credible(
            density_1d(flat, lower=limits[0], upper=limits[1], effective=size if size > 0 else None), levels
        )
        kind, reason, intervals = found.kind, found.reason, found.regions
    if kind == "equal-tailed":
        for level in levels:
            low, high = np.quantile(flat, [0.5 - 0.5 * level, 0.5 + 0.5 * level])
            intervals[level] = ((float(low), float(high)),)
    deviation = float(flat.std())
    return PosteriorRow(
        name, unit, float(flat.mean()), deviation, deviation / float(np.sqrt(size)), float(np.median(flat)),
        intervals, float(size), kind, reason,
    )  # fmt: skip
