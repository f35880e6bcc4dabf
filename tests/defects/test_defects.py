"""What the finders find on simulated sensors, and that each thing counts once."""

from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
from scipy.stats import poisson

from sensorgrade.defects.bits import BY_NAME
from sensorgrade.defects.clusters import ClusterOptions, groups
from sensorgrade.defects.find import find_defects
from sensorgrade.defects.lines import LineOptions
from sensorgrade.defects.pixels import PixelOptions
from sensorgrade.defects.telegraph import TelegraphOptions
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.combine import combined_masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure import photon_transfer
from sensorgrade.measure.stage import Inputs
from sensorgrade.recipe.model import Section, Sensor, Zone
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import DarkSignal, DefectModel, Events, Response, SensorModel
from sensorgrade.simulate.plan import frame_plan

ALL = {
    "pixels": PixelOptions(hot=5.0),
    "lines": LineOptions(),
    "clusters": ClusterOptions(),
    "telegraph": TelegraphOptions(),
}
SENSOR = Sensor(technology="cmos", pixel_pitch=10.0)


def model(*defects, rows=256, columns=256, sensor=SENSOR):
    return SensorModel(
        sensor=sensor,
        rows=rows,
        columns=columns,
        dark=DarkSignal(current=0.5, reference=20.0),
        response=Response(pixel=1.0),
        defects=defects,
    )


PLAN = frame_plan(
    bias=10, darks=[(16, 60.0)], levels=[5000.0, 20000.0, 40000.0], flats=[(10, 30000.0)]
)


def measured(made, *, seed=1, plan=PLAN):
    """What the finders look at, and the truth."""
    simulated = simulate_device(made, plan, seed=seed, serial="T")
    layout = geometry(made.sensor, {"": (made.rows, made.columns)})
    reduced = reduce_frames(simulated.frames, layout, made.sensor, threads=1)
    inputs = Inputs(made.sensor, reduced, combined_masters(reduced), {})
    inputs.results["photon_transfer"] = photon_transfer.STAGE.run(
        inputs, photon_transfer.STAGE.options()
    )
    return inputs, simulated.truth


def inspected(made, *, seed=1, plan=PLAN, options=ALL, zones=None):
    inputs, truth = measured(made, seed=seed, plan=plan)
    return find_defects(inputs, options, zones or {}), truth


def number(defects, name, scope="device"):
    return next(one.found for one in defects.counts if (one.kind, one.scope) == (name, scope))


def found_at(defects, kind):
    rows = defects.table[defects.table["kind"] == kind]
    return set(zip(rows["row"].tolist(), rows["column"].tolist(), strict=True))


def true_at(truth, kind):
    return {
        (one.section.row_start, one.section.column_start)
        for one in truth.defects
        if one.kind == kind
    }


def test_every_kind_of_pixel_is_found_where_it_is_and_named_rightly():
    kinds = {"hot": "hot", "dead": "dead", "dim": "dim", "bright": "bright"}
    defects, truth = inspected(
        model(
            DefectModel(kind="hot", count=40, current=60.0),
            DefectModel(kind="dead", count=20),
            DefectModel(kind="dim", count=20, response=60.0),
            DefectModel(kind="bright", count=20, response=150.0),
        ),
        options={**ALL, "clusters": ClusterOptions(smallest=20)},
    )
    for made, found in kinds.items():
        assert found_at(defects, found) == true_at(truth, made), made
    bad = defects.mask > 0
    assert bad.sum() == 100


def test_a_sound_sensor_has_no_defect():
    for seed in range(4):
        defects, _ = inspected(model(), seed=seed)
        assert Counter(defects.table["kind"].tolist()) == {}
        assert not defects.mask.any()


@pytest.mark.parametrize("unequal", [0.0, 30.0])
@pytest.mark.parametrize(
    "seeds, size", [(2, 512), pytest.param(50, 1024, marks=pytest.mark.nightly)]
)
def test_false_alarms_are_rarer_than_one_in_ten_million(seeds, size, unequal):
    """With the same dark current in all pixels, and with one that differs by 30 %."""
    sound = model(rows=size, columns=size)
    sound = replace(sound, dark=replace(sound.dark, nonuniformity=unequal))
    found = 0
    for seed in range(seeds):
        inputs, _ = measured(sound, seed=seed)
        found += len(find_defects(inputs, ALL, {}).table)
    # Poisson: 99.9 % of sensors that keep to the rate lie below this number.
    assert found <= poisson.ppf(0.999, 1e-7 * seeds * size**2)


def test_pixels_without_a_valid_sample_are_told():
    inputs, _ = measured(model())
    count = inputs.masters.flat.count.copy()
    count[5, 7] = 0
    masters = replace(inputs.masters, flat=replace(inputs.masters.flat, count=count))
    mask = find_defects(replace(inputs, masters=masters), ALL, {}).mask
    assert np.argwhere(mask & BY_NAME["no data"].value).tolist() == [[5, 7]]


@pytest.mark.parametrize("response", [60.0, 95.0, 105.0])
def test_a_column_that_departs_by_five_per_cent_is_found_whole_and_no_pixel_of_it_counts(response):
    defects, _ = inspected(
        model(DefectModel(kind="gain", row=0, column=77, height=0, response=response)), seed=3
    )
    (row,) = defects.table
    assert row["kind"] == ("bright column" if response > 100 else "dim column")
    assert (row["column_start"], row["row_start"], row["row_stop"]) == (77, 0, 256)
    assert abs(row["value"] - (response - 100)) < 0.5
    assert number(defects, "bad_columns") == 1
    assert (defects.mask[:, 77] & BY_NAME["column"].value > 0).all()
    assert (np.flatnonzero(defects.mask.any(axis=0)) == [77]).all()


def test_a_partial_column_is_found_with_its_ends():
    defects, _ = inspected(
        model(DefectModel(kind="gain", column=100, row=64, height=120, response=90.0)), seed=5
    )
    (row,) = defects.table
    assert abs(row["row_start"] - 64) <= 3 and abs(row["row_stop"] - 184) <= 3


def test_a_hot_row_is_a_row():
    defects, _ = inspected(
        model(DefectModel(kind="hot", row=31, column=0, width=0, current=4.0)), seed=6
    )
    (row,) = defects.table
    assert (row["kind"], row["row"]) == ("hot row", 31)
    assert number(defects, "bad_rows") == 1


def test_touching_pixels_are_one_cluster_and_no_points():
    defects, _ = inspected(
        model(DefectModel(kind="dead", row=50, column=60, height=4, width=4)), seed=7
    )
    assert number(defects, "clusters") == 1 and number(defects, "dead_pixels") == 0
    (row,) = defects.table
    assert (row["row_start"], row["row_stop"], row["column_start"], row["column_stop"]) == (
        50, 54, 60, 64,
    )  # fmt: skip


def test_telegraph_pixels_are_told_from_particles():
    defects, truth = inspected(
        replace(
            model(
                DefectModel(
                    kind="telegraph", count=30, amplitude=200.0, dwell_low=200.0, dwell_high=200.0
                )
            ),
            events=Events(rate=30.0),
        ),
        seed=8,
    )
    true, found = true_at(truth, "telegraph"), found_at(defects, "telegraph")
    assert len(found & true) >= 0.8 * len(true)
    assert not found - true


def test_mosaics_are_judged_plane_by_plane():
    sensor = replace(SENSOR, colour="RGGB")
    defects, truth = inspected(
        model(DefectModel(kind="dim", count=15, response=60.0), sensor=sensor), seed=9
    )
    assert found_at(defects, "dim") == true_at(truth, "dim")


def test_counts_of_zones_take_in_what_lies_there():
    zones = {"centre": Zone(rectangle=Section(64, 192, 64, 192)), "edge": Zone(border=64)}
    defects, _ = inspected(
        model(DefectModel(kind="hot", count=60, current=60.0)),
        zones=zones,
        options={"pixels": PixelOptions(hot=5.0)},
    )
    centre = number(defects, "hot_pixels", "zone centre")
    assert 0 < centre < 60
    assert centre + number(defects, "hot_pixels", "zone edge") == number(defects, "hot_pixels")
    assert set(defects.table["zone"]) == {"centre", "edge"}


def test_what_cannot_be_looked_for_is_not_counted_as_none():
    plan = frame_plan(bias=4, darks=[], levels=[5000.0, 20000.0], flats=[])
    defects, _ = inspected(model(), plan=plan)
    assert "hot_pixels" not in {one.kind for one in defects.counts}
    assert any("hot_pixels" in finding.undecides for finding in defects.findings)
    assert "warm_pixels" not in {one.kind for one in defects.counts}


def test_expected_number_is_the_sum_of_probabilities():
    # Thirty pixels right at the threshold: about half are found, all are in doubt.
    defects, _ = inspected(
        model(DefectModel(kind="hot", count=30, current=4.5)),
        options={"pixels": PixelOptions(hot=4.5)},
        seed=4,
    )
    count = next(one for one in defects.counts if one.kind == "hot_pixels")
    assert 0 < count.found <= 30
    assert count.standard_uncertainty > 1
    assert abs(count.found - count.expected) < 5 * count.standard_uncertainty


def test_groups_touch_by_sides_and_corners():
    rows = np.array([0, 1, 2, 9, 9], np.int32)
    columns = np.array([0, 1, 2, 9, 11], np.int32)
    assert [list(g) for g in groups(rows, columns, ClusterOptions())] == [[0, 1, 2]]
    assert len(groups(rows, columns, ClusterOptions(distance=2, smallest=2))) == 2
