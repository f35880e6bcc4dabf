import numpy as np
import pytest

from sensorgrade.grading.interval import Interval, clopper_pearson, wilson


@pytest.mark.parametrize("share", [0.02, 0.3, 0.5, 0.9])
def test_coverage_over_many_lots(share):
    rng = np.random.default_rng(2)
    trials = 60
    counts = rng.binomial(trials, share, 4000)
    for interval, low, high in ((clopper_pearson, 0.95, 1.0), (wilson, 0.92, 0.985)):
        limits = {k: interval(int(k), trials) for k in np.unique(counts)}
        covered = np.mean([limits[k].low <= share <= limits[k].high for k in counts])
        assert low - 5 * np.sqrt(0.05 * 0.95 / 4000) <= covered <= high


def test_no_trials_say_nothing():
    assert wilson(0, 0) == Interval(0.0, 1.0) == clopper_pearson(0, 0)


def test_more_confidence_is_a_wider_interval():
    for interval in (wilson, clopper_pearson):
        narrow, wide = interval(7, 40, confidence=90.0), interval(7, 40, confidence=99.0)
        assert wide.low < narrow.low < 7 / 40 < narrow.high < wide.high
