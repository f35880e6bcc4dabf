import numpy as np
import pytest

from grading.given import counted, limit, measured, recipe
from sensorgrade.grading.decision import Graded
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.grading.lot_statistics import limit_statistics, lot_decision, yields
from sensorgrade.recipe.model import LotPlan


def device(serial, noise, hot=3):
    return DeviceReadings(
        serial, (measured("read_noise", noise, 0.1),), (counted("hot_pixels", hot),)
    )


def decided(*decisions):
    return [Graded("a" if one == "accept" else None, one, (), ()) for one in decisions]


def test_yields_count_better_grades_too():
    asked = recipe(("science", []), ("engineering", []))
    graded = [
        Graded("science", "accept", (), ()),
        Graded("engineering", "accept", (), ()),
        Graded(None, "reject", (), ()),
    ]
    science, engineering = yields(graded, recipe=asked)
    assert (science.reached, engineering.reached, science.devices) == (1, 2, 3)
    assert science.clopper_pearson.low < 1 / 3 < science.clopper_pearson.high


def test_statistics_of_a_limit_worked_by_hand():
    values = [4.0, 4.2, 4.4, 4.6, 4.8]
    asked = recipe(("a", [limit("read_noise", "<=", 5.0)]))
    (found,) = limit_statistics(
        [device(f"S{i}", value) for i, value in enumerate(values)], recipe=asked
    )
    assert (found.mean, found.median, found.least, found.largest) == pytest.approx(
        (4.4, 4.4, 4.0, 4.8)
    )
    assert found.spread == pytest.approx(np.sqrt(0.1))
    assert found.robust_spread == pytest.approx(1.4826022 * 0.2)
    assert found.capability.index == pytest.approx(0.6 / 3 / np.sqrt(0.1))


def test_outliers_are_found_and_normal_lots_rarely_show_any():
    rng = np.random.default_rng(3)
    asked = recipe(("a", [limit("read_noise", "<=", 50.0)]))

    def outliers(values):
        devices = [device(f"S{i}", value) for i, value in enumerate(values)]
        (found,) = limit_statistics(devices, recipe=asked)
        return [one.serial for one in found.outliers]

    odd = rng.normal(5.0, 0.3, 100)
    odd[17] = 7.5
    assert outliers(odd) == ["S17"]
    lots = sum(bool(outliers(rng.normal(5.0, 0.3, 300))) for _ in range(100))
    # 5 % foretold for a known spread; that of 300 values adds a little.
    assert lots <= 20


def test_equal_values_have_neither_capability_nor_outliers():
    asked = recipe(("a", [limit("hot_pixels", "<=", 5, "")]))
    (found,) = limit_statistics([device(f"S{i}", 4.0) for i in range(20)], recipe=asked)
    assert found.capability is None
    assert found.outliers == ()


def test_risks_of_the_rule_by_simulation():
    rng = np.random.default_rng(4)
    true = rng.normal(4.7, 0.2, 4000)
    reading = true + rng.normal(0.0, 0.1, true.size)
    asked = recipe(("a", [limit("read_noise", "<=", 5.0)]), rule="guarded acceptance")
    devices = [device(f"S{i}", value) for i, value in enumerate(reading)]
    (found,) = limit_statistics(devices, recipe=asked)
    taken = reading <= 5.0 - 1.6449 * 0.1
    error = 5 * np.sqrt(0.25 / true.size)
    assert found.risks.consumer == pytest.approx(np.mean(taken & (true > 5.0)), abs=error)
    assert found.risks.producer == pytest.approx(np.mean(~taken & (true <= 5.0)), abs=error)


@pytest.mark.parametrize(
    "decisions, expected",
    [
        ("accept " * 10, "accept"),
        ("accept " * 9 + "reject", "accept"),
        ("accept " * 8 + "reject " * 2, "reject"),
        ("accept " * 8 + "reject undecided", "undecided"),
        ("accept " * 9 + "undecided", "accept"),
        ("accept " * 9, "accept"),  # one to come could fail and the lot would still pass
        ("accept " * 8, "undecided"),
        ("reject " * 2, "reject"),
    ],
)
def test_the_lot_by_its_plan(decisions, expected):
    graded = decided(*decisions.split())
    serials = [f"S{i}" for i in range(len(graded))]
    plan = LotPlan(sample_size=10, acceptance_number=1)
    assert lot_decision(serials, graded, plan=plan).outcome == expected


def test_a_larger_lot_is_judged_by_a_draw_of_the_sample_size():
    graded = decided(*(["accept"] * 100))
    found = lot_decision([f"S{i}" for i in range(100)], graded, plan=LotPlan(quality_limit=1.0))
    assert len(found.judged) == found.plan.size == 13
    assert found.sentence == (
        "0 of 13 devices judged missed every grade; the lot is accepted on 0 or fewer in 13."
    )


def test_without_a_plan_the_lot_is_not_judged():
    assert lot_decision([], [], plan=LotPlan()) is None
