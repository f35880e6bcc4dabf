import numpy as np
import pytest

from sensorgrade.errors import NotMeasured
from sensorgrade.grading.repeatability import repeatability, share_of_tolerance


def study(rng, *, devices=12, benches=3, repeats=4, device=1.0, bench=0.3, within=0.2):
    true = rng.normal(5.0, device, devices)
    offset = rng.normal(0.0, bench, benches)
    return {
        f"d{i}": {
            f"b{j}": list(true[i] + offset[j] + rng.normal(0.0, within, repeats))
            for j in range(benches)
        }
        for i in range(devices)
    }


def test_variances_are_recovered_on_average():
    rng = np.random.default_rng(5)
    found = [repeatability(study(rng)) for _ in range(300)]
    within = np.mean([one.repeatability**2 for one in found])
    bench = np.mean([one.reproducibility**2 for one in found])
    device = np.mean([one.devices**2 for one in found])
    # Relative standard errors of the means over 300 studies: about 0.7, 6 and 2.5 %.
    assert within == pytest.approx(0.04, rel=0.04)
    assert bench == pytest.approx(0.09, rel=0.30)
    assert device == pytest.approx(1.0, rel=0.13)


def test_a_real_interaction_is_not_pooled_and_counts_as_reproducibility():
    rng = np.random.default_rng(6)
    readings = study(rng, bench=0.0, within=0.05)
    for of_device in readings.values():
        for bench, values in of_device.items():
            shift = rng.normal(0.0, 0.5)
            of_device[bench] = [value + shift for value in values]
    found = repeatability(readings)
    assert not found.pooled
    assert found.reproducibility == pytest.approx(0.5, rel=0.5)
    assert found.repeatability == pytest.approx(0.05, rel=0.2)


def test_one_bench_has_repeatability_only():
    rng = np.random.default_rng(7)
    found = repeatability(study(rng, benches=1, devices=40))
    assert found.reproducibility == 0.0
    assert found.together == found.repeatability == pytest.approx(0.2, rel=0.3)


def test_without_repeats_the_interaction_stands_for_repeatability():
    rng = np.random.default_rng(8)
    found = repeatability(study(rng, repeats=1, devices=60))
    assert found.repeatability == pytest.approx(0.2, rel=0.35)


def test_the_interval_of_the_stated_ratio_covers():
    rng = np.random.default_rng(9)
    inside = 0
    for _ in range(400):
        found = repeatability(study(rng, benches=1, devices=6, repeats=3), stated=0.2)
        inside += found.stated_ratio_low <= 1.0 <= found.stated_ratio_high
    assert pytest.approx(inside, abs=5 * np.sqrt(400 * 0.95 * 0.05)) == 0.95 * 400


def test_a_constant_offset_changes_nothing():
    rng = np.random.default_rng(10)
    readings = study(rng)
    moved = {
        device: {bench: [value + 1e6 for value in values] for bench, values in benches.items()}
        for device, benches in readings.items()
    }
    assert repeatability(moved).together == pytest.approx(repeatability(readings).together, 1e-6)


def test_what_cannot_be_analysed_says_why():
    with pytest.raises(NotMeasured, match="two devices"):
        repeatability({"a": {"b": [1.0, 2.0]}})
    with pytest.raises(NotMeasured, match="equally often"):
        repeatability({"a": {"b": [1.0, 2.0]}, "c": {"b": [1.0]}})
    with pytest.raises(NotMeasured, match="twice"):
        repeatability({"a": {"b": [1.0]}, "c": {"b": [1.0]}})


def test_identical_readings_have_no_scatter():
    found = repeatability({"a": {"b": [1.0, 1.0]}, "c": {"b": [2.0, 2.0]}})
    assert found.together == 0.0
    assert found.share_of_variation == 0.0


def test_share_of_a_one_sided_tolerance():
    assert share_of_tolerance(0.1, mean=4.0, upper=5.0) == pytest.approx(30.0)
    assert share_of_tolerance(0.1, lower=3.0, upper=5.0) == pytest.approx(30.0)


def test_an_interaction_worked_by_hand():
    # Cells ±1, repeats ±0.5 about them: MS of error 8 x 0.25 / 4, of interaction 2 x 4 / 1.
    readings = {
        "p": {"a": [1.5, 0.5], "b": [-0.5, -1.5]},
        "q": {"a": [-0.5, -1.5], "b": [1.5, 0.5]},
    }
    found = repeatability(readings)
    assert not found.pooled
    assert found.repeatability**2 == pytest.approx(0.5)
    assert found.reproducibility**2 == pytest.approx((8.0 - 0.5) / 2)
    assert found.devices == 0.0
