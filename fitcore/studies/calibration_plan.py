"""Where pseudo-experiments are thrown from, and which test needs which."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from fitcore.minimise.held_quantities import HeldQuantities
from fitcore.minimise.minima import Minimum
from fitcore.minimise.profile import profile
from fitcore.studies.calibrated_region import RegionPlan, plan_region
from fitcore.studies.pseudo_experiments import Truth, held_fit
from observables.errors import ConvergenceError, InputError

__all__ = ["Plan", "PointPlan"]


@dataclass
class PointPlan:
    """A point to test: Delta chi-square of the data there, and the truths that its test needs."""

    values: dict[str, float]
    delta_chi2: float
    truths: list[str]
    message: str = ""


@dataclass
class Plan:
    """Points to throw from, and which test needs which."""

    problem: Any
    minima: list[Minimum]
    truths: dict[str, Truth] = field(default_factory=dict)
    goodness: list[str] = field(default_factory=list)
    points: list[PointPlan] = field(default_factory=list)
    regions: list[tuple[RegionPlan, list[list[str]]]] = field(default_factory=list)
    flags: list[str] = field(default_factory=list)
    messages: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.ranges = [p for p in self.problem.parameters if getattr(p, "is_range", False)]
        self.observed = np.array([[entry.value for entry in self.problem.entries]])
        if self.ranges:
            self.note(
                "flat-ranges",
                "flat ranges are not thrown: the largest p-value over the fit and both edges of every range is given",
            )

    @property
    def best(self) -> np.ndarray:
        return self.minima[0].theta

    @property
    def others(self) -> list[np.ndarray]:
        return [minimum.theta for minimum in self.minima[1:]]

    def note(self, flag: str, message: str) -> None:
        if flag not in self.flags:
            self.flags.append(flag)
            self.messages.append(message)

    def add_goodness(self, covered: tuple[str, ...]) -> None:
        values = HeldQuantities(self.problem, covered).values(self.best)[0] if covered else ()
        pairs = tuple((name, float(value)) for name, value in zip(covered, values, strict=True))
        truth = Truth("fit", self.best, covered=pairs, starts=tuple(self.others))
        self.truths["fit"] = truth
        self.goodness = ["fit", *self._edges(truth)]

    def add_point(self, values: dict[str, float]) -> None:
        found = profile(
            self.problem,
            tuple(values),
            [np.array([value]) for value in values.values()],
            start=self.best,
            minima=self.others,
        )
        self._lower_minimum(found)
        theta, good = found.parameters.reshape(1, -1), bool(found.converged.ravel()[0])
        delta, labels = self._held(values, theta[0]) if good else (np.inf, [])
        message = "" if good else "no parameter point has these values, or none was found"
        if not good:
            self.note("out-of-reach", "a point to test is out of reach")
        self.points.append(PointPlan(values, delta, labels, message))

    def add_region(self, names: tuple[str, ...], grids: Any, levels: tuple[float, ...]) -> None:
        region = plan_region(self.problem, self.minima, names, grids, levels)
        self._lower_minimum(region.profile)
        nodes = []
        for values, theta, good in region.nodes():
            nodes.append(self._held(dict(zip(names, values, strict=True)), theta)[1] if good else [])
        if not any(nodes):
            raise InputError(
                f"{', '.join(names)}: no parameter point has any of the values of the grid; choose another"
            )
        self.regions.append((region, nodes))

    def _lower_minimum(self, found: Any) -> None:
        if found.better_minimum is not None:
            raise ConvergenceError(
                "a profile found a lower minimum than the search for the best fit: give better starts in the inputs "
                f"file, near {dict(zip(self.problem.parameter_names, map(float, found.better_minimum), strict=True))}",
                found.better_minimum,
            )

    def _held(self, values: Mapping[str, float], theta: np.ndarray) -> tuple[float, list[str]]:
        """Delta chi-square of the data with quantities held, and the truths that its test needs."""
        held = tuple((name, float(value)) for name, value in values.items())
        label = ", ".join(f"{name} = {value!r}" for name, value in held)
        polished, chi2, good = held_fit(self.problem, held, theta[None], self.observed)
        if good[0]:
            theta = polished[0]
        delta = max(float(chi2[0]) - self.minima[0].chi2, 0.0)
        starts = (self.best, *self.others) if self.others else ()
        truth = Truth(label, theta, held, (), starts, self._other_held(held, theta))
        self.truths.setdefault(label, truth)
        return delta, [label, *self._edges(truth)]

    def _other_held(self, held: tuple[tuple[str, float], ...], theta: np.ndarray) -> tuple[np.ndarray, ...]:
        """Held minima in other valleys than the one of `theta`."""
        if not self.others:
            return ()
        quantities = HeldQuantities(self.problem, [name for name, _ in held])
        values = np.array([[value for _, value in held]])
        starts = np.concatenate(
            [quantities.predict(minimum, values)[0] for minimum in (self.best, *self.others)]
        )
        found, chi2, good = held_fit(self.problem, held, starts, np.tile(self.observed, (len(starts), 1)))
        scale = np.array([p.scale for p in self.problem.parameters])
        distinct: list[np.ndarray] = [theta]
        for point in found[good & np.isfinite(chi2)]:
            if all(np.max(np.abs(point - other) / scale) > 0.1 for other in distinct):
                distinct.append(point)
        return tuple(distinct[1:])

    def _edges(self, truth: Truth) -> list[str]:
        """The same truth with every flat range at either edge, the rest profiled."""
        labels = []
        for parameter in self.ranges:
            for edge, value in (("lower", parameter.lower), ("upper", parameter.upper)):
                label = f"{truth.label}; {parameter.name} at its {edge} edge"
                held = (*truth.held, (parameter.name, float(value)))
                theta, chi2, good = held_fit(self.problem, held, truth.theta[None], self.observed)
                if not good[0] or not np.isfinite(chi2[0]):
                    self.note("edge-out-of-reach", f"{label} could not be fitted and is left out")
                    continue
                self.truths.setdefault(label, replace(truth, label=label, theta=theta[0], covered=()))
                labels.append(label)
        return labels
