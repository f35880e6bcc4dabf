import numpy as np
import pytest
from scipy.special import ndtr

from grading.given import counted
from sensorgrade.grading.conformity import (
    count_probability,
    guard_factor,
    probability_of_conformity,
)


def poisson_binomial(probabilities):
    """Exact distribution of a number of independent events, by convolution."""
    distribution = np.ones(1)
    for p in probabilities:
        distribution = np.convolve(distribution, [1 - p, p])
    return distribution


def count_of(probabilities):
    variance = np.sum(probabilities * (1 - probabilities))
    found = int(np.sum(probabilities > 0.5))
    return counted("hot_pixels", found, float(np.sum(probabilities)), float(np.sqrt(variance)))


def worst_error(probabilities):
    exact = np.cumsum(poisson_binomial(probabilities))
    count = count_of(probabilities)
    return max(abs(count_probability(count, at_most=n) - c) for n, c in enumerate(exact))


def test_a_range_is_the_difference_of_two_one_sided_probabilities():
    whole = probability_of_conformity(5.0, 0.5, lower=4.0, upper=5.5)
    above = probability_of_conformity(5.0, 0.5, lower=4.0)
    below = probability_of_conformity(5.0, 0.5, upper=5.5)
    assert whole == pytest.approx(above + below - 1, abs=1e-12)


def test_a_far_tail_keeps_its_digits():
    far = probability_of_conformity(0.0, 1.0, lower=9.0)
    assert far == pytest.approx(1.1285884059538324e-19, rel=1e-9)


def test_without_doubt_the_limit_itself_conforms():
    assert probability_of_conformity(5.0, 0.0, upper=5.0) == 1.0
    assert probability_of_conformity(5.1, 0.0, upper=5.0) == 0.0
    assert probability_of_conformity(5.0, 0.0, lower=5.0) == 1.0


def test_an_item_at_the_guarded_limit_conforms_with_the_confidence_asked():
    for confidence in (50.0, 80.0, 95.0, 99.0):
        reading = 5.0 - guard_factor(confidence) * 0.2
        found = probability_of_conformity(reading, 0.2, upper=5.0)
        assert found == pytest.approx(confidence / 100, abs=1e-12)


@pytest.mark.parametrize("low, high", [(0.0, 0.05), (0.95, 1.0)])
def test_counts_of_nearly_sure_pixels_agree_with_the_exact_sum(low, high):
    rng = np.random.default_rng(11)
    errors = [worst_error(rng.uniform(low, high, rng.integers(5, 60))) for _ in range(100)]
    assert max(errors) < 0.02


def test_counts_of_pixels_near_the_threshold_agree_with_the_exact_sum():
    rng = np.random.default_rng(12)
    errors = [worst_error(ndtr(rng.normal(0.0, 3.0, 200))) for _ in range(50)]
    assert np.mean(errors) < 0.02
    assert max(errors) < 0.05


def test_a_lower_bound_on_a_count_is_the_complement():
    count = count_of(np.linspace(0.1, 0.9, 20))
    at_least = count_probability(count, at_least=8)
    assert at_least == pytest.approx(1 - count_probability(count, at_most=7), abs=1e-12)
    # Half a defect does not exist: 7.5 asks for 8.
    assert count_probability(count, at_least=7.5) == at_least
    assert count_probability(count, at_most=7.5) == count_probability(count, at_most=7)


def test_the_probability_of_a_count_never_falls_as_the_limit_rises():
    for found, expected, doubt in ((3, 3.4, 1.1), (5, 4.2, 0.9), (0, 0.05, 0.22), (40, 40, 5.0)):
        count = counted("hot_pixels", found, expected, doubt)
        rising = [count_probability(count, at_most=n) for n in range(80)]
        assert np.all(np.diff(rising) >= 0)
        assert rising[0] >= 0.0
        assert rising[-1] == pytest.approx(1.0, abs=1e-9)
