"""Climbing and sampling, on densities whose answers are known."""

import numpy as np
import pytest

from habitat.trials.sampling import (
    ENOUGH_DRAWS,
    LEAST_ROUNDS,
    MOST_ROUNDS,
    WeightedDraws,
    importance_sample,
    laplace_spread,
    maximise,
)

MEAN = np.array([1.0, -2.0, 0.5])
COVARIANCE = np.array([[0.5, 0.2, 0.0], [0.2, 0.3, -0.05], [0.0, -0.05, 0.1]])
PRECISION = np.linalg.inv(COVARIANCE)


def gaussian(points):
    """Log density of the normal distribution above, up to a constant that is not zero."""
    away = points - MEAN
    return 7.0 - 0.5 * np.einsum("mi,ij,mj->m", away, PRECISION, away)


def moments(sample):
    """Mean and covariance of weighted draws."""
    mean = sample.weights @ sample.points
    away = sample.points - mean
    return mean, away.T @ (sample.weights[:, None] * away)


# --- climbing ----------------------------------------------------------------------------------------------------


def test_climb_ends_on_top_of_a_quadratic():
    step = 0.2
    point, value = maximise(gaussian, np.zeros(3), np.full(3, step), np.arange(3))
    # The climb ends where the gradient times the step is below 0.02, which leaves C g from the top of a Gaussian.
    left = 0.02 / step * np.abs(COVARIANCE).sum(axis=1)
    assert (np.abs(point - MEAN) < left).all()
    assert value == pytest.approx(7.0, abs=0.005)
    assert value == pytest.approx(gaussian(point[None])[0], abs=1e-12)


def test_what_may_not_move_stays_while_the_rest_climbs():
    start = np.array([0.0, -1.0, 0.0])
    point, _ = maximise(gaussian, start, np.full(3, 0.2), np.array([0, 2]))
    assert point[1] == start[1]
    # Conditional mean of a normal distribution: m_a + C_ab / C_bb (x_b - m_b), with x_b - m_b = 1.
    assert point[[0, 2]] == pytest.approx(MEAN[[0, 2]] + COVARIANCE[[0, 2], 1] / COVARIANCE[1, 1], abs=0.02)


def test_climb_takes_the_nearest_of_two_tops():
    def two_tops(points):
        return np.logaddexp(-0.5 * (points[:, 0] - 5.0) ** 2, 3.0 - 0.5 * (points[:, 0] + 5.0) ** 2)

    assert maximise(two_tops, np.array([4.0]), np.array([0.2]), np.array([0]))[0] == pytest.approx([5.0], abs=0.1)


# --- curvature ---------------------------------------------------------------------------------------------------


def test_curvature_of_a_gaussian_is_its_covariance():
    spread = laplace_spread(gaussian, MEAN, np.array([0.2, 0.1, 0.05]), np.full(3, 2.0))
    assert spread == pytest.approx(COVARIANCE, abs=1e-8)


def test_where_a_density_says_nothing_the_spread_stays_near_the_widest():
    def flat_in_second(points):
        return -0.5 * points[:, 0] ** 2 / 0.01

    spread = laplace_spread(flat_in_second, np.zeros(2), np.full(2, 0.1), np.array([1.0, 3.0]))
    assert spread[0, 0] == pytest.approx(0.01)
    # Curvature is held at half of that of the widest: twice its variance.
    assert spread[1, 1] == pytest.approx(2.0 * 3.0**2)


# --- sampling ----------------------------------------------------------------------------------------------------


def test_sample_of_a_gaussian_has_its_moments_from_a_poor_first_guess():
    sample = importance_sample(gaussian, MEAN + 1.0, 3.0 * np.eye(3))
    mean, covariance = moments(sample)
    sd = np.sqrt(np.diag(COVARIANCE))
    # Some thousand effective draws: standard error of a mean is 0.03 sd, of a covariance about 0.05.
    assert sample.effective_size > 1000
    assert (mean - MEAN) / sd == pytest.approx(np.zeros(3), abs=0.06)
    assert covariance / np.outer(sd, sd) == pytest.approx(COVARIANCE / np.outer(sd, sd), abs=0.1)


def test_sample_of_a_skewed_density_has_its_moments():
    # ln of a gamma variable of shape 4: density exp(4 x - e^x); digamma(4) = 1.2561177, trigamma(4) = 0.2838230
    # (Abramowitz & Stegun 1964, table 6.1 and 6.4.10).
    sample = importance_sample(lambda x: (4.0 * x - np.exp(x))[:, 0], np.array([np.log(4.0)]), np.array([[0.25]]))
    mean, covariance = moments(sample)
    assert mean == pytest.approx([1.2561177], abs=0.02)
    assert covariance[0] == pytest.approx([0.2838230], abs=0.02)


def test_weights_sum_to_one_and_an_added_constant_changes_nothing():
    sample = importance_sample(gaussian, MEAN, COVARIANCE)
    shifted = importance_sample(lambda x: gaussian(x) - 900.0, MEAN, COVARIANCE)
    assert sample.weights.sum() == pytest.approx(1.0)
    assert shifted.weights == pytest.approx(sample.weights, rel=1e-6)


def test_the_same_density_gives_the_same_draws():
    first, second = (importance_sample(gaussian, MEAN, COVARIANCE) for _ in range(2))
    assert np.array_equal(first.points, second.points)
    assert np.array_equal(first.weights, second.weights)


def test_sampling_stops_early_when_easy_and_at_the_last_round_when_hopeless():
    easy = importance_sample(gaussian, MEAN, COVARIANCE, draws=256)
    assert len(easy.weights) == 256 * LEAST_ROUNDS
    hopeless = importance_sample(lambda x: -1e6 * (x[:, 0] - 3.0) ** 2, np.zeros(1), np.eye(1), draws=2)
    assert len(hopeless.weights) == 2 * MOST_ROUNDS
    assert hopeless.effective_size < ENOUGH_DRAWS


@pytest.mark.parametrize(("weights", "size"), [([0.25] * 4, 4.0), ([1.0, 0.0, 0.0, 0.0], 1.0), ([0.5, 0.5, 0, 0], 2.0)])
def test_effective_size_counts_equal_weights(weights, size):
    assert WeightedDraws(np.zeros((4, 1)), np.array(weights)).effective_size == pytest.approx(size)
