import numpy as np
import pytest

emcee = pytest.importorskip("emcee")

from fitcore.sampling.mixture import StudentMixture, regularised  # noqa: E402
from fitcore.sampling.moves import DifferentialEvolution, IndependenceMove, SnookerMove  # noqa: E402
from fitcore.sampling.scales import Scales, chosen_scales  # noqa: E402

N = 14
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
    return StudentMixture([1.0], np.full((1, N), shift), np.eye(N)[None], degrees, Scales.linear(N))


@pytest.mark.stat
@pytest.mark.parametrize(
    ("make", "steps", "tolerance"),
    [
        (lambda: DifferentialEvolution(4), 1000, TOLERANCE),
        (lambda: DifferentialEvolution(1, jumps=0.0, scatter=0.0), 1500, TOLERANCE),
        (lambda: SnookerMove(4), 4000, TOLERANCE),
        (lambda: IndependenceMove(shifted_mixture()), 300, TOLERANCE),
    ],
    ids=["differential-evolution", "differential-evolution-plain", "snooker", "independence"],
)
def test_each_move_alone_leaves_a_gaussian_in_14_dimensions_as_it_is(make, steps, tolerance):
    # The Monte Carlo error is at most 0.0015: walkers x steps x 14 / tau, with tau up to 170 (snooker).
    assert standard_deviation(make(), steps) == pytest.approx(1.0, abs=tolerance)


@pytest.mark.stat
def test_the_snooker_move_of_emcee_fails_the_same_test():
    # emcee 3.1.6 divides by the square root of the distance and halves the exponent of the Jacobian.
    assert (
        emcee.__version__ != "3.1.6"
        or standard_deviation(emcee.moves.DESnookerMove(), 250, walkers=200) < 1.0 - 5 * TOLERANCE
    )


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
            40,
            3,
            unit_gaussian,
            moves=[(DifferentialEvolution(2), 0.5), (SnookerMove(2), 0.5)],
            vectorize=True,
        )
        sampler.run_mcmc(
            emcee.State(coords, random_state=random.get_state()), 50, skip_initial_state_check=True
        )
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
        a = 0.3 * rng.normal(size=(3, 3))
        scales = Scales(np.array([0, 2, 1]), np.array([-np.inf, 0.0, 0.0]), np.array([np.inf, 2.0, np.inf]))
        covariances = np.array([a @ a.T + 0.1 * np.eye(3), 0.2 * np.eye(3)])
        return StudentMixture([0.3, 0.7], [[0.0, 0.5, 1.0], [6.0, -0.5, 0.0]], covariances, 5.0, scales)

    def test_density_is_that_of_scipy(self):
        from scipy.stats import multivariate_t

        mixture = shifted_mixture(0.3, 6.0)
        x = np.random.default_rng(1).normal(size=(50, N))
        expected = multivariate_t(np.full(N, 0.3), np.eye(N), df=6.0).logpdf(x)
        np.testing.assert_allclose(mixture.log_density(x), expected, rtol=1e-12)

    @pytest.mark.stat
    def test_density_integrates_to_one_and_describes_its_draws(self):
        # E_g[h/g] = 1 for any normalised h: Gaussian in 0, uniform in 1, log-normal in 2.
        mixture = self.mixture()
        x = mixture.draw(200_000, np.random.default_rng(2))
        log_h = -0.5 * ((x[:, 0] - 4.0) / 2.0) ** 2 - 0.5 * ((np.log(x[:, 2]) - 0.4) / 0.5) ** 2
        log_h += -np.log(2 * np.pi * 2.0 * 0.5) - np.log(x[:, 2]) - np.log(2.0)
        ratio = np.exp(log_h - mixture.log_density(x))
        assert ratio.mean() == pytest.approx(1.0, abs=5 * ratio.std() / np.sqrt(len(x)))
        assert x[:, 1].min() > 0
        assert x[:, 1].max() < 2
        assert x[:, 2].min() > 0

    def test_survives_storage(self):
        mixture = self.mixture()
        again = StudentMixture.from_arrays(mixture.arrays())
        x = mixture.draw(10, np.random.default_rng(3))
        np.testing.assert_array_equal(mixture.log_density(x), again.log_density(x))

    def test_scales_round_trip_with_their_jacobian(self):
        scales = Scales(
            np.array([2, 1, 0, 2]), np.array([0.0, 0.0, -np.inf, -1.0]), np.array([1.0, 9.0, np.inf, 1.0])
        )
        x = np.array([[1e-9, 2.0, -7.0, 0.3], [0.5, 1e-3, 4.0, -0.999]])
        y, log_jacobian = scales.scaled(x)
        np.testing.assert_allclose(scales.unscaled(y), x, rtol=1e-9)
        h = 1e-6
        for row in range(2):
            determinant = 1.0
            for k in range(4):
                step = np.zeros(4)
                step[k] = h * y[row, k] if y[row, k] else h
                up, down = scales.unscaled((y[row] + step)[None]), scales.unscaled((y[row] - step)[None])
                determinant *= 2 * step[k] / (up - down)[0, k]
            assert log_jacobian[row] == pytest.approx(np.log(determinant), abs=1e-5)

    def test_scales_are_chosen_by_width_and_bounds(self):
        inf = np.inf
        chosen = chosen_scales(
            np.array([1.0, 1.0, 1.0, 0.5, 1.0]), np.array([0.1, 0.5, 0.1, 0.3, np.nan]),
            np.array([0.0, 0.0, -inf, 0.0, 0.0]), np.array([inf, inf, inf, 1.0, 2.0]),
        )  # fmt: skip
        assert chosen.kinds.tolist() == [1, 0, 0, 2, 2]

    @pytest.mark.stat
    def test_refit_finds_two_modes_and_their_weights(self):
        mixture = self.mixture()
        x = mixture.draw(50_000, np.random.default_rng(4))
        again = StudentMixture.from_draws(x, mixture.nearest(x), mixture.scales.lower, mixture.scales.upper)
        assert again.weights == pytest.approx([0.3, 0.7], abs=0.05)

    def test_regularised_repairs_what_a_fit_may_hand_over(self):
        broken = np.array([[4.0, 1.0, np.nan], [1.0, 0.25, 0.0], [np.nan, 0.0, np.inf]])
        mended = regularised(broken, np.array([1.0, 1.0, 3.0]))
        assert np.linalg.eigvalsh(mended).min() > 0
        np.testing.assert_allclose(np.diagonal(mended), [4.0, 0.25, 9.0], rtol=1e-6)
        good = np.array([[2.0, 0.3], [0.3, 1.0]])
        np.testing.assert_allclose(regularised(good, np.ones(2)), good, rtol=1e-12)
