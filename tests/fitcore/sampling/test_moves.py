import numpy as np
import pytest

emcee = pytest.importorskip("emcee")

from fitcore.sampling.mixture import StudentMixture, from_probit, to_probit  # noqa: E402
from fitcore.sampling.moves import DifferentialEvolution, IndependenceMove, SnookerMove  # noqa: E402

N = 14
FREE = np.full(N, np.inf)
TOLERANCE = 0.005


def unit_gaussian(theta):
    return -0.5 * np.einsum("ij,ij->i", theta, theta)


def standard_deviation(move, steps, walkers=800, seed=3, log_density=unit_gaussian):
    """Root mean square over 14 dimensions of a chain that starts in the target."""
    random = np.random.RandomState(np.random.MT19937(np.random.SeedSequence(seed)))
    sampler = emcee.EnsembleSampler(walkers, N, log_density, moves=[move], vectorize=True)
    start = emcee.State(random.standard_normal((walkers, N)), random_state=random.get_state())
    sampler.run_mcmc(start, steps, skip_initial_state_check=True)
    return float(np.sqrt(np.mean(sampler.get_chain() ** 2)))


def shifted_mixture(shift=0.1, degrees=8.0):
    return StudentMixture([1.0], np.full((1, N), shift), np.eye(N)[None], degrees, -FREE, FREE, np.zeros(N, bool))


@pytest.mark.stat
@pytest.mark.parametrize(
    ("make", "steps"),
    [
        (lambda: DifferentialEvolution(4), 1500),
        (lambda: DifferentialEvolution(1, jumps=0.0, scatter=0.0), 1500),
        (lambda: SnookerMove(4), 4000),
        (lambda: IndependenceMove(shifted_mixture()), 300),
    ],
    ids=["differential-evolution", "differential-evolution-plain", "snooker", "independence"],
)
def test_each_move_alone_leaves_a_gaussian_in_14_dimensions_as_it_is(make, steps):
    # The Monte Carlo error is at most 0.0015: walkers x steps x 14 / tau, with tau up to 170 (snooker).
    assert standard_deviation(make(), steps) == pytest.approx(1.0, abs=TOLERANCE)


@pytest.mark.stat
def test_the_snooker_move_of_emcee_fails_the_same_test():
    # emcee 3.1.6 divides by the square root of the distance and halves the exponent of the Jacobian.
    assert emcee.__version__ != "3.1.6" or standard_deviation(
        emcee.moves.DESnookerMove(), 250, walkers=200
    ) < 1.0 - 5 * TOLERANCE


@pytest.mark.stat
def test_a_wrong_factor_is_seen():
    class WithoutJacobian(SnookerMove):
        def propose_given(self, active, others, random):
            proposal, _ = super().propose_given(active, others, random)
            return proposal, np.zeros(active.shape[:2])

    assert abs(standard_deviation(WithoutJacobian(4), 1000) - 1.0) > 5 * TOLERANCE


def test_ensembles_do_not_see_each_other():
    """Changing ensemble 1 changes nothing in ensemble 0."""

    def run(offset):
        random = np.random.RandomState(5)
        coords = np.random.default_rng(1).normal(size=(40, 3))
        coords[20:] = coords[20:] * offset + offset
        sampler = emcee.EnsembleSampler(
            40, 3, unit_gaussian, moves=[(DifferentialEvolution(2), 0.5), (SnookerMove(2), 0.5)], vectorize=True
        )
        sampler.run_mcmc(emcee.State(coords, random_state=random.get_state()), 50, skip_initial_state_check=True)
        return sampler.get_chain()

    a, b = run(1.0), run(3.0)
    np.testing.assert_array_equal(a[:, :20], b[:, :20])
    assert not np.array_equal(a[:, 20:], b[:, 20:])


@pytest.mark.stat
def test_periodic_parameter_is_uniform_over_its_period():
    random = np.random.RandomState(2)
    move = DifferentialEvolution(1, lower=np.zeros(2), periods=np.full(2, 360.0))

    def flat(theta):
        return np.where(((theta >= 0) & (theta <= 360)).all(axis=1), 0.0, -np.inf)

    sampler = emcee.EnsembleSampler(100, 2, flat, moves=[move], vectorize=True)
    start = emcee.State(random.uniform(0, 360, (100, 2)), random_state=random.get_state())
    sampler.run_mcmc(start, 2000, skip_initial_state_check=True)
    assert sampler.acceptance_fraction.min() == 1.0
    share = np.histogram(sampler.get_chain(flat=True)[:, 0], 12, (0, 360))[0] / 200_000
    np.testing.assert_allclose(share, 1 / 12, atol=5 * np.sqrt(1 / 12 / 20_000))


class TestMixture:
    def mixture(self):
        rng = np.random.default_rng(0)
        a = rng.normal(size=(3, 3))
        lower, upper = np.array([-np.inf, 0.0, -np.inf]), np.array([np.inf, 2.0, np.inf])
        boxed = np.array([False, True, False])
        scales = np.array([a @ a.T + np.eye(3), np.eye(3)])
        return StudentMixture([0.3, 0.7], [[0.0, 0.5, 1.0], [6.0, -0.5, 0.0]], scales, 5.0, lower, upper, boxed)

    def test_density_is_that_of_scipy(self):
        from scipy.stats import multivariate_t

        mixture = shifted_mixture(0.3, 6.0)
        x = np.random.default_rng(1).normal(size=(50, N))
        expected = multivariate_t(np.full(N, 0.3), np.eye(N), df=6.0).logpdf(x)
        np.testing.assert_allclose(mixture.log_density(x), expected, rtol=1e-12)

    @pytest.mark.stat
    def test_density_integrates_to_one_and_describes_its_draws(self):
        # E_g[h/g] = integral of h for any normalised h, here a Gaussian times a uniform.
        mixture = self.mixture()
        x = mixture.draw(200_000, np.random.default_rng(2))
        log_h = -0.5 * (x[:, 0] ** 2 + x[:, 2] ** 2) - np.log(2 * np.pi) - np.log(2.0)
        ratio = np.exp(log_h - mixture.log_density(x))
        assert ratio.mean() == pytest.approx(1.0, abs=5 * ratio.std() / np.sqrt(len(x)))
        assert x[:, 1].min() > 0
        assert x[:, 1].max() < 2

    def test_survives_storage(self):
        mixture = self.mixture()
        again = StudentMixture.from_arrays(mixture.arrays())
        x = mixture.draw(10, np.random.default_rng(3))
        np.testing.assert_array_equal(mixture.log_density(x), again.log_density(x))

    def test_probit_round_trip(self):
        lower, upper, boxed = np.array([0.0, -1.0]), np.array([1.0, 1.0]), np.array([True, True])
        x = np.array([[1e-9, 0.3], [0.5, -0.999]])
        y, _ = to_probit(x, lower, upper, boxed)
        np.testing.assert_allclose(from_probit(y, lower, upper, boxed), x, rtol=1e-9)

    @pytest.mark.stat
    def test_refit_finds_two_modes_and_their_weights(self):
        mixture = self.mixture()
        x = mixture.draw(50_000, np.random.default_rng(4))
        again = StudentMixture.from_draws(x, mixture.nearest(x), mixture.lower, mixture.upper, np.ones(3))
        assert again.weights == pytest.approx([0.3, 0.7], abs=0.05)
