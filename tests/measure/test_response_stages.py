"""Transfer, saturation, linearity, uniformity and dark current: choices, limits and sentences."""

from dataclasses import replace

import numpy as np
import pytest

from measure.plain_reduction import knowing, plain_inputs, stack_of
from measure.simulated import exposures
from sensorgrade import silicon
from sensorgrade.errors import NotMeasured
from sensorgrade.measure.dark_current import DarkCurrentOptions, dark_current
from sensorgrade.measure.linearity import LinearityOptions, light_of, linearity
from sensorgrade.measure.photon_transfer import PhotonTransferOptions, photon_transfer
from sensorgrade.measure.read_noise import ReadNoiseOptions, read_noise
from sensorgrade.measure.response_uniformity import (
    ResponseUniformityOptions,
    response_uniformity,
)
from sensorgrade.measure.saturation import SaturationOptions, saturation
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor

GAIN = Measurement("conversion_gain", "device", 2.0, 0.0, "electron / DN", 1)
SHAPE = (96, 96)


def by_name(result) -> dict[str, Measurement]:
    return {m.name: m for m in result.measurements}


def transfer_frames(levels: np.ndarray, *, seed: int = 0, bias_noise: float = 8.0, **known) -> list:
    rng = np.random.default_rng(seed)
    frames = [
        (stack_of("bias", 4), exposures(rng, np.zeros(SHAPE), frames=4, read_noise=bias_noise))
    ]
    return frames + [
        (stack_of("flat", 2, level=x), exposures(rng, np.full(SHAPE, x), frames=2, **known))
        for x in levels
    ]


def test_charge_that_repels_does_not_bend_the_gain():
    scores, straight = [], []
    for seed in range(20):
        frames = transfer_frames(np.linspace(2000, 80000, 20), seed=seed, curvature=-2e-6)
        inputs = plain_inputs(frames)
        found = by_name(photon_transfer(inputs, PhotonTransferOptions()))
        scores.append(
            [
                (found[name].value - truth) / found[name].standard_uncertainty
                for name, truth in (("conversion_gain", 2.0), ("variance_curvature", -2e-6))
            ]
        )
        line = by_name(photon_transfer(inputs, PhotonTransferOptions(model="linear")))
        straight.append(line["conversion_gain"].value)
    assert np.all(np.abs(np.mean(scores, axis=0)) < 5 / np.sqrt(20))
    assert np.mean(straight) > 2.1  # what a straight line would have made of it


def test_range_ends_below_saturation_and_says_why():
    inputs = plain_inputs(transfer_frames(np.linspace(2000, 60000, 30), full_well=40000.0))
    region = photon_transfer(inputs, PhotonTransferOptions()).regions[0]
    assert 0.65 * 20000 < region.upper < 0.72 * 20000
    assert "where the variance peaks" in region.range_reason


def test_noise_that_biases_do_not_have_is_a_finding():
    frames = transfer_frames(np.linspace(50, 1000, 12), bias_noise=3.0, read_noise=12.0)
    inputs = plain_inputs(frames)
    transfer = photon_transfer(inputs, PhotonTransferOptions(model="linear"))
    assert "the gain is from the flats alone" in transfer.findings[0].seen
    assert not transfer.regions[0].anchored
    noise = read_noise(knowing(inputs, *transfer.measurements), ReadNoiseOptions())
    assert "differ by more than four times" in noise.findings[0].seen


def test_flats_without_a_level_of_no_light_are_not_measured():
    frames = transfer_frames(np.linspace(2000, 60000, 6))[1:]
    with pytest.raises(NotMeasured, match="needs bias frames or an overscan"):
        photon_transfer(plain_inputs(frames), PhotonTransferOptions())


@pytest.mark.parametrize("last_code, limit", [(65535.0, "full well"), (18000.0, "converter")])
def test_which_limit_came_first(last_code, limit):
    frames = transfer_frames(np.linspace(2000, 60000, 30), full_well=40000.0, last_code=last_code)
    inputs = knowing(plain_inputs(frames, last_code=last_code), GAIN)
    region = saturation(inputs, SaturationOptions()).regions[0]
    assert region.limit == limit
    truth = 39373 if limit == "full well" else 2 * (18000 - 500) - 3 * np.sqrt(35000)
    assert (
        abs(region.measurements[0].value - truth) < 3 * region.measurements[0].standard_uncertainty
    )


def test_flats_that_do_not_saturate_say_how_bright_they_were():
    inputs = knowing(plain_inputs(transfer_frames(np.linspace(2000, 30000, 8))), GAIN)
    with pytest.raises(NotMeasured, match="still rises at the brightest flat of 29"):
        saturation(inputs, SaturationOptions())


def test_light_is_told_by_what_varies():
    times = [stack_of("flat", 2, exposure=float(t), level=1.0) for t in (1, 2, 3)]
    levels = [stack_of("flat", 2, exposure=1.0, level=float(x)) for x in (1, 2, 3)]
    both = [stack_of("flat", 2, exposure=float(t), level=float(t)) for t in (1, 2, 3)]
    assert light_of(times, "automatic")[1] == "exposure"
    assert light_of(levels, "automatic")[1] == "level"
    light, by = light_of(both, "automatic")
    assert by == "exposure x level"
    assert list(light) == [1, 4, 9]
    with pytest.raises(NotMeasured, match="exposure or level differs"):
        light_of(times[:1], "automatic")


def test_too_few_levels_for_linearity_are_counted():
    frames = transfer_frames(np.linspace(2000, 20000, 3))
    with pytest.raises(NotMeasured, match="needs flats at 5 or more levels"):
        linearity(knowing(plain_inputs(frames), GAIN), LinearityOptions())


def test_every_wavelength_has_its_prnu():
    rng = np.random.default_rng(4)
    frames = [(stack_of("bias", 4), exposures(rng, np.zeros(SHAPE), frames=4))]
    for wavelength, prnu in (("550", 0.01), ("Red", 0.02)):
        response = 1 + prnu * rng.standard_normal(SHAPE)
        frames.append(
            (
                stack_of("flat", 6, exposure=1.0, wavelength=wavelength),
                exposures(rng, 20000 * response, frames=6),
            )
        )
    result = response_uniformity(knowing(plain_inputs(frames), GAIN), ResponseUniformityOptions())
    found = {m.scope: m for m in result.measurements if m.name == "prnu"}
    assert set(found) == {"device, 550 nm", "device, Red"}
    assert abs(found["device, 550 nm"].value - 1) < 5 * found["device, 550 nm"].standard_uncertainty
    assert abs(found["device, Red"].value - 2) < 5 * found["device, Red"].standard_uncertainty


def test_dark_pattern_that_noise_hides_is_given_as_a_limit():
    from sensorgrade.measure.dark_uniformity import DarkUniformityOptions, dark_uniformity

    rng = np.random.default_rng(5)
    dark = exposures(rng, np.zeros(SHAPE), frames=4)
    inputs = plain_inputs([(stack_of("dark", 4, exposure=10.0), dark)])
    result = dark_uniformity(knowing(inputs, GAIN), DarkUniformityOptions())
    assert "dsnu" not in by_name(result)
    assert any("dsnu is not resolved; it is below" in f.seen for f in result.findings)


def test_darks_at_four_temperatures_give_the_activation_energy():
    rng = np.random.default_rng(6)
    frames = []
    for celsius in (-20.0, -10.0, 0.0, 10.0):
        rate = silicon.dark_current(0.05, 1e-6, celsius + silicon.ZERO_CELSIUS)
        for time in (1.0, 60.0):
            level = rate * time
            frames.append(
                (
                    stack_of("dark", 6, exposure=time, temperature=celsius),
                    exposures(rng, np.full(SHAPE, level), frames=6)
                    + 0.2 * rng.standard_normal((6, 1, 1)),
                )
            )
    inputs = knowing(plain_inputs(frames), GAIN)
    result = dark_current(inputs, DarkCurrentOptions(temperature=0.0))
    found = by_name(result)
    assert found["dark_temperature"].value == 0.0
    truth = silicon.generation_slope(silicon.ZERO_CELSIUS)
    energy = found["activation_energy"]
    assert abs(energy.value - truth) < 4 * energy.standard_uncertainty
    assert energy.standard_uncertainty < 0.03
    expected = silicon.dark_current(0.05, 1e-6, silicon.ZERO_CELSIUS)
    current = found["dark_current"]
    assert abs(current.value - expected) < 4 * current.standard_uncertainty


def test_a_single_dark_exposure_without_bias_is_not_enough():
    rng = np.random.default_rng(7)
    frames = [(stack_of("dark", 4, exposure=10.0), exposures(rng, np.zeros(SHAPE), frames=4))]
    with pytest.raises(NotMeasured, match="two or more exposures, or bias frames"):
        dark_current(knowing(plain_inputs(frames), GAIN), DarkCurrentOptions())


def test_an_output_that_cannot_be_measured_does_not_stop_the_other():
    sensor = Sensor(
        technology="ccd",
        pixel_pitch=10.0,
        outputs={
            "left": OutputOptions(image=Section(0, 96, 0, 96)),
            "right": OutputOptions(image=Section(0, 96, 96, 192)),
        },
    )
    frames = [
        (stack, np.concatenate([values, np.full_like(values, 500)], axis=2))
        for stack, values in transfer_frames(np.linspace(2000, 30000, 6))
    ]
    result = photon_transfer(plain_inputs(frames, sensor=sensor), PhotonTransferOptions())
    assert {m.scope for m in result.measurements} == {"output left"}
    finding = next(f for f in result.findings if f.where == "photon_transfer, output right")
    assert "conversion_gain" in finding.undecides


def test_results_name_what_they_say_they_measure():
    inputs = plain_inputs(transfer_frames(np.linspace(2000, 60000, 12)))
    from sensorgrade.measure.photon_transfer import STAGE

    declared = {q.name: q.unit for q in STAGE.measures}
    for found in STAGE.run(inputs, STAGE.options()).measurements:
        assert declared[found.name] == found.unit
        assert type(found.value) is float
        assert type(found.standard_uncertainty) is float
        assert replace(found) == found
