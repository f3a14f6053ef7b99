import numpy as np
import pytest

pytest.importorskip("emcee")

from fitcore.sampling.chain_format import ChainHeader
from fitcore.sampling.diagnostics import (
    Mixing,
    WidthCheck,
    diagnose,
    effective_sample_size,
    longest_stay,
    rank_normalised_rhat,
)
from fitcore.sampling.memory_chain import MemoryChain
from fitcore.sampling.thinned import ThinnedChain


def autoregressive(rho, chains, n, seed=0):
    rng = np.random.default_rng(seed)
    noise = rng.normal(size=(n, chains)) * np.sqrt(1 - rho**2)
    x = np.empty((n, chains))
    x[0] = rng.normal(size=chains)
    for t in range(1, n):
        x[t] = rho * x[t - 1] + noise[t]
    return x.T


def stored(samples, accepted=None, block_steps=64):
    """A chain in memory that holds ``samples`` (steps, walkers, n), two ensembles."""
    from emcee.state import State

    steps, walkers, n = samples.shape
    chain = MemoryChain(
        ChainHeader(tuple(f"p{i}" for i in range(n)), tuple(np.repeat([0, 1], walkers // 2)), "f"),
        block_steps=block_steps,
    )
    chain.grow(steps, None)
    for t in range(steps):
        moved = np.ones(walkers, dtype=bool) if accepted is None else accepted[t]
        chain.save_step(State(samples[t], log_prob=np.zeros(walkers)), moved)
    return chain


@pytest.mark.stat
@pytest.mark.parametrize("rho", [0.0, 0.5, 0.9])
def test_effective_size_of_an_autoregressive_chain(rho):
    # tau = (1 + rho)/(1 - rho) exactly; the estimate scatters by 2 % here.
    x = autoregressive(rho, 40, 5000)
    assert effective_sample_size(x) == pytest.approx(x.size * (1 - rho) / (1 + rho), rel=0.1)


@pytest.mark.parametrize("rho", [-0.3, 0.0, 0.5, 0.9, 0.99])
@pytest.mark.parametrize("shape", [(4, 1000), (3, 501), (50, 200)])
def test_agrees_with_arviz(rho, shape):
    arviz = pytest.importorskip("arviz")
    x = autoregressive(rho, *shape, seed=int(100 * rho) + 50)
    half = shape[1] // 2
    split = np.concatenate([x[:, :half], x[:, -half:]])
    assert effective_sample_size(split) == pytest.approx(float(arviz.ess(x, method="mean")), rel=1e-3)
    assert rank_normalised_rhat(x) == pytest.approx(float(arviz.rhat(x)), rel=1e-9)


def test_rhat_sees_what_the_mean_does_not():
    rng = np.random.default_rng(1)
    shifted = rng.normal(size=(4, 2000)) + np.array([0, 0, 0, 0.5])[:, None]
    wider = rng.normal(size=(4, 2000)) * np.array([1, 1, 1, 2])[:, None]
    assert rank_normalised_rhat(rng.normal(size=(4, 2000))) < 1.01
    assert rank_normalised_rhat(shifted) > 1.01
    assert rank_normalised_rhat(wider) > 1.01


def test_too_little_to_say():
    assert np.isnan(effective_sample_size(np.zeros((3, 2))))
    assert np.isnan(effective_sample_size(np.zeros((3, 20))))
    assert np.isnan(rank_normalised_rhat(np.zeros((3, 2))))


@pytest.mark.parametrize("block_steps", [1, 7, 64, 1000])
def test_longest_stay_runs_across_blocks(block_steps):
    accepted = np.ones((200, 4), dtype=bool)
    accepted[30:151, 2] = False
    accepted[0:50, 1] = False
    chain = stored(np.zeros((200, 4, 1)), accepted, block_steps)
    assert longest_stay(chain) == 121


@pytest.mark.parametrize(
    ("steps", "margin", "status"),
    [(420, 1.05, "reliable"), (419, 1.05, "tentative"), (400, 1.0, "reliable"), (99, 1.0, "unusable")],
)
def test_status_of_a_length(steps, margin, status):
    mixing = Mixing(steps, np.array([50.0, 90.0]), np.array([10.0, 5.0]), np.array([1.0, 1.0]))
    assert mixing.status(margin) == status


def test_parameter_that_never_moved_counts_as_the_slowest():
    mixing = Mixing(500, np.array([90.0, np.nan]), np.array([5.0, np.nan]), np.array([1.0, np.nan]))
    assert mixing.slowest == 1
    assert mixing.status() == "unusable"
    assert not mixing.agree


def test_good_chain_is_called_good():
    samples = np.random.default_rng(2).normal(size=(400, 20, 2))
    result = diagnose(stored(samples))
    assert result.valid
    assert result.status == "reliable"
    assert result.verdict.startswith("The chain can be used: ")
    assert result.advice == ()
    assert result.to_dict()["parameters"]["p1"]["rhat"] < 1.01


def test_short_chain_is_called_short():
    samples = autoregressive(0.97, 20, 400).T[:, :, None]
    result = diagnose(stored(samples))
    assert not result.valid
    assert result.status in ("tentative", "unusable")
    assert "run longer" in result.advice[0]
    assert "steps are needed" in result.advice[0]


def test_stuck_walker_is_reported():
    """One walker still for nearly the whole run, as seen with an independence move alone."""
    rng = np.random.default_rng(3)
    samples = rng.normal(size=(2000, 100, 1))
    samples[100:1950, 7] = 4.0
    accepted = np.ones((2000, 100), dtype=bool)
    accepted[101:1950, 7] = False
    result = diagnose(stored(samples, accepted))
    assert result.longest_stay == 1849
    assert not result.valid
    assert any("sat still for 1849 of 2000 steps" in line for line in result.advice)


def test_ensembles_in_different_places_are_reported():
    samples = np.random.default_rng(4).normal(size=(500, 20, 1))
    samples[:, 10:] += 0.4
    result = diagnose(stored(samples))
    assert not result.valid
    assert any("disagree in p0" in line for line in result.advice)


def test_wrong_width_is_reported():
    samples = np.random.default_rng(5).normal(size=(400, 20, 1))
    check = WidthCheck(np.array([0.91]), np.array([-8.0]), 500)
    result = diagnose(stored(samples), width_check=check)
    assert any("0.910 times as wide" in line for line in result.advice)
    assert not WidthCheck(np.array([0.99]), np.array([-8.0]), 500).suspicious.any()


@pytest.mark.stat
@pytest.mark.parametrize("rho", [0.0, 0.6, 0.98])
def test_thinning_keeps_the_effective_size(rho):
    samples = autoregressive(rho, 20, 4000).T[:, :, None]
    chain = stored(samples)
    whole = diagnose(chain).effective_sample_size[0]
    thinned = ThinnedChain.read(chain, max_values=20 * 500)
    assert thinned.stride == 8
    assert len(thinned.samples) == 500
    np.testing.assert_array_equal(thinned.samples[3], samples[24])
    np.testing.assert_array_equal(thinned.tail, samples[-len(thinned.tail) :])
    assert diagnose(chain, thinned=thinned).effective_sample_size[0] == pytest.approx(whole, rel=0.35)
