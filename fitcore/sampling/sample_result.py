"""What sampling hands out: progress while it runs, a result at the end."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from fitcore.sampling.diagnostics import Diagnostics
from fitcore.sampling.mixture import StudentMixture
from fitcore.sampling.thinned import ThinnedChain

__all__ = ["Progress", "SampleResult"]


@dataclass(frozen=True)
class Progress:
    """State of a run, handed to the progress callback after every block.

    Attributes
    ----------
    phase : {"pilot", "chain", "widths"}
    steps, walkers : int
    rate : float
        Posterior evaluations per second.
    effective : float or None
        Effective samples so far in the slowest parameter; None before the first check.
    tau : float or None
        Longest autocorrelation time in steps.
    acceptance : float
    seconds, seconds_to_go : float, float or None
    """

    phase: str
    steps: int
    walkers: int
    rate: float
    effective: float | None
    tau: float | None
    acceptance: float
    seconds: float
    seconds_to_go: float | None


@dataclass(frozen=True)
class SampleResult:
    """A sampled posterior.

    Attributes
    ----------
    valid : bool
        Whether the diagnostics allow using the chain.
    flags : tuple of str
        Short words for what happened: "interrupted", "nan", "not-converged", "step-limit".
    message : str
        The verdict in one sentence.
    chain : ChainFile or MemoryChain
        The samples; a chain file is open for reading.
    path : Path or None
    diagnostics : Diagnostics
    density : StudentMixture
        The tuned proposal; its components are the modes.
    start_counts : tuple of int
        Walkers that this run started in each mode; empty on a resumed run.
    steps, walkers, ensembles : int
    evaluations : int
        Posterior evaluations of this call, pilot included.
    seconds, pilot_seconds, width_seconds : float
        Wall time of the chain, of the pilot run and of the width comparison.
    stopped_because : str
    interrupted : bool
    seed : str
        Entropy of the run, as JSON.
    notices : tuple of str
        What the reader should know: ignored tails, adopted settings.
    """

    valid: bool
    flags: tuple[str, ...]
    message: str
    chain: Any
    path: Path | None
    diagnostics: Diagnostics
    density: StudentMixture
    start_counts: tuple[int, ...]
    steps: int
    walkers: int
    ensembles: int
    evaluations: int
    seconds: float
    pilot_seconds: float
    width_seconds: float
    stopped_because: str
    interrupted: bool
    seed: str
    notices: tuple[str, ...] = ()

    @property
    def parameter_names(self) -> tuple[str, ...]:
        """Names along the last axis of the samples."""
        return tuple(self.chain.parameter_names)

    @property
    def effective_per_second(self) -> float:
        """Effective samples of the slowest parameter per second of chain and pilot run."""
        return float(np.nanmin(self.diagnostics.effective_sample_size) / (self.seconds + self.pilot_seconds))

    def samples(self, name: str | None = None, *, max_values: int = 1 << 24) -> np.ndarray:
        """Flat samples (N, n), or (N,) of one parameter, thinned to at most ``max_values`` numbers."""
        flat = ThinnedChain.read(self.chain, max_values=max_values).samples.reshape(
            -1, len(self.parameter_names)
        )
        return flat if name is None else flat[:, self.parameter_names.index(name)]
