"""Healthy sets of frames for the audit, of many kinds of sensor."""

from dataclasses import replace

from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.frames.geometry import Geometry, geometry
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import (
    Amplifier,
    DarkSignal,
    DefectModel,
    Events,
    Offsets,
    Response,
    SensorModel,
)
from sensorgrade.simulate.plan import FramePlan, frame_plan

CCD = Sensor(
    technology="ccd",
    pixel_pitch=15.0,
    outputs={
        "left": OutputOptions(
            image=Section(0, 128, 0, 80), overscan=Section(0, 128, 160, 176), corner="bottom left"
        ),
        "right": OutputOptions(
            image=Section(0, 128, 80, 160),
            overscan=Section(0, 128, 176, 192),
            corner="bottom right",
        ),
    },
)
CMOS = Sensor(technology="cmos", pixel_pitch=4.0, adc_bits=12)
COLOUR = Sensor(technology="cmos", pixel_pitch=4.0, adc_bits=12, colour="RGGB")

DEFECTS = (
    DefectModel(kind="hot", count=20, current=400.0),
    DefectModel(kind="dead", count=5),
    DefectModel(kind="telegraph", count=5, amplitude=60.0),
    DefectModel(kind="dim", height=0, response=70.0),
    DefectModel(kind="stuck", count=2, code=3000.0),
)
MODELS = {
    "ccd": SensorModel(
        sensor=CCD,
        rows=128,
        columns=192,
        amplifier=Amplifier(conversion_gain=1.6, read_noise=6.0, bias_drift=2.0, curvature=1.0),
        response=Response(pixel=0.8, column=0.2),
        dark=DarkSignal(current=1.0, nonuniformity=10.0, tail_fraction=1.0, tail_mean=20.0),
        events=Events(rate=30.0),
        defects=DEFECTS,
    ),
    "cmos": SensorModel(
        sensor=CMOS,
        rows=128,
        columns=160,
        full_well=9000.0,
        amplifier=Amplifier(conversion_gain=2.4, read_noise=2.0, bias_level=100.0),
        response=Response(pixel=1.0),
        dark=DarkSignal(current=10.0, nonuniformity=20.0, tail_fraction=2.0, tail_mean=60.0),
        offsets=Offsets(pixel=2.0, column=4.0, row_noise=1.0),
        defects=DEFECTS[:3],
    ),
    "colour": SensorModel(
        sensor=COLOUR,
        rows=128,
        columns=160,
        full_well=9000.0,
        amplifier=Amplifier(conversion_gain=2.4, read_noise=2.0, bias_level=100.0),
        response=Response(pixel=1.0, red=60.0, blue=50.0),
        dark=DarkSignal(current=2.0, nonuniformity=20.0),
        offsets=Offsets(pixel=2.0, column=4.0),
    ),
}


def healthy_plan(model: SensorModel) -> FramePlan:
    """Biases, darks, a ramp of pairs up to the full well, flats for the master."""
    full = model.full_well
    return frame_plan(
        bias=6,
        darks=((5, 30.0), (3, 10.0)),
        levels=[share * full for share in (0.01, 0.05, 0.2, 0.5, 0.8, 1.1)],
        flats=((5, 0.5 * full),),
        lamp_noise=0.5,
        lamp_drift=3.0,
        shading=10.0,
    )


def healthy(kind: str, seed: int) -> tuple[DeviceFrames, Geometry, Sensor]:
    """A device with nothing wrong, its geometry and its sensor."""
    model = MODELS[kind]
    if seed % 2:
        model = replace(model, defects=())
    device = simulate_device(model, healthy_plan(model), seed=seed, serial=f"{kind}{seed}").frames
    return device, geometry(model.sensor, {"": (model.rows, model.columns)}), model.sensor
