"""Standardised residuals, whitening, derivatives and pseudo-data against closed forms and numpy."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from fitcore.minimise.derivatives import Dual
from likelihoods import Terms
from observables.errors import InputError

errors = st.floats(1e-3, 1e3)
normal = st.floats(-7.9, 7.9)


def one(plus: float, minus: float, value: float = 0.0, period: float | None = None) -> Terms:
    return Terms([value], [plus], [minus], periods=[period])


def random_correlation(rng: np.random.Generator, size: int) -> np.ndarray:
    root = rng.standard_normal((size, size + 2))
    covariance = root @ root.T
    scale = np.sqrt(np.diagonal(covariance))
    correlation = covariance / np.outer(scale, scale)
    np.fill_diagonal(correlation, 1.0)
    return (correlation + correlation.T) / 2.0


@pytest.fixture
def mixed() -> Terms:
    """Seven terms: two blocks, asymmetric members, one angle."""
    rng = np.random.default_rng(5)
    correlation = np.eye(7)
    correlation[np.ix_([0, 2, 5], [0, 2, 5])] = random_correlation(rng, 3)
    correlation[np.ix_([1, 6], [1, 6])] = random_correlation(rng, 2)
    plus = [1.0, 0.5, 2.0, 0.1, 3.0, 0.7, 1.2]
    minus = [1.0, 0.9, 1.5, 0.1, 3.0, 0.7, 0.4]
    return Terms(
        [0.0, 1.0, 2.0, 3.0, 170.0, 5.0, 6.0],
        plus,
        minus,
        correlation,
        [None, None, None, None, 360.0, None, None],
    )


class TestAsymmetric:
    @given(errors, errors)
    def test_one_standard_deviation_at_the_quoted_errors(self, plus: float, minus: float) -> None:
        terms = one(plus, minus)
        # Rounding grows with the ratio of the two errors: V + V' d cancels to the square of the smaller one.
        up, down = terms.standardised([[plus, -minus]])[0]
        assert_allclose([up, down], [1.0, -1.0], rtol=1e-14 * max(plus / minus, minus / plus))

    @given(errors, errors, st.lists(st.floats(-1e6, 1e6), min_size=2, max_size=20, unique=True))
    def test_rises_and_stays_finite_everywhere(self, plus: float, minus: float, points: list[float]) -> None:
        d = np.sort(np.array(points)) * min(plus, minus)
        u = one(plus, minus).standardised(d[None])[0]
        assert np.isfinite(u).all()
        assert (np.diff(u) >= 0.0).all()

    @given(errors, errors)
    def test_joins_its_tangent_smoothly(self, plus: float, minus: float) -> None:
        terms = one(plus, minus)
        edge = -8.0 * np.sign(plus - minus)
        if edge == 0.0:
            return
        at = -terms.measured_at([0.0], [edge])  # the prediction at which u = edge
        step = 1e-6 * abs(at + plus * minus / (plus - minus))  # small against the distance to the singularity
        around = np.concatenate([at - step, at, at + step])
        u = terms.standardised(around[None])[0]
        slope = terms.standardised_derivative(around[None])[0]
        assert_allclose(u[1], edge, rtol=1e-8)
        assert_allclose(slope, slope[1], rtol=1e-5)

    def test_written_out(self) -> None:
        """The linear-variance form at one point, with its numbers written out."""
        # V = 3.7 * 3.0 = 11.1, V' = 0.7, d = 2: u = 2 / sqrt(12.5)
        assert_allclose(one(3.7, 3.0, 84.1).standardised([86.1]), [2.0 / np.sqrt(12.5)], rtol=1e-13)

    def test_equal_errors_are_gaussian(self) -> None:
        assert_allclose(one(0.2, 0.2, 1.0).standardised([1.5]), [2.5])

    @given(errors, errors, normal)
    def test_inverse(self, plus: float, minus: float, u: float) -> None:
        terms = one(plus, minus)
        measured = terms.measured_at([0.0], [u])
        again = terms.standardised([0.0], measured)
        ratio = max(plus / minus, minus / plus)
        assert_allclose(again, [u], rtol=1e-11 * ratio, atol=1e-14)

    @pytest.mark.parametrize("u", [-30.0, -8.5, 8.5, 30.0])
    @pytest.mark.parametrize(("plus", "minus"), [(1.0, 0.5), (0.5, 1.0)])
    def test_inverse_on_the_tangent(self, plus: float, minus: float, u: float) -> None:
        terms = one(plus, minus)
        assert_allclose(terms.standardised([0.0], terms.measured_at([0.0], [u])), [u], rtol=1e-12)


class TestDerivative:
    @given(errors, errors, normal)
    def test_central_difference(self, plus: float, minus: float, u: float) -> None:
        terms = one(plus, minus)
        d = -terms.measured_at([0.0], [u])
        ratio = max(plus / minus, minus / plus)
        if ratio > 30.0:
            return  # differences lose all digits next to the singularity
        step = 1e-5 * min(plus, minus) / ratio
        low, high = terms.standardised(np.concatenate([d - step, d + step])[None])[0]
        assert_allclose(terms.standardised_derivative(d), [(high - low) / (2.0 * step)], rtol=1e-5)

    @given(errors, errors, normal)
    def test_complex_step(self, plus: float, minus: float, u: float) -> None:
        """The formula continued into the complex plane: exact to rounding."""
        terms = one(plus, minus)
        if plus == minus:
            return
        d = float(-terms.measured_at([0.0], [u])[0])
        if (u + 7.9 * np.sign(plus - minus)) * np.sign(plus - minus) < 0.0:
            return
        v, slope = plus * minus, plus - minus
        shifted = complex(d, 1e-30)
        exact = (shifted / np.sqrt(v + slope * shifted)).imag / 1e-30
        assert_allclose(terms.standardised_derivative([d]), [exact], rtol=1e-9)

    def test_batch(self, mixed: Terms) -> None:
        rng = np.random.default_rng(0)
        predictions = mixed.values[:, None] + rng.standard_normal((7, 50))
        step = 1e-6
        difference = mixed.standardised(predictions + step) - mixed.standardised(predictions - step)
        assert_allclose(mixed.standardised_derivative(predictions), difference / (2 * step), rtol=1e-6)

    def test_row(self, mixed: Terms) -> None:
        predictions = mixed.values[:, None] + np.linspace(-20.0, 20.0, 81)
        whole, slopes = mixed.standardised(predictions), mixed.standardised_derivative(predictions)
        for row in range(7):
            assert_array_equal(mixed.standardised_row(row, predictions[row]), whole[row])
            assert_array_equal(mixed.derivative_row(row, predictions[row]), slopes[row])
            measured = mixed.values[row] + 1.0
            replaced = np.tile(mixed.values[:, None], 81)
            replaced[row] = measured
            assert_array_equal(
                mixed.standardised_row(row, predictions[row], measured),
                mixed.standardised(predictions, replaced)[row],
            )
            assert_array_equal(
                mixed.derivative_row(row, predictions[row], measured),
                mixed.standardised_derivative(predictions, replaced)[row],
            )
        assert isinstance(float(mixed.standardised_row(1, 1.5)), float)
        assert np.shape(mixed.derivative_row(1, 1.5)) == ()


def test_row_of_arrays_that_carry_derivatives(mixed: Terms) -> None:
    for row in range(7):
        predictions = mixed.values[row] + np.linspace(-20.0, 20.0, 41)
        dual = mixed.standardised_row(row, Dual(predictions, (3,), np.ones((1, 41))))
        assert_array_equal(dual.value, mixed.standardised_row(row, predictions))
        assert_allclose(
            np.broadcast_to(dual.tangents[0], 41), mixed.derivative_row(row, predictions), rtol=1e-11
        )


class TestPeriod:
    @given(st.floats(-1000.0, 1000.0), st.integers(-3, 3))
    def test_same_after_whole_turns(self, prediction: float, turns: int) -> None:
        terms = one(2.0, 2.0, 350.0, 360.0)
        u = terms.standardised([prediction])
        assert abs(u[0]) <= 90.0
        difference = abs(u[0] - terms.standardised([prediction + 360.0 * turns])[0])
        assert min(difference, 180.0 - difference) < 1e-9  # the two ends of the interval are one point

    def test_ends_of_the_interval(self) -> None:
        terms = one(1.0, 1.0, 0.0, 360.0)
        assert_array_equal(
            terms.standardised([[180.0, -180.0, 181.0, 540.0, 0.0]])[0], [180.0, 180.0, -179.0, 180.0, 0.0]
        )

    def test_across_zero(self) -> None:
        assert_allclose(one(2.0, 1.0, 359.0, 360.0).standardised([1.0]), [1.0])


class TestWhitening:
    def test_quadratic_form(self, mixed: Terms) -> None:
        u = np.random.default_rng(1).standard_normal((7, 40))
        expected = np.einsum("ib,ij,jb->b", u, np.linalg.inv(mixed.correlation), u)
        assert_allclose((mixed.whiten(u) ** 2).sum(axis=0), expected, rtol=1e-12)

    def test_is_the_inverse_cholesky_factor(self, mixed: Terms) -> None:
        u = np.random.default_rng(1).standard_normal(7)
        assert_allclose(
            mixed.whiten(u), np.linalg.solve(np.linalg.cholesky(mixed.correlation), u), rtol=1e-12
        )

    def test_blocks(self, mixed: Terms) -> None:
        assert [block.indices.tolist() for block in mixed.correlation_blocks] == [[0, 2, 5], [1, 6]]
        for block in mixed.correlation_blocks:
            assert_allclose(block.cholesky @ block.cholesky.T, block.correlation, rtol=1e-14)
            assert_allclose(block.inverse @ block.correlation, np.eye(len(block.indices)), atol=1e-13)

    def test_no_blocks_without_correlation(self) -> None:
        terms = Terms([1.0, 2.0], [0.1, 0.1], [0.1, 0.1])
        assert terms.correlation_blocks == ()
        assert_array_equal(terms.whiten([1.0, 2.0]), [1.0, 2.0])

    def test_batch_equals_points_to_the_bit(self, mixed: Terms) -> None:
        predictions = mixed.values[:, None] + np.random.default_rng(2).standard_normal((7, 33))
        batch = mixed.whiten(mixed.standardised(predictions))
        for b in range(33):
            assert_array_equal(mixed.whiten(mixed.standardised(predictions[:, b])), batch[:, b])
        assert_array_equal(mixed.whiten(mixed.standardised(predictions[:, 5:9])), batch[:, 5:9])

    def test_more_axes(self, mixed: Terms) -> None:
        u = np.random.default_rng(3).standard_normal((7, 4, 5))
        assert_array_equal(mixed.whiten(u)[:, 2, 3], mixed.whiten(u[:, 2, 3]))

    def test_arguments_stay_untouched(self, mixed: Terms) -> None:
        predictions = np.array(mixed.values) + 1.0
        u = mixed.standardised(predictions)
        before = u.copy()
        mixed.whiten(u)
        assert_array_equal(u, before)
        assert_array_equal(predictions, mixed.values + 1.0)


class TestPseudoData:
    def test_residuals_are_the_deviates_thrown(self, mixed: Terms) -> None:
        truth = mixed.values + 0.3
        measured = mixed.pseudo_data(truth, 500, np.random.default_rng(7))
        z = np.random.default_rng(7).standard_normal((500, 7))
        r = mixed.whiten(mixed.standardised(np.tile(truth[:, None], 500), measured.T))
        assert_allclose(r.T, z, rtol=1e-9, atol=1e-10)

    @pytest.mark.stat
    def test_moments(self, mixed: Terms) -> None:
        """20,000 throws against the exact mean and covariance; false alarms below 1e-4 (4.5 sigma, 14 numbers)."""
        size = 20_000
        truth = mixed.values.copy()
        d = truth - mixed.pseudo_data(truth, size, 11)
        # d = [V' z^2 + z sqrt(V'^2 z^2 + 4 V)] / 2, of which the second part is odd: mean V'/2
        mean = (mixed.plus - mixed.minus) / 2.0
        # <d^2> = <V'^2 z^4 + V z^2 (+ odd)> with <z^4> = 3: [2 V'^2 z^4 + 4 V z^2] / 4
        second = 1.5 * (mixed.plus - mixed.minus) ** 2 + mixed.plus * mixed.minus
        spread = np.sqrt(second - mean**2)
        assert (np.abs(d.mean(axis=0) - mean) < 4.5 * spread / np.sqrt(size)).all()
        gaussian = mixed.plus == mixed.minus
        error = mixed.plus / np.sqrt(2.0 * size)
        assert (np.abs(d.std(axis=0) - spread) < 4.5 * error)[gaussian].all()
        u = mixed.standardised(np.tile(truth[:, None], size), (truth - d).T)
        assert_allclose(np.corrcoef(u), mixed.correlation, atol=4.5 / np.sqrt(size))

    def test_seeds(self, mixed: Terms) -> None:
        assert_array_equal(
            mixed.pseudo_data(mixed.values, 3, 4),
            mixed.pseudo_data(mixed.values, 3, np.random.default_rng(4)),
        )
        assert mixed.pseudo_data(mixed.values, 0, 4).shape == (0, 7)

    def test_wrong_shape(self, mixed: Terms) -> None:
        with pytest.raises(InputError, match=r"shape \(7,\)"):
            mixed.pseudo_data(np.zeros((2, 7)), 3)


def test_nan_passes_through(mixed: Terms) -> None:
    predictions = np.full((7, 2), np.nan)
    assert np.isnan(mixed.standardised(predictions)).all()
    assert np.isnan(mixed.standardised_derivative(predictions)).all()


def test_degrees_of_freedom(mixed: Terms) -> None:
    assert mixed.degrees_of_freedom == 7


@pytest.mark.parametrize(
    ("plus", "correlation", "message"),
    [
        ([1.0, 0.0], None, "positive"),
        ([1.0, np.inf], None, "finite"),
        ([1.0], None, "one length"),
        ([1.0, 1.0], np.eye(3), "2 x 2"),
        ([1.0, 1.0], [[1.0, 1.2], [1.2, 1.0]], "lowest eigenvalue -0.2"),
        ([1.0, 1.0], [[1.0, 0.2], [0.1, 1.0]], "not symmetric"),
    ],
)
def test_unusable(plus: list[float], correlation: object, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Terms([0.0, 0.0], plus, [1.0] * len(plus), correlation)
