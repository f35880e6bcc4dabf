import numpy as np
import pytest

from sensorgrade.errors import RequestError
from sensorgrade.grading.sampling_plan import QUALITY_LIMITS, SamplingPlan, drawn, standard_plan


def test_a_sample_as_large_as_the_lot_is_the_whole_lot():
    assert standard_plan(10, 1.0) == SamplingPlan(10, 0)


def test_plans_grow_with_the_lot_and_with_the_limit():
    lots = (2, 9, 50, 90, 500, 1200, 10_000, 500_000, 10_000_000)
    for limit in QUALITY_LIMITS:
        plans = [standard_plan(lot, limit) for lot in lots]
        assert np.all(np.diff([plan.size for plan in plans]) >= 0)
        assert np.all(np.diff([plan.accept for plan in plans]) >= 0)


def test_unknown_limits_are_refused_with_the_known_ones():
    with pytest.raises(RequestError, match=r"no plan for 3 %; take one of 6.5, 4, 2.5"):
        standard_plan(500, 3.0)


def test_acceptance_by_simulation():
    rng = np.random.default_rng(4)
    bad = rng.hypergeometric(12, 188, 32, size=20_000)
    plan = SamplingPlan(32, 1)
    expected = plan.acceptance_probability(0.06, lot=200)
    assert np.mean(bad <= 1) == pytest.approx(expected, abs=5 * 0.5 / np.sqrt(20_000))


def test_a_lot_without_bad_devices_is_always_accepted():
    assert SamplingPlan(32, 0).acceptance_probability(0.0, lot=200) == pytest.approx(1.0)


def test_the_draw_depends_on_the_serials_only():
    serials = [f"S{n:03}" for n in range(200)]
    chosen = drawn(serials, 20)
    assert len(set(chosen)) == 20
    assert drawn(serials[::-1], 20) == chosen
    # Not the first ones: a draw spreads over the lot.
    assert max(int(one[1:]) for one in chosen) > 100
