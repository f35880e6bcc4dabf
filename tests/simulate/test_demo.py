"""The demonstration's lot: its story holds, whatever the seed."""

from collections import Counter

import pytest

from sensorgrade.frames.inventory import find_devices
from sensorgrade.inspection import inspect_device
from sensorgrade.recipe.library import find_recipe
from sensorgrade.recipe.load import load_recipe
from sensorgrade.simulate.demo import LOT, demo_lot, write_demo
from sensorgrade.stages import vocabulary

# What each device that misses the best grade must be told for, first of all.
REASONS = {
    "HRN-102": "Read noise of output right",
    "HRN-103": "Hot pixels",
    "HRN-105": "Dark current",
    "HRN-106": "PRNU",
    "HRN-107": "Bad columns: 1 found",
    "HRN-108": "Saturation capacity",
    "HRN-109": "Clusters: 9 found",
    "HRN-111": "Linearity error of output left",
}


def test_the_lot_has_twelve_devices_of_three_kinds_and_a_sentence_for_each():
    lot = demo_lot()
    assert Counter(device.expected for device in lot) == {"science": 4, "engineering": 4, None: 4}
    assert len({device.serial for device in lot}) == 12
    assert len({(d.wafer, d.die_row, d.die_column) for d in lot}) == 12
    assert len({device.why for device in lot}) == 12
    for device in lot:
        assert device.why.endswith(".") and device.why.count(".") <= 2


@pytest.mark.parametrize(
    "seed", [0, *(pytest.param(seed, marks=pytest.mark.nightly) for seed in range(1, 6))]
)
def test_grades_are_what_the_truth_says_and_for_the_reason_told(tmp_path, seed):
    lot = {device.serial: device for device in demo_lot()}
    recipe = load_recipe(find_recipe("demo"), vocabulary())
    write_demo(lot.values(), tmp_path, seed=seed, threads=1)
    found = find_devices([tmp_path], recipe)
    assert [device.serial for device in found] == list(lot)
    for frames in found:
        device = lot[frames.serial]
        assert (frames.lot, frames.wafer) == (LOT, device.wafer)
        assert (frames.die_row, frames.die_column) == (device.die_row, device.die_column)
        result = inspect_device(frames, recipe, threads=1).result
        assert not [f for f in result.findings if f.severity == "error"]
        graded = result.graded
        assert graded.grade == device.expected, (frames.serial, graded.reasons)
        assert graded.decision == ("accept" if device.expected else "reject")
        if device.expected == "science":
            assert graded.reasons == ()
        else:
            assert graded.reasons[0].startswith(REASONS[frames.serial]), graded.reasons
