"""Traps in columns are told from dim and dead columns, with their row and capacity."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from measure.plain_reduction import knowing
from sensorgrade.defects.bits import names_of
from sensorgrade.defects.column_traps import ColumnTrapOptions, column_traps
from sensorgrade.defects.find import find_defects
from sensorgrade.defects.pumped_traps import PumpedTrapOptions, pumped_traps
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.pocket_pumping import PocketPumpingResult, Trap
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import Amplifier, DefectModel, Response, SensorModel
from sensorgrade.simulate.plan import FramePlan, StackPlan

ROWS, COLUMNS = 512, 256
SENSOR = Sensor(
    technology="ccd",
    pixel_pitch=12.0,
    adc_bits=16,
    outputs={
        "left": OutputOptions(image=Section(0, ROWS, 0, 128), corner="bottom left"),
        "right": OutputOptions(image=Section(0, ROWS, 128, COLUMNS), corner="top right"),
    },
)
BAD = (
    DefectModel(kind="hot", count=20, current=5.0),
    DefectModel(kind="dead", count=20),
    DefectModel(kind="dim", row=100, column=40, height=0, response=90.0),
    DefectModel(kind="dim", row=300, column=200, height=0, response=60.0),
    DefectModel(kind="dead", row=200, column=70, height=0),
)
MODEL = SensorModel(
    sensor=SENSOR,
    rows=ROWS,
    columns=COLUMNS,
    amplifier=Amplifier(conversion_gain=1.5, read_noise=5.0),
    response=Response(pixel=1.0, column=0.1),
    defects=BAD,
)
LEVELS = (500.0, 5000.0, 30000.0)


def plan(levels=LEVELS, frames=8):
    return FramePlan(
        stacks=(
            StackPlan(kind="bias", frames=10),
            *(
                StackPlan(kind="flat", frames=frames, light=light, exposure=light / 2000)
                for light in levels
            ),
        ),
        shading=5.0,
    )


def inputs_of(model, bench=None, *, seed=0):
    made = simulate_device(model, bench or plan(), seed=seed)
    layout = geometry(model.sensor, {"": (model.rows, model.columns)})
    reduced = reduce_frames(made.frames, layout, model.sensor, threads=1)
    return knowing(
        Inputs(model.sensor, reduced, Masters(None, None, None), {}),
        *(
            Measurement("conversion_gain", region.scope, 1.5, 0.01, "electron / DN", 9)
            for region in layout.regions
        ),
    )


def trap(row, column, capacity):
    return DefectModel(kind="trap", row=row, column=column, height=0, capacity=capacity)


def found(model, bench=None, **given):
    return column_traps(inputs_of(model, bench, **given), ColumnTrapOptions())


def test_traps_are_found_to_the_row_with_their_capacity():
    seen = wanted = 0
    deviations = []
    for seed in range(4):
        rng = np.random.default_rng(seed)
        columns = [c for c in range(5, 251, 12) if all(abs(c - x) > 4 for x in (40, 70, 200))]
        rows = rng.integers(0, 500, len(columns))
        rows = np.where(np.array(columns) >= 128, ROWS - 1 - rows, rows)
        sizes = rng.choice([100.0, 150.0, 300.0, 800.0], len(columns))
        traps = {int(c): (int(r), float(k)) for c, r, k in zip(columns, rows, sizes, strict=True)}
        model = replace(MODEL, defects=(*BAD, *(trap(r, c, k) for c, (r, k) in traps.items())))
        lines = {line.column_start: line for line in found(model, seed=seed).lines}
        assert set(lines) <= set(traps)
        wanted += len(traps)
        seen += len(lines)
        for column, line in lines.items():
            row, size = traps[column]
            top = column >= 128
            assert abs((line.row_stop - 1 if top else line.row_start) - row) <= 5
            assert (line.row_start == 0) if top else (line.row_stop == ROWS)
            assert abs(line.value / size - 1) < 0.15
            assert line.kind == "trap column"
            deviations.append((line.value - size) / line.uncertainty)
    assert seen >= 0.95 * wanted
    assert abs(np.mean(deviations)) < 5 / np.sqrt(len(deviations))
    assert np.std(deviations) == pytest.approx(1, abs=0.4)


@pytest.mark.parametrize(
    "seeds", [range(100, 108), pytest.param(range(108, 200), marks=pytest.mark.nightly)]
)
def test_none_is_found_where_there_is_none(seeds):
    for seed in seeds:
        assert found(MODEL, seed=seed).lines == ()


def test_a_trap_that_holds_more_than_the_dimmest_flat_is_measured_by_the_brighter_ones():
    (line,) = found(replace(MODEL, defects=(trap(60, 50, 900.0),))).lines
    assert (line.row_start, line.column_start) == (60, 50)
    assert_allclose(line.value, 900.0, rtol=0.05)


def test_a_column_that_loses_charge_and_response_is_a_trap_of_its_fixed_part():
    both = (
        trap(60, 50, 200.0),
        DefectModel(kind="dim", row=60, column=50, height=0, response=95.0),
    )
    (line,) = found(replace(MODEL, defects=both)).lines
    assert_allclose(line.value, 200.0, rtol=0.1)


def test_mask_and_count_have_the_trap():
    given = inputs_of(replace(MODEL, defects=(trap(60, 50, 200.0),)))
    defects = find_defects(given, {"column_traps": ColumnTrapOptions()}, {})
    assert names_of(int(defects.mask[60, 50])) == ("column", "trap")
    assert defects.mask[59, 50] == 0
    assert (defects.mask > 0).sum() == ROWS - 60
    counts = {(c.kind, c.scope): c.found for c in defects.counts}
    assert counts["traps", "device"] == counts["traps", "output left"] == 1
    assert counts["traps", "output right"] == 0


@pytest.mark.parametrize(
    "model, bench, sentence",
    [
        (MODEL, plan(levels=(500.0,)), "at 2 or more levels"),
        (
            replace(MODEL, sensor=Sensor(technology="cmos", pixel_pitch=5.0)),
            plan(),
            "does not apply to a CMOS sensor",
        ),
    ],
)
def test_what_is_missing_is_said(model, bench, sentence):
    assert sentence in found(model, bench).lacking["traps"]


def pumped(significance):
    one = Trap(
        row=7,
        column=9,
        output="left",
        side="register",
        amplitude=400.0,
        amplitude_uncertainty=40.0,
        significance=significance,
        emissions=(),
        energy=None,
        candidates=(),
    )
    return PocketPumpingResult((), (), (one,), 6.0)


def test_pumped_traps_become_defects_of_their_pixels():
    given = inputs_of(MODEL, plan(levels=(500.0,), frames=2))
    without = pumped_traps(given, PumpedTrapOptions())
    assert "needs the stage pocket_pumping" in without.lacking["traps"]
    given.results["pocket_pumping"] = pumped(9.0)
    defects = find_defects(given, {"pumped_traps": PumpedTrapOptions()}, {})
    (row,) = defects.table
    assert (row["kind"], row["row"], row["column"], row["value"]) == ("trap", 7, 9, 400.0)
    assert names_of(int(defects.mask[7, 9])) == ("trap",)
    assert {(c.kind, c.scope): c.found for c in defects.counts}["traps", "device"] == 1
