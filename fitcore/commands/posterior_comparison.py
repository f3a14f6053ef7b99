"""What a posterior is compared with: the run folder of a fit or of a profile."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from observables.errors import StoreError

if TYPE_CHECKING:
    from fitcore.result import Estimate
    from fitcore.sampling.chain_format import ChainHeader

__all__ = ["Comparison", "read_comparison"]


@dataclass(frozen=True)
class Comparison:
    """Results of a fit or a profile read back from a run folder.

    Attributes
    ----------
    estimates : dict of name -> Estimate
        Values and intervals of single quantities.
    plane : tuple of str
        The two names of a profile in a plane; empty otherwise.
    contours : list of (words, list of ndarray (k, 2))
        Its contours.
    inputs_sha256, hypothesis, theory_errors : str
        What it was computed from.
    """

    estimates: Mapping[str, Estimate] = field(default_factory=dict)
    plane: tuple[str, ...] = ()
    contours: list[tuple[str, list[np.ndarray]]] = field(default_factory=list)
    inputs_sha256: str = ""
    hypothesis: str = ""
    theory_errors: str = ""

    def differences(self, header: ChainHeader) -> list[str]:
        """What was not the same for the chain, one phrase each."""
        found = []
        if self.inputs_sha256 != header.inputs_sha256:
            found.append(f"its inputs ({self.inputs_sha256[:8]}, the chain's are {header.inputs_sha256[:8]})")
        if self.hypothesis != header.hypothesis:
            found.append(f"its hypothesis ({self.hypothesis}, the chain's is {header.hypothesis})")
        if self.theory_errors != header.theory_errors:
            found.append(f"its theory errors ({self.theory_errors}, the chain's are {header.theory_errors})")
        return found


def read_comparison(folder: Path) -> Comparison:
    """Read the run folder of a fit or a profile.

    Raises
    ------
    StoreError
        If the folder holds neither.
    """
    from fitcore.result import FitResult

    try:
        text = (folder / "result.json").read_text(encoding="utf-8")
        content = json.loads(text)
        if "grids" in content:
            return _profile(content)
        fit = FitResult.from_json(text)
    except (OSError, LookupError, TypeError, ValueError, AttributeError) as error:
        message = (
            f"{folder}: is not the run folder of a fit or a profile; make one with weakmix fit INPUTS --out DIR "
            "or weakmix profile INPUTS NAME --out DIR"
        )
        raise StoreError(message) from error
    return Comparison(
        estimates={**fit.parameters, **fit.derived},
        inputs_sha256=fit.inputs_sha256,
        hypothesis=fit.hypothesis,
        theory_errors=fit.theory_errors,
    )


def _profile(content: Mapping[str, Any]) -> Comparison:
    from fitcore.result import Estimate

    names = tuple(content["names"])
    origin: dict[str, Any] = {
        "inputs_sha256": str(content["inputs"]["sha256"]),
        "hypothesis": str(content["hypothesis"]),
        "theory_errors": str(content["theory_errors"]),
    }
    if len(names) == 1:
        intervals: dict[float, tuple[float, float]] = {}
        for region in content["regions"]:
            # Several or open intervals have no place in a row of a table; the profile's own figure shows them.
            if len(region["intervals"]) == 1 and not any(region["open"][0]):
                low, high = region["intervals"][0]
                intervals[round(float(region["delta_chi2"]), 2)] = (float(low), float(high))
        one = Estimate(
            value=float(content["minimum_at"][names[0]]),
            interval_68=intervals.get(1.0),
            interval_95=intervals.get(3.84),
            method="profile",
            unit=str(content["units"][0]),
        )
        return Comparison(estimates={names[0]: one}, **origin)
    contours = []
    for region in content["regions"]:
        # Share of a two-dimensional Gaussian within the threshold.
        share = 1.0 - math.exp(-0.5 * float(region["delta_chi2"]))
        lines = [np.array(line, dtype=np.float64).reshape(-1, 2) for line in region["polylines"]]
        contours.append((f"{100 * share:.2f} %, two parameters", lines))
    return Comparison(plane=names, contours=contours, **origin)
