import numpy as np
import pytest

from sensorgrade.grading.risk import global_risks


def test_risks_by_simulation():
    rng = np.random.default_rng(8)
    true = rng.normal(4.5, 0.4, 400_000)
    reading = true + rng.normal(0.0, 0.2, true.size)
    risks = global_risks(4.5, 0.4, 0.2, upper=5.0, accept_below=4.8)
    error = 5 * 0.5 / np.sqrt(true.size)
    assert risks.conforming == pytest.approx(np.mean(true <= 5.0), abs=error)
    assert risks.consumer == pytest.approx(np.mean((true > 5.0) & (reading <= 4.8)), abs=error)
    assert risks.producer == pytest.approx(np.mean((true <= 5.0) & (reading > 4.8)), abs=error)


def test_a_perfect_reading_wrongs_nobody():
    risks = global_risks(4.5, 0.4, 0.0, upper=5.0, accept_below=5.0)
    assert (risks.consumer, risks.producer) == (0.0, pytest.approx(0.0, abs=1e-12))


def test_a_guard_band_moves_risk_from_consumer_to_producer():
    guards = (0.0, 0.1, 0.2, 0.4)
    risks = [global_risks(4.5, 0.4, 0.2, upper=5.0, accept_below=5.0 - w) for w in guards]
    assert np.all(np.diff([one.consumer for one in risks]) < 0)
    assert np.all(np.diff([one.producer for one in risks]) > 0)
