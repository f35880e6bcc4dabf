"""Over many simulated devices, what is found departs from the truth as its uncertainty says."""

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.stats import norm

from measure.plain_reduction import knowing, plain_inputs, stack_of
from measure.simulated import exposures
from sensorgrade.measure.dark_current import DarkCurrentOptions, dark_current
from sensorgrade.measure.dark_uniformity import DarkUniformityOptions, dark_uniformity
from sensorgrade.measure.linearity import LinearityOptions, linearity, relative_line
from sensorgrade.measure.photon_transfer import PhotonTransferOptions, photon_transfer
from sensorgrade.measure.read_noise import ReadNoiseOptions, read_noise
from sensorgrade.measure.response_uniformity import (
    ResponseUniformityOptions,
    response_uniformity,
)
from sensorgrade.measure.saturation import SaturationOptions, saturation
from sensorgrade.measurement import Measurement

SEEDS = 200
GAIN = Measurement("conversion_gain", "device", 2.0, 0.0, "electron / DN", 1)


def scores(
    found: list[dict[str, Measurement]], name: str, truth: float | NDArray[np.float64]
) -> NDArray[np.float64]:
    """(found - true) / stated of every device."""
    values = np.array([one[name].value for one in found])
    return (values - truth) / np.array([one[name].standard_uncertainty for one in found])


def assert_standard(z: NDArray[np.float64]) -> None:
    assert abs(z.mean()) < 0.2
    assert 0.8 < z.std(ddof=1) < 1.2


def by_name(*results) -> dict[str, Measurement]:
    return {m.name: m for result in results for m in result.measurements}


@pytest.fixture(scope="module")
def transferred() -> list[dict[str, Measurement]]:
    found = []
    for seed in range(SEEDS):
        rng = np.random.default_rng([1, seed])
        response = 1 + 0.01 * rng.standard_normal((64, 64))
        frames = [(stack_of("bias", 4), exposures(rng, np.zeros((64, 64)), frames=4))]
        frames += [
            (stack_of("flat", 2, level=light), exposures(rng, light * response, frames=2))
            for light in np.linspace(1000, 40000, 8)
        ]
        inputs = plain_inputs(frames)
        transfer = photon_transfer(inputs, PhotonTransferOptions(model="linear"))
        inputs = knowing(inputs, *transfer.measurements)
        found.append(by_name(transfer, read_noise(inputs, ReadNoiseOptions())))
    return found


def test_gain_departs_as_stated(transferred):
    assert_standard(scores(transferred, "conversion_gain", 2.0))


def test_read_noise_departs_as_stated(transferred):
    assert_standard(scores(transferred, "read_noise", 8.0))


@pytest.fixture(scope="module")
def darkened() -> tuple[list[dict[str, Measurement]], NDArray[np.float64]]:
    """4 biases, 6 darks of 10 s and of 40 s; 12 electron/s, offsets that move 0.3 DN a frame.

    With the true mean dark current of each device, which is what its mean should find.
    """
    found, means = [], []
    for seed in range(SEEDS):
        rng = np.random.default_rng([2, seed])
        shape = (96, 96)
        offset = 500 + 1.5 * rng.standard_normal(shape)
        current = 12.0 + rng.standard_normal(shape)
        frames = []
        for kind, count, time in (("bias", 4, 0.0), ("dark", 6, 10.0), ("dark", 6, 40.0)):
            drift = 0.3 * rng.standard_normal((count, 1, 1))
            known = {} if kind == "bias" else {"exposure": time}
            frames.append(
                (
                    stack_of(kind, count, **known),
                    exposures(rng, current * time, frames=count, bias=offset + drift),
                )
            )
        inputs = knowing(plain_inputs(frames), GAIN)
        means.append(current.mean())
        found.append(
            by_name(
                dark_current(inputs, DarkCurrentOptions()),
                dark_uniformity(inputs, DarkUniformityOptions()),
            )
        )
    return found, np.array(means)


@pytest.mark.parametrize(
    "name", ["dark_current", "dark_current_from_variance", "dark_current_median"]
)
def test_dark_current_departs_as_stated(darkened, name):
    found, means = darkened
    assert_standard(scores(found, name, means))


def test_dsnu_departs_as_stated(darkened):
    assert_standard(scores(darkened[0], "dsnu", np.sqrt(3.0**2 + 40.0**2)))


def test_prnu_departs_as_stated():
    found = []
    rows, columns = np.mgrid[-1:1:96j, -1:1:128j]
    lamp = 1 - 0.15 * (rows**2 + columns**2) + 0.05 * columns
    for seed in range(SEEDS):
        rng = np.random.default_rng([3, seed])
        response = 1 + 0.01 * rng.standard_normal(lamp.shape)
        offset = 500 + 3 * rng.standard_normal(lamp.shape)
        flat = exposures(rng, 20000 * lamp * response, frames=8, bias=offset)
        bias = exposures(rng, np.zeros(lamp.shape), frames=8, bias=offset)
        inputs = knowing(
            plain_inputs([(stack_of("bias", 8), bias), (stack_of("flat", 8, level=1.0), flat)]),
            GAIN,
        )
        found.append(by_name(response_uniformity(inputs, ResponseUniformityOptions())))
    assert_standard(scores(found, "prnu", 1.0))
    assert_standard(scores(found, "prnu_pixel", 1.0))


def test_linearity_error_departs_as_stated():
    # Signal bends by 2 % over the range; the lamp flickers by 0.05 %.
    light = np.linspace(0.05, 1.0, 20)
    curve = 30000 * light * (1 - 0.02 * light)
    inside = (curve >= 0.05 * curve.max()) & (curve <= 0.95 * curve.max())
    departure = np.abs(relative_line(light[inside], curve[inside]).departure)
    found = []
    for seed in range(SEEDS):
        rng = np.random.default_rng([4, seed])
        frames = [(stack_of("bias", 2), 500.0 + np.zeros((2, 8, 8)))]
        for x, y in zip(light, curve, strict=True):
            flicker = 1 + 5e-4 * rng.standard_normal((2, 1, 1))
            frames.append((stack_of("flat", 2, level=x), 500 + y * flicker * np.ones((1, 8, 8))))
        saturated = Measurement(
            "saturation_capacity", "device", 2.0 * curve.max(), 0.0, "electron", 1
        )
        inputs = knowing(plain_inputs(frames), GAIN, saturated)
        found.append(by_name(linearity(inputs, LinearityOptions())))
    assert_standard(scores(found, "linearity_error", departure.mean()))
    assert_standard(scores(found, "linearity_departure", departure.max()))


def test_saturation_departs_as_stated():
    # Where the variance of clipped charge peaks: from the moments of a Gaussian held at the well.
    well = 40000.0
    charge = np.linspace(0.9, 1.02, 4001) * well
    spread = np.sqrt(charge)
    z = (well - charge) / spread
    below, density = norm.cdf(z), norm.pdf(z)
    mean = charge * below - spread * density + well * (1 - below)
    second = (charge**2 + spread**2) * below - spread * (well + charge) * density
    second += well**2 * (1 - below)
    truth = mean[np.argmax(second - mean**2)]
    found = []
    for seed in range(SEEDS):
        rng = np.random.default_rng([5, seed])
        step = 1600.0
        frames = [(stack_of("bias", 2), exposures(rng, np.zeros((64, 64)), frames=2))]
        frames += [
            (
                stack_of("flat", 2, level=light),
                exposures(rng, np.full((64, 64), light), frames=2, full_well=well),
            )
            for light in 30000 + step * (np.arange(10) + rng.uniform())
        ]
        inputs = knowing(plain_inputs(frames), GAIN)
        found.append(by_name(saturation(inputs, SaturationOptions())))
    assert_standard(scores(found, "saturation_capacity", truth))
