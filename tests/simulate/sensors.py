"""Small sensor models for the tests of the simulator."""

from dataclasses import replace
from typing import Any

from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.model import SensorModel

TWO_OUTPUTS = Sensor(
    technology="ccd",
    pixel_pitch=15.0,
    outputs={
        "left": OutputOptions(
            image=Section(0, 64, 0, 48), overscan=Section(0, 64, 96, 104), corner="bottom left"
        ),
        "right": OutputOptions(
            image=Section(0, 64, 48, 96), overscan=Section(0, 64, 104, 112), corner="top right"
        ),
    },
)
ONE_OUTPUT = Sensor(technology="ccd", pixel_pitch=10.0)


def one_output(rows: int = 128, columns: int = 128, **changes: Any) -> SensorModel:
    return replace(SensorModel(sensor=ONE_OUTPUT, rows=rows, columns=columns), **changes)


def two_outputs(**changes: Any) -> SensorModel:
    return replace(SensorModel(sensor=TWO_OUTPUTS, rows=64, columns=112), **changes)
