"""What a calibration says: p-values, thresholds, intervals and coverage with their binomial uncertainties."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

__all__ = [
    "CalibratedPValue",
    "CalibratedRegion",
    "CalibrationResult",
    "CoverageRow",
    "TestedPoint",
    "clopper_pearson",
    "quantile_with_error",
]

#: Probability content of one standard deviation of a Gaussian, both sides.
ONE_SIGMA = math.erf(math.sqrt(0.5))


def clopper_pearson(successes: int, trials: int, cl: float = ONE_SIGMA) -> tuple[float, float]:
    """Central interval for a binomial probability that holds it in at least `cl` of all experiments.

    References
    ----------
    C. J. Clopper, E. S. Pearson, Biometrika 26, 404 (1934).
    """
    from scipy.special import betaincinv

    tail = 0.5 * (1.0 - cl)
    low = 0.0 if successes == 0 else float(betaincinv(successes, trials - successes + 1, tail))
    high = 1.0 if successes == trials else float(betaincinv(successes + 1, trials - successes, 1.0 - tail))
    return low, high


def quantile_with_error(values: np.ndarray, probability: float) -> tuple[float, float, float]:
    """Conservative sample quantile and its one-sigma band from the binomial law of order statistics.

    Parameters
    ----------
    values : ndarray, shape (N,)
        +inf counts as larger than everything.
    probability : float

    Returns
    -------
    (quantile, low, high)
        The quantile is the smallest order statistic below which a new value of the same law falls with at least the
        given probability: number ceil(probability x (N + 1)); +inf when N is too small for that.
    """
    ordered = np.sort(values)
    count = ordered.size
    rank = math.ceil(probability * (count + 1) - 1e-9)
    spread = math.sqrt(count * probability * (1.0 - probability))

    def at(position: float) -> float:
        place = math.ceil(position - 1e-9)
        if place < 1:
            return 0.0
        return math.inf if place > count else float(ordered[place - 1])

    return at(rank), at(rank - spread), at(rank + spread)


@dataclass(frozen=True)
class CalibratedPValue:
    """A p-value from pseudo-experiments.

    Attributes
    ----------
    value : float
        (k + 1) / (N + 1) with k of N pseudo-experiments at least as extreme as the data.
    interval : (float, float)
        Clopper-Pearson 68.27 % interval of the probability estimated by k of N.
    exceeding, toys, failed : int
        k, N, and how many of the N did not converge (treated so that the p-value can only be larger).
    truth : str
        The point they were thrown from; where flat ranges leave several, the one with the largest p-value.
    """

    value: float
    interval: tuple[float, float]
    exceeding: int
    toys: int
    failed: int
    truth: str

    @property
    def error(self) -> float:
        """Half the width of `interval`."""
        return 0.5 * (self.interval[1] - self.interval[0])

    @classmethod
    def count(cls, statistic: np.ndarray, observed: float, failed: int, truth: str) -> CalibratedPValue:
        """Compare pseudo-experiments with the data; equal to rounding counts as at least as extreme."""
        toys = statistic.size
        exceeding = int((statistic >= observed - 1e-7 * max(1.0, abs(observed))).sum())
        interval = clopper_pearson(exceeding, toys)
        return cls((exceeding + 1) / (toys + 1), interval, exceeding, toys, failed, truth)


@dataclass(frozen=True)
class TestedPoint:
    """The likelihood-ratio test of chosen values of one or two quantities.

    Attributes
    ----------
    values, units : dict
    delta_chi2 : float
        Profiled chi-square there above the minimum; +inf when the values are out of reach.
    asymptotic : float
        p-value by Wilks' theorem, one degree of freedom per quantity.
    calibrated : CalibratedPValue or None
        None when the point is out of reach.
    message : str
        Why not, if not.
    """

    values: dict[str, float]
    units: dict[str, str]
    delta_chi2: float
    asymptotic: float
    calibrated: CalibratedPValue | None
    message: str = ""

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        found = self.calibrated
        return {
            "values": dict(self.values),
            "units": dict(self.units),
            "delta_chi2": self.delta_chi2,
            "p_value": None if found is None else found.value,
            "p_value_error": None if found is None else found.error,
            "p_value_interval": None if found is None else list(found.interval),
            "asymptotic": self.asymptotic,
            "toys": 0 if found is None else found.toys,
            "failed_toys": 0 if found is None else found.failed,
            "message": self.message,
        }


@dataclass(frozen=True)
class CalibratedRegion:
    """Interval (one quantity) or region (two) by the calibrated likelihood ratio, beside the asymptotic one.

    Attributes
    ----------
    names, units : tuple of str
    cl : tuple of float
        Confidence levels as asked.
    assumed : ndarray, shape (c,)
        Thresholds in Delta chi-square by Wilks' theorem.
    grids : tuple of ndarray
        Where pseudo-experiments were thrown.
    needed, needed_low, needed_high : ndarray, shape (c, *grid)
        Thresholds that the pseudo-experiments need, and their one-sigma statistical band; nan where no
        parameter point has these values.
    fine_grids : tuple of ndarray
    delta_chi2 : ndarray, shape of the fine grid
        The data's profile.
    calibrated, asymptotic : tuple, one item per level
        For one quantity lists of (low, high, low_open, high_open); for two lists of polylines (k, 2).
    toys, failed : int
        In all.
    message : str
    """

    names: tuple[str, ...]
    units: tuple[str, ...]
    cl: tuple[float, ...]
    assumed: np.ndarray
    grids: tuple[np.ndarray, ...]
    needed: np.ndarray
    needed_low: np.ndarray
    needed_high: np.ndarray
    fine_grids: tuple[np.ndarray, ...]
    delta_chi2: np.ndarray
    calibrated: tuple[list[Any], ...]
    asymptotic: tuple[list[Any], ...]
    toys: int
    failed: int
    message: str = ""

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        key = "intervals" if len(self.names) == 1 else "polylines"
        return {
            "names": list(self.names),
            "units": list(self.units),
            "grids": [grid.tolist() for grid in self.grids],
            "toys": self.toys,
            "failed_toys": self.failed,
            "message": self.message,
            "levels": [
                {
                    "cl": cl,
                    "dof": len(self.names),
                    "threshold_assumed": float(self.assumed[c]),
                    "threshold_needed": self.needed[c].tolist(),
                    "threshold_needed_low": self.needed_low[c].tolist(),
                    "threshold_needed_high": self.needed_high[c].tolist(),
                    "calibrated": {key: _listed(self.calibrated[c])},
                    "asymptotic": {key: _listed(self.asymptotic[c])},
                }
                for c, cl in enumerate(self.cl)
            ],
        }


def _listed(parts: list[Any]) -> list[Any]:
    return [part.tolist() if isinstance(part, np.ndarray) else list(part) for part in parts]


@dataclass(frozen=True)
class CoverageRow:
    """How often the Delta chi-square interval of one quantity holds the truth it was thrown from.

    Attributes
    ----------
    name, unit : str
    truth : float
    cl, threshold : float
        Nominal confidence and the Delta chi-square used.
    holding, toys, failed : int
        Pseudo-experiments that did not converge count as not holding.
    interval : (float, float)
        Clopper-Pearson 68.27 % interval of the coverage.
    pull_mean, pull_mean_error, pull_width, pull_width_error : float
        Of (fitted - truth) / error, the error from the curvature of each pseudo-experiment.
    pulls : int
        How many have such an error: none at a bound.
    """

    name: str
    unit: str
    truth: float
    cl: float
    threshold: float
    holding: int
    toys: int
    failed: int
    interval: tuple[float, float]
    pull_mean: float
    pull_mean_error: float
    pull_width: float
    pull_width_error: float
    pulls: int

    @property
    def coverage(self) -> float:
        """Fraction that holds the truth."""
        return self.holding / self.toys

    @classmethod
    def count(
        cls,
        name: str,
        unit: str,
        truth: float,
        cl: float,
        threshold: float,
        ratios: np.ndarray,
        pulls: np.ndarray,
        failed: int,
    ) -> CoverageRow:
        """Build a row from likelihood ratios at the truth and pulls."""
        holding, toys = int((ratios <= threshold).sum()), ratios.size
        usable = pulls[np.isfinite(pulls)]
        mean = width = mean_error = width_error = math.nan
        if usable.size > 1:
            mean, width = float(usable.mean()), float(usable.std(ddof=1))
            mean_error, width_error = (
                width / math.sqrt(usable.size),
                width / math.sqrt(2.0 * (usable.size - 1)),
            )
        interval = clopper_pearson(holding, toys)
        return cls(
            name, unit, truth, cl, threshold, holding, toys, failed, interval,
            mean, mean_error, width, width_error, usable.size,
        )  # fmt: skip

    def to_dict(self) -> dict[str, Any]:
        """Plain data."""
        return {
            "name": self.name,
            "unit": self.unit,
            "truth": self.truth,
            "cl": self.cl,
            "threshold": self.threshold,
            "coverage": self.coverage,
            "coverage_interval": list(self.interval),
            "toys": self.toys,
            "failed_toys": self.failed,
            "pull_mean": self.pull_mean,
            "pull_mean_error": self.pull_mean_error,
            "pull_width": self.pull_width,
            "pull_width_error": self.pull_width_error,
            "pulls": self.pulls,
        }


@dataclass(frozen=True)
class CalibrationResult:
    """Everything a calibration found.

    Attributes
    ----------
    valid : bool
        The data's fit converged, and at most one pseudo-experiment in a hundred failed to.
    flags : tuple of str
    message : str
    chi2, degrees_of_freedom : float, int
        Of the data.
    goodness : CalibratedPValue or None
        Goodness of fit.
    asymptotic : float or None
        p-value of the chi-square distribution; None where it does not apply (flat ranges, no degree of freedom left).
    toy_chi2 : ndarray, shape (N,)
        Minimum chi-square of the pseudo-experiments behind `goodness`.
    points : tuple of TestedPoint
    regions : tuple of CalibratedRegion
    coverage : tuple of CoverageRow
    toys : int
        Pseudo-experiments thrown per point.
    thrown, failed : int
        In all.
    seed : int
    fitted : dict
        Best-fit parameters.
    provenance : dict
    """

    valid: bool = False
    flags: tuple[str, ...] = ()
    message: str = ""
    chi2: float = math.nan
    degrees_of_freedom: int = 0
    goodness: CalibratedPValue | None = None
    asymptotic: float | None = None
    toy_chi2: np.ndarray = field(default_factory=lambda: np.empty(0))
    points: tuple[TestedPoint, ...] = ()
    regions: tuple[CalibratedRegion, ...] = ()
    coverage: tuple[CoverageRow, ...] = ()
    toys: int = 0
    thrown: int = 0
    failed: int = 0
    seed: int = 0
    fitted: dict[str, float] = field(default_factory=dict)
    provenance: Mapping[str, Any] = field(default_factory=dict)

    @property
    def p_value(self) -> float | None:
        """Calibrated p-value of the goodness of fit."""
        return None if self.goodness is None else self.goodness.value

    @property
    def p_value_error(self) -> float | None:
        """Half the width of its Clopper-Pearson 68.27 % interval."""
        return None if self.goodness is None else self.goodness.error

    def to_dict(self) -> dict[str, Any]:
        """Plain data, for JSON."""
        found = self.goodness
        return {
            "converged": self.valid,
            "flags": list(self.flags),
            "message": self.message,
            "p_value": self.p_value,
            "p_value_error": self.p_value_error,
            "p_value_interval": None if found is None else list(found.interval),
            "asymptotic": self.asymptotic,
            "toys": self.toys,
            "failed_toys": 0 if found is None else found.failed,
            "thrown_from": None if found is None else found.truth,
            "chi2": self.chi2,
            "degrees_of_freedom": self.degrees_of_freedom,
            "points": [point.to_dict() for point in self.points],
            "regions": [region.to_dict() for region in self.regions],
            "coverage": [row.to_dict() for row in self.coverage],
            "all_toys": self.thrown,
            "all_failed_toys": self.failed,
            "seed": self.seed,
            "parameters": dict(self.fitted),
            "provenance": dict(self.provenance),
        }
