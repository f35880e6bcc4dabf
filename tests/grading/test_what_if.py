from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest

from grading.given import counted, limit, measured, recipe
from sensorgrade.grading.grade import grade
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.grading.what_if import (
    concessions,
    costs,
    tightest,
    yield_curve,
    yield_grid,
)

RULES = ("simple", "guarded acceptance", "guarded rejection", "non-binary")
LIMITS = (
    limit("read_noise", "<=", 5.0),
    limit("saturation_capacity", ">=", 90_000.0),
    limit("hot_pixels", "<=", 100, ""),
    limit("dark_current", "<=", 1.0, "electron / s"),
)


def lot(size=60, seed=1):
    rng = np.random.default_rng(seed)
    devices = []
    for number in range(size):
        found = int(rng.poisson(95))
        devices.append(
            DeviceReadings(
                f"S{number:03}",
                (
                    measured("read_noise", rng.normal(4.8, 0.3), 0.1),
                    measured("saturation_capacity", rng.normal(95_000, 5000), 1500.0),
                    measured("dark_current", rng.lognormal(-0.3, 0.4), 0.05),
                ),
                (counted("hot_pixels", found, found + rng.normal(0, 2), 3.0),),
            )
        )
    return devices


def accepted(devices, limits, rule):
    asked = recipe(("a", limits), rule=rule)
    return [
        grade(d.measurements, d.counts, d.findings, recipe=asked).grade is not None for d in devices
    ]


def bounds_of(devices, rule="simple", limits=LIMITS):
    asked = recipe(("a", limits), rule=rule)
    return tightest(devices, level=asked.grades[0], recipe=asked)


@pytest.mark.parametrize("rule", RULES)
def test_tightest_bounds_decide_as_grading_does(rule):
    devices = lot()
    found = bounds_of(devices, rule)
    assert list(~found.missed.any(axis=1)) == accepted(devices, LIMITS, rule)
    assert 0 < sum(accepted(devices, LIMITS, rule)) < len(devices)


@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize("column", range(len(LIMITS)))
def test_the_yield_curve_is_what_grading_again_would_find(rule, column):
    devices = lot()
    curve = yield_curve(bounds_of(devices, rule), limit=column)
    for bound, count in list(zip(curve.bounds, curve.accepted, strict=True))[::7]:
        other = list(LIMITS)
        other[column] = replace(LIMITS[column], bound=float(bound))
        assert sum(accepted(devices, other, rule)) == count


def test_the_yield_grid_agrees_with_grading_again():
    devices = lot()
    noise, hot = np.array([4.6, 5.0, 5.5]), np.array([80.0, 100.0])
    grid = yield_grid(bounds_of(devices), first=0, second=2, first_bounds=noise, second_bounds=hot)
    for i, one in enumerate(noise):
        for j, two in enumerate(hot):
            other = list(LIMITS)
            other[0], other[2] = replace(LIMITS[0], bound=one), replace(LIMITS[2], bound=two)
            assert grid.accepted[i, j] == sum(accepted(devices, other, "simple"))


def test_costs_count_who_misses_a_limit_and_who_misses_it_alone():
    devices = [
        DeviceReadings("a", (measured("read_noise", 6.0, 0.1),), (counted("hot_pixels", 300),)),
        DeviceReadings("b", (measured("read_noise", 4.0, 0.1),), (counted("hot_pixels", 300),)),
        DeviceReadings("c", (), (counted("hot_pixels", 3),)),
    ]
    first, second = costs(bounds_of(devices, limits=(LIMITS[0], LIMITS[2])))
    assert (first.limit.name, first.missed, first.alone, first.undecidable) == (
        "read_noise",
        2,
        1,
        1,
    )
    assert (second.limit.name, second.missed, second.alone, second.undecidable) == (
        "hot_pixels",
        2,
        1,
        0,
    )


@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize("wanted", [30, 45, 55, 60])
def test_concessions_reach_the_number_and_no_fewer_limits_would(rule, wanted):
    devices = lot()
    found = concessions(bounds_of(devices, rule), wanted=wanted)
    eased = {one.limit.name: one.bound for one in found.eased}
    other = [replace(one, bound=eased.get(one.name, one.bound)) for one in LIMITS]
    now = accepted(devices, other, rule)
    assert sum(now) == found.accepted >= wanted
    before = accepted(devices, LIMITS, rule)
    gained = [d.serial for d, new, old in zip(devices, now, before, strict=True) if new and not old]
    assert list(found.gained) == gained
    for fewer in combinations(range(len(LIMITS)), max(0, len(eased) - 1)):
        kept = [one for index, one in enumerate(LIMITS) if index not in fewer]
        assert sum(accepted(devices, kept, rule)) < wanted or not eased


def test_a_number_beyond_the_measured_devices_has_no_concession():
    devices = [*lot(5), DeviceReadings("unmeasured", (), ())]
    assert concessions(bounds_of(devices), wanted=6) is None
    assert concessions(bounds_of(devices), wanted=5) is not None


def test_the_smallest_easing_is_chosen():
    devices = [
        DeviceReadings("a", (measured("read_noise", 5.5, 0.0),), (counted("hot_pixels", 3),)),
        DeviceReadings("b", (measured("read_noise", 4.0, 0.0),), (counted("hot_pixels", 104),)),
    ]
    found = concessions(bounds_of(devices, limits=(LIMITS[0], LIMITS[2])), wanted=1)
    assert [(one.limit.name, one.bound) for one in found.eased] == [("hot_pixels", 104.0)]
    assert found.gained == ("b",)
