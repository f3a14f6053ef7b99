"""What can be asked of a problem: every method hands over to the module that does the work."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from observables.errors import ConvergenceError

if TYPE_CHECKING:
    from fitcore.minimise.minima import Minimum
    from fitcore.minimise.profile import Profile
    from fitcore.result import FitResult
    from fitcore.sampling.sample_result import SampleResult
    from fitcore.studies.budget import BudgetResult
    from fitcore.studies.calibration_result import CalibrationResult
    from fitcore.studies.indirect import IndirectResult

__all__ = ["Questions"]


class Questions:
    """Methods of `Problem` that compute something large; imported when they are called."""

    parameter_names: tuple[str, ...]
    inputs: Any

    def fit(
        self,
        *,
        derived: Iterable[str] | None = None,
        profile: Iterable[str] | None = None,
        starts: int = 64,
        rng: np.random.Generator | int | None = 0,
    ) -> FitResult:
        """Best fit, intervals, goodness of fit, pulls and other minima; see `fitcore.minimise.best_fit.fit`."""
        from fitcore.minimise.best_fit import fit

        return fit(self, derived=derived, profile=profile, starts=starts, rng=rng)

    def minima(self, *, starts: int = 64, rng: np.random.Generator | int | None = 0) -> list[Minimum]:
        """Distinct minima of chi-square, best first; see `fitcore.minimise.minima.find_minima`.

        Raises
        ------
        ConvergenceError
            None that converged.
        """
        from fitcore.minimise.minima import find_minima

        found = find_minima(self, size=starts, rng=rng)
        if not found or not found[0].converged:
            raise ConvergenceError(f"{self.inputs.name}: no converged minimum; see weakmix fit", found)
        return found

    def profile(self, grids: Mapping[str, Any] | Sequence[str], *, points: int = 61) -> Profile:
        """chi-square minimised over everything else on a grid of one or two quantities.

        Parameters
        ----------
        grids : mapping, or sequence of str
            Name -> values, ascending; or names alone for automatic ranges.
        points : int
            Points per automatic range.

        Returns
        -------
        Profile
            See `fitcore.minimise.profile.profile`.
        """
        from fitcore.minimise.profile import automatic_range, profile
        from fitcore.minimise.uncertainty import curvature_at

        found = self.minima()
        names = list(grids)
        if not isinstance(grids, Mapping):
            covariance = curvature_at(self, found[0].theta).covariance
            ends = [automatic_range(self, found[0].theta, covariance, name) for name in names]
            grids = {n: np.linspace(low, high, points) for n, (low, high) in zip(names, ends, strict=True)}
        return profile(
            self,
            names,
            [np.asarray(grids[name], dtype=float) for name in names],
            start=found[0].theta,
            minima=[m.theta for m in found[1:]],
        )

    def sample(self, *, chain_path: str | Path | None = None, **options: Any) -> SampleResult:
        """Posterior chain started from the minima of a fit; see `fitcore.sampling.posterior.sample`."""
        from fitcore.sampling.from_fit import modes_of_fit
        from fitcore.sampling.posterior import sample

        if "modes" not in options:
            options["modes"] = modes_of_fit(self, self.fit(derived=[]))
        return sample(self, chain_path=chain_path, **options)

    def calibrate(self, toys: int = 1000, **options: Any) -> CalibrationResult:
        """p-values, intervals and coverage from pseudo-experiments; see `fitcore.studies.calibration.calibrate`."""
        from fitcore.studies.calibration import calibrate

        return calibrate(self, toys, **options)

    def indirect(self, names: Iterable[str] | None = None, **options: Any) -> IndirectResult:
        """What everything else says about quantities; see `fitcore.studies.indirect.indirect`."""
        from fitcore.studies.indirect import indirect

        return indirect(self, names, **options)

    def budget(self, names: Iterable[str] | None = None, **options: Any) -> BudgetResult:
        """Whose uncertainty makes whose; the four Wolfenstein parameters unless names are given.

        See `fitcore.studies.budget.budget`.
        """
        from fitcore.minimise.best_fit import PROFILED
        from fitcore.studies.budget import budget

        chosen = names if names is not None else [n for n in PROFILED if n in self.parameter_names]
        return budget(self, chosen, **options)
