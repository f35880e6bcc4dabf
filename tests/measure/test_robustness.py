"""What a bench really sees moves the numbers little: hot pixels, events, drift, vignetting."""

from dataclasses import replace

import numpy as np
import pytest

from measure.plain_reduction import knowing, stack_of
from sensorgrade.frames.frame import DeviceFrames, Plane, Stack
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.master import Master, Masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.dark_uniformity import DarkUniformityOptions, dark_uniformity
from sensorgrade.measure.photon_transfer import PhotonTransferOptions, photon_transfer
from sensorgrade.measure.response_uniformity import (
    ResponseUniformityOptions,
    response_uniformity,
)
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import Sensor

SHAPE = (256, 320)
EXPOSURE = 10.0  # s
EVENTS = 3  # tracks in every frame; on 2 mm² a hundred times what falls at sea level in a minute
TROUBLES = ("hot pixels", "events", "drift", "vignetting")


def inputs_of(frames: list[tuple[Stack, np.ndarray]]) -> Inputs:
    """Inputs from frames held in memory, through the reduction that real frames take."""
    stacks = tuple(
        replace(
            stack,
            frames=tuple(
                replace(frame, planes={"": Plane(SHAPE, "uint16", data=samples.astype(np.uint16))})
                for frame, samples in zip(stack.frames, values, strict=True)
            ),
        )
        for stack, values in frames
    )
    sensor = Sensor(technology="cmos", pixel_pitch=5.0)
    layout = geometry(sensor, {"": SHAPE})
    reduced = reduce_frames(DeviceFrames("d", "d", stacks), layout, sensor, threads=1)
    bias = reduced.bias
    assert bias is not None
    error = np.sqrt(bias.variance / np.maximum(bias.count, 1))
    master = Master("bias", bias.mean, error, bias.count, "DN", bias.stack)
    return Inputs(sensor, reduced, Masters(master, None, None), {})


def bench(seed: int, troubles: tuple[str, ...]) -> Inputs:
    """Four biases, eight pairs, eight flats; 2 electron/DN, 8 electron, PRNU 1 %."""
    rng, other = np.random.default_rng(seed), np.random.default_rng([seed, 1])
    response = 1 + 0.01 * rng.standard_normal(SHAPE)
    rows, columns = np.mgrid[-1 : 1 : SHAPE[0] * 1j, -1 : 1 : SHAPE[1] * 1j]
    lamp = np.ones(SHAPE)
    if "vignetting" in troubles:
        lamp = np.cos(np.arctan(0.35 * np.hypot(rows - 0.2, columns))) ** 4
    hot = np.zeros(SHAPE)
    if "hot pixels" in troubles:
        hot = np.where(other.random(SHAPE) < 0.01, 200 * other.exponential(size=SHAPE), 0.0)

    def frame(light: float, exposure: float) -> np.ndarray:
        charge = light * lamp * response + hot * exposure
        charge = charge + np.sqrt(charge) * rng.standard_normal(SHAPE)
        charge += 8 * rng.standard_normal(SHAPE)
        if "events" in troubles:
            for row, column in zip(
                other.integers(0, SHAPE[0] - 4, EVENTS), other.integers(0, SHAPE[1] - 4, EVENTS),
                strict=True,
            ):  # fmt: skip
                charge[row + np.arange(4), column + np.arange(4)] += other.exponential(2000, 4)
        return np.clip(np.rint(500 + charge / 2), 0, 65535)

    def flats(light: float, count: int) -> tuple[Stack, np.ndarray]:
        fade = 0.995 if "drift" in troubles else 1.0
        values = [frame(light * fade**k, EXPOSURE) for k in range(count)]
        return stack_of("flat", count, exposure=EXPOSURE, level=light), np.stack(values)

    frames = [(stack_of("bias", 4), np.stack([frame(0.0, 0.0) for _ in range(4)]))]
    frames += [flats(light, 2) for light in np.linspace(2000, 60000, 8)]
    frames.append(flats(30001.0, 8))
    dark = np.stack([frame(0.0, EXPOSURE) for _ in range(6)])
    frames.append((stack_of("dark", 6, exposure=EXPOSURE), dark))
    return inputs_of(frames)


def found(inputs: Inputs) -> dict[str, Measurement]:
    transfer = photon_transfer(inputs, PhotonTransferOptions(model="linear"))
    inputs = knowing(inputs, *transfer.measurements)
    response = response_uniformity(inputs, ResponseUniformityOptions())
    return {m.name: m for m in (*transfer.measurements, *response.measurements)}


@pytest.fixture(scope="module")
def untroubled() -> list[dict[str, Measurement]]:
    return [found(bench(seed, ())) for seed in range(2)]


@pytest.mark.parametrize("troubles", [*((one,) for one in TROUBLES), TROUBLES], ids=str)
def test_gain_and_prnu_hardly_move(untroubled, troubles):
    # The same noise is drawn with and without, so the difference is the trouble's own.
    troubled = [found(bench(seed, troubles)) for seed in range(2)]
    for name, most in (("conversion_gain", 0.003), ("prnu", 0.02)):
        moved = [
            with_[name].value / without[name].value - 1
            for with_, without in zip(troubled, untroubled, strict=True)
        ]
        assert abs(np.mean(moved)) < most, (name, moved)


@pytest.mark.parametrize("stage", ["dsnu", "prnu"])
def test_uniformity_does_not_drift_with_the_number_of_frames(stage):
    rng = np.random.default_rng(21)
    response = 1 + 0.01 * rng.standard_normal(SHAPE)
    offset = 500 + 2 * rng.standard_normal(SHAPE)
    values = []
    bias = np.rint(offset + 4 * rng.standard_normal((16, *SHAPE)))
    for count in (4, 8, 16, 64):
        light = 20000 * response if stage == "prnu" else 40.0
        charge = light + np.sqrt(light) * rng.standard_normal((count, *SHAPE))
        charge += 8 * rng.standard_normal(charge.shape)
        kind = "flat" if stage == "prnu" else "dark"
        frames = np.rint(offset + charge / 2)
        inputs = inputs_of(
            [(stack_of("bias", 16), bias), (stack_of(kind, count, exposure=10.0), frames)]
        )
        inputs = knowing(
            inputs, Measurement("conversion_gain", "device", 2.0, 0.0, "electron / DN", 1)
        )
        run = (
            response_uniformity(inputs, ResponseUniformityOptions())
            if stage == "prnu"
            else dark_uniformity(inputs, DarkUniformityOptions())
        )
        values.append(next(m for m in run.measurements if m.name == stage))
    truth = 1.0 if stage == "prnu" else 4.0
    for value in values:
        # The pattern is one and the same, so only a common error may be left beside the noise.
        assert abs(value.value - values[-1].value) < 4 * value.standard_uncertainty
        assert abs(value.value - truth) < 5 * value.standard_uncertainty
