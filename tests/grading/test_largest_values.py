import numpy as np
import pytest

from sensorgrade.grading.largest_values import count_at, largest_values

RNG = np.random.default_rng(6)
VALUES = RNG.exponential(0.5, (300, 400)).astype(np.float32)
DOUBTS = np.full(VALUES.shape, 0.1, np.float32)


def stored(kept):
    return largest_values(
        VALUES, DOUBTS, kind="hot_pixels", scope="device", unit="electron / s", kept=kept
    )


@pytest.mark.parametrize("threshold", [3.0, 3.5, 5.0])
def test_a_threshold_above_the_floor_counts_as_all_pixels_would(threshold):
    few, every = (count_at(stored(kept), threshold=threshold) for kept in (1024, VALUES.size))
    assert few.found == every.found == np.sum(threshold < VALUES)
    assert few.expected == pytest.approx(every.expected, rel=1e-5)
    assert few.standard_uncertainty == pytest.approx(every.standard_uncertainty, rel=1e-5)


def test_a_threshold_near_what_was_left_out_is_not_answered():
    kept = stored(1024)
    assert kept.floor is not None and kept.floor < kept.values.min()
    assert count_at(kept, threshold=kept.floor + 0.4) is None
    assert count_at(kept, threshold=kept.floor + 0.6) is not None


def test_the_expected_count_is_that_of_repeated_readings():
    rng = np.random.default_rng(7)
    true = np.array([2.0, 2.9, 3.0, 3.05, 3.3, 9.0], np.float32)
    chances = np.mean(true + rng.normal(0.0, 0.1, (40_000, 6)) > 3.0, axis=0)
    found = count_at(
        largest_values(true, np.full(6, 0.1), kind="hot_pixels", scope="device", unit=""),
        threshold=3.0,
    )
    assert found.expected == pytest.approx(chances.sum(), abs=0.02)


def test_values_without_doubt_are_counted_as_they_are():
    found = count_at(
        largest_values(
            np.array([1.0, 3.0, 4.0]), np.zeros(3), kind="hot_pixels", scope="device", unit=""
        ),
        threshold=3.0,
    )
    assert (found.found, found.expected, found.standard_uncertainty) == (1, 1.0, 0.0)
