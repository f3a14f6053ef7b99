"""Has a chain converged? Autocorrelation, agreement of ensembles, stuck walkers, and a verdict."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from fitcore.sampling.thinned import ThinnedChain

__all__ = [
    "Diagnostics",
    "WidthCheck",
    "diagnose",
    "effective_sample_size",
    "longest_stay",
    "rank_normalised_rhat",
]

Status = Literal["reliable", "tentative", "unusable"]

RELIABLE_TAUS = 40.0
TENTATIVE_TAUS = 10.0
RHAT_LIMIT = 1.01
_RANKED_VALUES = 200_000


@dataclass(frozen=True)
class WidthCheck:
    """Widths of the chain over those of a short run without the independence move.

    Attributes
    ----------
    ratio : ndarray (n,)
        Standard deviation of the chain divided by that of the short run.
    significance : ndarray (n,)
        Logarithm of the ratio in units of its Monte Carlo error.
    steps : int
        Length of the short run.
    """

    ratio: np.ndarray
    significance: np.ndarray
    steps: int

    @property
    def suspicious(self) -> np.ndarray:
        """Parameters whose widths differ by more than 4 errors and 3 %, (n,) of bool."""
        return np.asarray((np.abs(self.significance) > 4.0) & (np.abs(self.ratio - 1.0) > 0.03))


@dataclass(frozen=True)
class Diagnostics:
    """What is known about the convergence of a chain.

    Attributes
    ----------
    parameter_names : tuple of str
    steps, walkers, ensembles : int
    autocorrelation_time : ndarray (n,)
        Integrated autocorrelation time in steps: walkers x steps / effective sample size.
    status : {"reliable", "tentative", "unusable"}
        The run is at least 40, at least 10, or fewer than 10 of the longest autocorrelation times long.
    effective_sample_size : ndarray (n,)
        Number of independent draws that would estimate the mean as well. Trust it when ``status`` is
        reliable.
    rhat : ndarray (n,)
        Rank-normalised split R-hat over the ensembles; nan for fewer than 2 x 2 steps.
    acceptance : float
        Share of accepted proposals.
    longest_stay : int
        Largest number of steps that any walker spent in one place.
    walkers_per_mode : tuple of float
        Share of the samples nearest to each mode.
    width_check : WidthCheck or None
    valid : bool
        Whether the chain may be used.
    verdict : str
        One sentence.
    advice : tuple of str
        What to do about it.
    """

    parameter_names: tuple[str, ...]
    steps: int
    walkers: int
    ensembles: int
    autocorrelation_time: np.ndarray
    status: Status
    effective_sample_size: np.ndarray
    rhat: np.ndarray
    acceptance: float
    longest_stay: int
    walkers_per_mode: tuple[float, ...]
    width_check: WidthCheck | None
    valid: bool
    verdict: str
    advice: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        check = self.width_check
        columns = {
            "autocorrelation_time": self.autocorrelation_time,
            "effective_sample_size": self.effective_sample_size,
            "rhat": self.rhat,
        }
        if check is not None:
            columns["width_ratio"] = check.ratio
        return {
            "steps": self.steps,
            "walkers": self.walkers,
            "ensembles": self.ensembles,
            "status": self.status,
            "acceptance": self.acceptance,
            "longest_stay": self.longest_stay,
            "walkers_per_mode": list(self.walkers_per_mode),
            "valid": self.valid,
            "verdict": self.verdict,
            "advice": list(self.advice),
            "parameters": {
                name: {
                    key: float(column[i]) if np.isfinite(column[i]) else None
                    for key, column in columns.items()
                }
                for i, name in enumerate(self.parameter_names)
            },
        }


def effective_sample_size(draws: np.ndarray) -> float:
    """Effective sample size for the mean, from chains side by side.

    Parameters
    ----------
    draws : ndarray (chains, draws)
        Walkers of an ensemble may be used as chains: a walker that sits still then shows as variance
        between chains.

    Returns
    -------
    float
        nan for fewer than four draws or without any variance.

    Notes
    -----
    Multi-chain autocorrelation with Geyer's initial monotone sequence; A. Vehtari, A. Gelman, D. Simpson,
    B. Carpenter, P.-C. Buerkner, Bayesian Analysis 16, 667 (2021), eqs. 10-14.
    """
    chains, n = draws.shape
    if n < 4:
        return float("nan")
    centred = draws - draws.mean(axis=1, keepdims=True)
    size = 1 << (2 * n - 1).bit_length()
    power = np.zeros(size // 2 + 1)
    # A slice of chains at a time: the transforms are four times as large as the draws.
    for begin in range(0, chains, 64):
        transform = np.fft.rfft(centred[begin : begin + 64], size, axis=1)
        power += (transform.real**2 + transform.imag**2).sum(axis=0)
    covariance = np.fft.irfft(power, size)[:n] / (n * chains)
    within = covariance[0] * n / (n - 1.0)
    total = covariance[0] + (draws.mean(axis=1).var(ddof=1) if chains > 1 else 0.0)
    if not total > 0.0:
        return float("nan")
    rho = 1.0 - (within - covariance) / total
    rho[0] = 1.0
    pairs = rho[: n // 2 * 2].reshape(-1, 2).sum(axis=1)
    ends = np.flatnonzero(pairs <= 0.0)
    # Lags close to the length of the chains are noise and never summed.
    last = min(int(ends[0]) if len(ends) else len(pairs), max((n - 3) // 2, 1))
    # The even term of the first negative pair still counts when it is positive.
    extra = max(float(rho[2 * last]), 0.0) if last < len(pairs) else 0.0
    tau = -1.0 + 2.0 * float(np.minimum.accumulate(pairs[:last]).sum()) + extra
    tau = max(tau, 1.0 / np.log10(chains * n))
    return float(chains * n / tau)


def rank_normalised_rhat(draws: np.ndarray) -> float:
    """Rank-normalised split R-hat, the larger of bulk and tail.

    Parameters
    ----------
    draws : ndarray (chains, draws)
        Independent chains (ensembles, never walkers), each in order of time.

    Returns
    -------
    float
        nan for fewer than four draws per chain.

    Notes
    -----
    A. Vehtari et al., Bayesian Analysis 16, 667 (2021), section 4.
    """
    n = draws.shape[1]
    if n < 4:
        return float("nan")
    half = n // 2
    split = np.concatenate([draws[:, :half], draws[:, n - half :]])
    folded = np.abs(split - np.median(split))
    return max(_rhat(_normal_scores(split)), _rhat(_normal_scores(folded)))


def _normal_scores(draws: np.ndarray) -> np.ndarray:
    from scipy.special import ndtri
    from scipy.stats import rankdata

    ranks = rankdata(draws, axis=None).reshape(draws.shape)
    return np.asarray(ndtri((ranks - 0.375) / (draws.size + 0.25)))


def _rhat(draws: np.ndarray) -> float:
    n = draws.shape[1]
    within = draws.var(axis=1, ddof=1).mean()
    between = draws.mean(axis=1).var(ddof=1)
    if not within > 0.0:
        return float("nan") if between == 0.0 else float("inf")
    return float(np.sqrt((n - 1.0) / n + between / within))


def longest_stay(chain: Any) -> int:
    """Largest number of consecutive steps that any walker of ``chain`` spent in one place."""
    longest, carried = 0, None
    for block in chain.blocks():
        accepted = block.accepted
        if carried is None:
            carried = np.zeros(accepted.shape[1], dtype=np.int64)
        position = np.arange(1, len(accepted) + 1)[:, None]
        last_move = np.maximum.accumulate(np.where(accepted, position, 0), axis=0)
        stay = position - last_move + np.where(last_move == 0, carried, 0)
        longest = max(longest, int(stay.max(initial=0)))
        carried = stay[-1]
    return longest


def ensemble_series(draws: np.ndarray, ensembles: np.ndarray) -> np.ndarray:
    """Walkers' draws (steps, walkers) as one series per ensemble (ensembles, steps x walkers each)."""
    labels = np.unique(ensembles)
    return np.stack([draws[:, ensembles == label].reshape(-1) for label in labels])


def rhat_of(thinned: ThinnedChain) -> np.ndarray:
    """R-hat of every parameter over the ensembles (n,)."""
    steps, walkers, n = thinned.samples.shape
    stride = max(1, steps * walkers // _RANKED_VALUES)
    samples = thinned.samples[::stride]
    return np.array(
        [rank_normalised_rhat(ensemble_series(samples[:, :, k], thinned.ensembles)) for k in range(n)]
    )


def effective_sizes(thinned: ThinnedChain) -> np.ndarray:
    """Effective sample size of every parameter (n,), for the whole chain.

    From the thinned samples; where thinning hides the autocorrelation (it is shorter than the stride),
    from the chain's unthinned last part.
    """
    steps, walkers, n = thinned.samples.shape
    sizes = np.empty(n)
    for k in range(n):
        size = effective_sample_size(np.ascontiguousarray(thinned.samples[:, :, k].T))
        tau = steps * walkers / size if size > 0 else np.nan
        if thinned.stride > 1 and tau < 2.0 and len(thinned.tail) >= 100:
            tail = effective_sample_size(np.ascontiguousarray(thinned.tail[:, :, k].T))
            size = thinned.steps * walkers * tail / (len(thinned.tail) * walkers)
        sizes[k] = size
    return sizes


@dataclass(frozen=True)
class Mixing:
    """How well a chain mixes: what both the stopping rule and the diagnosis judge it by.

    Attributes
    ----------
    steps : int
    effective_sample_size, autocorrelation_time, rhat : ndarray (n,)
    """

    steps: int
    effective_sample_size: np.ndarray
    autocorrelation_time: np.ndarray
    rhat: np.ndarray

    @property
    def slowest(self) -> int:
        """Index of the parameter with the longest autocorrelation time; one that never moved comes first."""
        tau = self.autocorrelation_time
        return int(np.argmax(np.where(np.isfinite(tau), tau, np.inf)))

    def status(self, margin: float = 1.0) -> Status:
        """Whether the autocorrelation times can be relied on; a margin above one asks for a longer chain."""
        longest = float(self.autocorrelation_time[self.slowest]) * margin
        if not np.isfinite(longest) or self.steps < TENTATIVE_TAUS * longest:
            return "unusable"
        return "reliable" if self.steps >= RELIABLE_TAUS * longest else "tentative"

    @property
    def agree(self) -> bool:
        """Whether the ensembles agree in every parameter."""
        return bool(np.all(self.rhat <= RHAT_LIMIT))


def mixing(thinned: ThinnedChain) -> Mixing:
    """Work out how well a chain mixes."""
    sizes = effective_sizes(thinned)
    tau = thinned.steps * len(thinned.ensembles) / sizes
    return Mixing(thinned.steps, sizes, tau, rhat_of(thinned))


def diagnose(
    chain: Any,
    *,
    thinned: ThinnedChain | None = None,
    density: Any = None,
    width_check: WidthCheck | None = None,
    extra: Sequence[str] = (),
) -> Diagnostics:
    """Diagnose a stored chain.

    Parameters
    ----------
    chain : ChainFile or MemoryChain
    thinned : ThinnedChain, optional
        Already read samples of it.
    density : StudentMixture, optional
        Its components are the modes.
    width_check : WidthCheck, optional
    extra : sequence of str
        Further complaints that make the chain invalid.

    Returns
    -------
    Diagnostics
    """
    thinned = ThinnedChain.read(chain) if thinned is None else thinned
    names = tuple(chain.parameter_names)
    walkers = len(thinned.ensembles)
    steps = thinned.steps
    found = mixing(thinned)
    sizes, tau, rhat = found.effective_sample_size, found.autocorrelation_time, found.rhat
    n_ensembles = len(np.unique(thinned.ensembles))
    shares: tuple[float, ...] = (1.0,)
    if density is not None and len(thinned.samples):
        flat = thinned.samples.reshape(-1, len(names))
        labels = density.nearest(flat[:: max(1, len(flat) // 20_000)])
        counts = np.bincount(labels, minlength=len(density.weights))
        shares = tuple(float(c) for c in counts / counts.sum())
    stay = longest_stay(chain)
    acceptance = float(np.mean(chain.accepted) / steps) if steps else 0.0
    verdict, advice = _judge(names, found, n_ensembles, acceptance, stay, width_check, extra)
    return Diagnostics(
        names, steps, walkers, n_ensembles, tau, found.status(), sizes, rhat, acceptance, stay, shares,
        width_check, not advice, verdict, advice,
    )  # fmt: skip


def _judge(
    names: tuple[str, ...],
    found: Mixing,
    n_ensembles: int,
    acceptance: float,
    stay: int,
    width_check: WidthCheck | None,
    extra: Sequence[str],
) -> tuple[str, tuple[str, ...]]:
    advice: list[str] = list(extra)
    steps, rhat, worst = found.steps, found.rhat, found.slowest
    longest = float(found.autocorrelation_time[worst])
    if found.status() != "reliable":
        need = (
            f"at least {int(np.ceil(RELIABLE_TAUS * longest))} steps"
            if np.isfinite(longest)
            else "more steps"
        )
        advice.append(
            f"run longer: {steps} steps are {steps / longest:.1f} autocorrelation times of {names[worst]}; "
            f"{need} are needed"
            if np.isfinite(longest)
            else f"run longer: {names[worst]} has not moved in {steps} steps"
        )
    if n_ensembles > 1:
        apart = int(np.argmax(np.where(np.isfinite(rhat), rhat, np.inf)))
        if not found.agree:
            advice.append(
                f"the {n_ensembles} ensembles disagree in {names[apart]} (R-hat {rhat[apart]:.3f} > {RHAT_LIMIT}): "
                "run longer; if it stays, a second solution is not connected - start from all minima of the fit"
            )
    else:
        advice.append("use at least two ensembles: a single one cannot show that it missed something")
    if stay > max(100.0, 20.0 * longest) or (stay > 100 and stay > 0.2 * steps):
        advice.append(
            f"a walker sat still for {stay} of {steps} steps while the autocorrelation time reads {longest:.0f}: "
            "the proposal underrates a tail; start a new chain from more modes, with another seed"
        )
    if width_check is not None and width_check.suspicious.any():
        k = int(np.argmax(np.abs(width_check.significance) * width_check.suspicious))
        advice.append(
            f"{names[k]} is {width_check.ratio[k]:.3f} times as wide as in a short control run that moves in small "
            "steps only: "
            "run longer and compare again"
        )
    if acceptance < 0.02:
        advice.append(f"only {acceptance:.1%} of the proposals are accepted: check the modes and the bounds")
    sizes = found.effective_sample_size
    smallest = np.nanmin(sizes) if np.isfinite(sizes).any() else float("nan")
    if not advice:
        verdict = (
            f"The chain can be used: {smallest:.0f} effective samples in the slowest parameter, "
            f"{n_ensembles} ensembles agree."
        )
    else:
        verdict = f"Do not use this chain yet: {advice[0]}."
    return verdict, tuple(advice)
