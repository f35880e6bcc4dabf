from dataclasses import replace

import numpy as np
import pytest

from grading.given import counted, measured
from sensorgrade.defects.defect import DEFECT
from sensorgrade.grading.compare import comparison, defect_change
from sensorgrade.grading.held import DeviceReadings


def lot(rng, devices=50, shift=0.0):
    return [
        DeviceReadings(
            f"S{i}",
            tuple(
                measured("read_noise", 5.0 + i / 10 + shift + rng.normal(0, 0.1), 0.1, scope=scope)
                for scope in ("output left", "output right")
            ),
            (counted("hot_pixels", 20, 20 + rng.normal(0, 1.0), 1.0),),
        )
        for i in range(devices)
    ]


def test_runs_of_unchanged_devices_rarely_show_a_change():
    rng = np.random.default_rng(1)
    alarms, deviations = 0, []
    for _ in range(100):
        found = comparison(lot(rng), lot(rng))
        alarms += any(change.significant for change in found.changes)
        deviations += [one.deviation for one in found.agreements]
    assert alarms <= 5 + 5 * np.sqrt(100 * 0.05 * 0.95)
    assert np.mean(deviations) == pytest.approx(1.0, abs=0.03)


def test_one_changed_device_stands_first():
    rng = np.random.default_rng(2)
    before, after = lot(rng), lot(rng)
    left, right = after[7].measurements
    after[7] = replace(after[7], measurements=(replace(left, value=left.value + 1.5), right))
    found = comparison(before, after)
    assert [(c.serial, c.scope) for c in found.changes if c.significant] == [("S7", "output left")]
    assert found.changes[0].serial == "S7"


def test_a_shift_of_all_is_a_bias_with_its_uncertainty():
    rng = np.random.default_rng(3)
    found = comparison(lot(rng), lot(rng, shift=0.05))
    noise = next(one for one in found.agreements if one.name == "read_noise")
    assert noise.bias == pytest.approx(0.05, abs=5 * noise.bias_uncertainty)
    assert noise.bias_uncertainty == pytest.approx(0.1 * np.sqrt(2 / 100), rel=0.3)
    assert noise.high - noise.low == pytest.approx(2 * 1.96 * 0.1414, rel=0.3)


def test_devices_of_one_run_only_are_named():
    rng = np.random.default_rng(4)
    before, after = lot(rng, 3), lot(rng, 4)[1:]
    found = comparison(before, after)
    assert (found.only_before, found.only_after) == (("S0",), ("S3",))


def test_numbers_without_doubt_change_when_they_differ():
    before = [DeviceReadings("a", (), (counted("bad_columns", 0),))]
    after = [DeviceReadings("a", (), (counted("bad_columns", 1),))]
    (change,) = comparison(before, after).changes
    assert (change.deviation, change.significant) == (None, True)
    (same,) = comparison(before, before).changes
    assert not same.significant


def defects(*rows):
    table = np.zeros(len(rows), DEFECT)
    for record, (kind, r0, r1, c0, c1, probability) in zip(table, rows, strict=True):
        record["kind"], record["probability"] = kind, probability
        record["row_start"], record["row_stop"] = r0, r1
        record["column_start"], record["column_stop"] = c0, c1
    return table


def test_defects_are_matched_by_kind_and_position():
    before = defects(
        ("hot", 5, 6, 5, 6, 1.0),
        ("hot", 9, 10, 9, 10, 0.6),
        ("column", 0, 100, 40, 41, 1.0),
        ("dead", 7, 8, 7, 8, 1.0),
    )
    after = defects(
        ("column", 20, 100, 40, 41, 1.0),
        ("hot", 5, 6, 5, 6, 1.0),
        ("hot", 7, 8, 7, 8, 0.99),
        ("hot", 50, 51, 50, 51, 0.7),
    )
    found = defect_change(before, after)
    assert found.kept == ((0, 1), (2, 0))
    assert (found.new, found.doubtful_new) == ((2, 3), (3,))
    assert (found.gone, found.doubtful_gone) == ((1, 3), (1,))


def test_a_cluster_that_fell_in_two_is_kept_once():
    before = defects(("cluster", 0, 5, 0, 5, 1.0))
    after = defects(("cluster", 0, 1, 0, 2, 1.0), ("cluster", 2, 5, 0, 5, 1.0))
    found = defect_change(before, after)
    assert found.kept == ((0, 1),)
    assert found.new == (0,)


def test_reach_allows_for_a_shift_of_the_frame():
    before, after = defects(("hot", 5, 6, 5, 6, 1.0)), defects(("hot", 6, 7, 5, 6, 1.0))
    assert defect_change(before, after).kept == ()
    assert defect_change(before, after, reach=1).kept == ((0, 0),)


def test_no_defects_at_all():
    found = defect_change(defects(), defects())
    assert (found.kept, found.new, found.gone) == ((), (), ())
