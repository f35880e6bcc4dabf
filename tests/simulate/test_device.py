"""A simulated device is what its model says: moments, structure, truth, determinism."""

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from sensorgrade.errors import RequestError
from sensorgrade.recipe.model import Sensor
from sensorgrade.silicon import dark_current_ratio
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import (
    Amplifier,
    DarkSignal,
    DefectModel,
    Events,
    Offsets,
    Response,
)
from sensorgrade.simulate.plan import FramePlan, StackPlan, frame_plan
from simulate.sensors import one_output, two_outputs


def images(device, kind):
    return [
        frame.planes[""].data.astype(float) for frame in device.frames.frames if frame.kind == kind
    ]


def one_stack(kind, frames, **values):
    return FramePlan(stacks=(StackPlan(kind=kind, frames=frames, **values),))


def test_same_seed_same_frames_another_serial_another_device():
    model = two_outputs(response=Response(pixel=1.0), events=Events(rate=100.0))
    plan = frame_plan(bias=2, darks=((2, 100.0),), levels=(500.0, 20000.0))
    first, again = (simulate_device(model, plan, seed=3, serial="A") for _ in range(2))
    other = simulate_device(model, plan, seed=3, serial="B")
    reseeded = simulate_device(model, plan, seed=4, serial="A")
    for one, same, others, new in zip(
        *(device.frames.frames for device in (first, again, other, reseeded)), strict=True
    ):
        data = one.planes[""].data
        assert_array_equal(data, same.planes[""].data)
        assert (data != others.planes[""].data).any()
        assert (data != new.planes[""].data).any()
    assert_array_equal(first.truth.response, again.truth.response)
    assert (first.truth.response != other.truth.response).any()


def test_a_frame_does_not_depend_on_those_before_it():
    model = two_outputs(response=Response(pixel=1.0))
    flat = StackPlan(kind="flat", frames=2, light=2000.0)
    short = FramePlan(stacks=(StackPlan(kind="bias", frames=3), flat))
    long = FramePlan(stacks=(StackPlan(kind="dark", frames=3, exposure=50.0), flat))
    for one, two in zip(
        images(simulate_device(model, short), "flat"),
        images(simulate_device(model, long), "flat"),
        strict=True,
    ):
        assert_array_equal(one, two)


@pytest.mark.parametrize("light", [0.0, 20.0, 900.0, 1100.0, 50000.0])
def test_mean_and_variance_follow_the_noise_model(light):
    # One frame of n pixels; mean and variance have standard errors s / sqrt(n), s² sqrt(2 / n).
    chain = Amplifier(conversion_gain=1.5, read_noise=6.0, bias_level=500.3)
    model = one_output(512, 512, amplifier=chain)
    device = simulate_device(model, one_stack("flat", 1, light=light), seed=2)
    (image,) = images(device, "flat")
    variance = (36 + light) / 1.5**2 + 1 / 12
    assert_allclose(image.mean(), 500.3 + light / 1.5, atol=5 * np.sqrt(variance / image.size))
    assert_allclose(image.var(), variance, rtol=5 * np.sqrt(2 / image.size))


def test_brighter_pixels_repel_charge_but_lose_none():
    a = -2e-6
    light = 50000.0
    model = one_output(
        512, 512, variance_curvature=a, amplifier=Amplifier(conversion_gain=1.0, read_noise=0.0)
    )
    image = images(simulate_device(model, one_stack("flat", 1, light=light)), "flat")[0]
    deviation = image - image.mean()
    inner = deviation[:-1, :-1]
    right = (inner * deviation[:-1, 1:]).mean()
    up = (inner * deviation[1:, :-1]).mean()
    mixed = a * light / 8
    expected = light * (1 + 8 * mixed + 20 * mixed**2)
    error = light / np.sqrt(image.size)
    assert_allclose(image.var(), expected, atol=5 * np.sqrt(2) * error)
    assert right > 10 * error
    assert up > 10 * error
    # Pairs with one pixel between and diagonal pairs carry strength² terms, 4 and 8 of them.
    total = image.var() + 2 * right + 2 * up
    second_order = 20 * mixed**2 * light
    assert_allclose(total, light, atol=second_order + 5 * 3 * error)


def test_dark_current_follows_the_law_of_silicon():
    model = one_output(256, 256, dark=DarkSignal(current=20.0, reference=20.0))
    plan = FramePlan(
        stacks=tuple(
            StackPlan(kind="dark", frames=1, exposure=30.0, temperature=temperature)
            for temperature in (20.0, 0.0)
        )
    )
    warm, cold = images(simulate_device(model, plan), "dark")
    ratio = dark_current_ratio(273.15, 293.15)
    error = 5 * np.sqrt(600 + 25) / 2 / 256
    assert_allclose(warm.mean(), 1000 + 300, atol=error)
    assert_allclose(cold.mean(), 1000 + 300 * ratio, atol=error)


def test_each_output_has_its_own_chain_and_its_overscan_holds_no_charge():
    right = Amplifier(conversion_gain=4.0, bias_level=2000.0)
    model = two_outputs(amplifiers={"right": right}, dark=DarkSignal(current=5.0))
    image = images(simulate_device(model, one_stack("flat", 1, light=8000.0)), "flat")[0]
    assert_allclose(image[:, :48].mean(), 1000 + 4000, rtol=0.01)
    assert_allclose(image[:, 48:96].mean(), 2000 + 2000, rtol=0.01)
    assert_allclose(image[:, 96:104].mean(), 1000, atol=1)
    assert_allclose(image[:, 104:112].mean(), 2000, atol=1)


def test_curvature_lowers_the_output_at_full_well_by_its_share():
    chain = Amplifier(conversion_gain=2.0, read_noise=0.0, curvature=4.0)
    model = one_output(256, 256, full_well=80000.0, amplifier=chain)
    image = images(simulate_device(model, one_stack("flat", 1, light=40000.0)), "flat")[0]
    # the mean of q² is mean² + mean
    expected = (40000 - 0.04 * (40000**2 + 40000) / 80000) / 2
    assert_allclose(image.mean() - 1000, expected, atol=5 * 100 / 256)


@pytest.mark.parametrize(("bits", "full_well"), [(12, 1e6), (16, 3000.0)])
def test_saturation_is_the_truth_said(bits, full_well):
    sensor = Sensor(technology="cmos", pixel_pitch=5.0, adc_bits=bits)
    model = one_output(
        sensor=sensor, full_well=full_well, amplifier=Amplifier(read_noise=0.0, bias_level=100.0)
    )
    device = simulate_device(model, one_stack("flat", 1, light=2e6))
    image = images(device, "flat")[0]
    truth = device.truth.regions["device"]
    assert_allclose(2 * (image - 100), truth.saturation_capacity)


def test_truth_holds_the_spreads_of_the_maps_that_were_used():
    model = one_output(
        response=Response(pixel=1.0, row=0.5, column=0.5),
        dark=DarkSignal(current=10.0, nonuniformity=20.0, tail_fraction=5.0, tail_mean=30.0),
        offsets=Offsets(pixel=4.0),
        defects=(DefectModel(kind="hot", count=5, current=500.0),),
    )
    plan = FramePlan(
        stacks=(
            StackPlan(kind="bias", frames=100),
            StackPlan(kind="dark", frames=100, exposure=20.0),
            StackPlan(kind="flat", frames=100, light=40000.0),
        ),
    )
    device = simulate_device(model, plan)
    truth, region = device.truth, device.truth.regions["device"]
    bias, dark, flat = (2 * np.mean(images(device, kind), 0) for kind in ("bias", "dark", "flat"))
    assert_allclose(bias - 2000, truth.offset, atol=6 * 5.1 / 10)
    current = (dark - bias) / 20
    noise = np.sqrt(truth.dark_current * 20 + 52) / 10 / 20
    assert np.abs((current - truth.dark_current) / noise).max() < 6
    response = (flat - bias) / 40000
    assert np.abs(response - truth.response).max() < 6 * 0.005 * 0.12 / 1
    assert region.dark_current == pytest.approx(truth.dark_current[truth.sound].mean(), rel=1e-5)
    assert region.prnu == pytest.approx(100 * truth.response[truth.sound].std(), rel=1e-2)
    assert (~truth.sound).sum() == 5


def test_colour_filters_scale_the_response_of_their_pixels():
    sensor = Sensor(technology="cmos", pixel_pitch=5.0, colour="GRBG")
    model = one_output(sensor=sensor, response=Response(red=50.0, green=100.0, blue=25.0))
    truth = simulate_device(model, one_stack("flat", 1, light=100.0)).truth
    assert_array_equal(truth.response[:2, :2], [[1.0, 0.5], [0.25, 1.0]])


def test_row_noise_is_shared_by_a_row_and_its_overscan():
    model = two_outputs(
        offsets=Offsets(row_noise=20.0), amplifier=Amplifier(conversion_gain=1.0, read_noise=0.5)
    )
    image = images(simulate_device(model, one_stack("bias", 1)), "bias")[0]
    assert_allclose(image[:, :48].mean(1), image[:, 96:104].mean(1), atol=1.5)
    assert_allclose(image[:, 48:96].mean(1), image[:, 104:112].mean(1), atol=1.5)
    assert 12 < image[:, :48].mean(1).std() < 28


def test_pickup_has_the_stated_amplitude_and_period():
    offsets = Offsets(pickup=30.0, pickup_period=16.0)
    model = one_output(offsets=offsets, amplifier=Amplifier(conversion_gain=1.0, read_noise=0.0))
    image = images(simulate_device(model, one_stack("bias", 1)), "bias")[0]
    spectrum = np.abs(np.fft.rfft(image.ravel() - image.mean())) * 2 / image.size
    assert np.argmax(spectrum) == image.size // 16
    assert spectrum.max() == pytest.approx(30.0, rel=0.01)


def test_events_come_at_the_stated_rate_with_the_stated_charge():
    # Mean path through a level layer of depth d for the cos² law is 4/3 d.
    model = one_output(
        256,
        256,
        events=Events(rate=200.0, thickness=20.0),
        amplifier=Amplifier(conversion_gain=1.0, read_noise=0.0),
    )
    dark = images(simulate_device(model, one_stack("dark", 40, exposure=60.0)), "dark")
    charge = np.array([image.sum() - 1000 * image.size for image in dark])
    tracks = 200 * 256**2 * 1e-6
    floor = tracks * 80 * 20 * 4 / 3
    assert floor < charge.mean() < 1.35 * floor  # the Moyal mean lies above its most probable


def test_lamp_noise_and_drift_move_the_level():
    plan = FramePlan(
        stacks=(StackPlan(kind="flat", frames=50, light=50000.0),), lamp_noise=1.0, lamp_drift=-10.0
    )
    flats = images(simulate_device(one_output(), plan), "flat")
    level = np.array([image.mean() - 1000 for image in flats]) / 25000
    trend = np.linspace(1, 0.9, 50)
    assert np.std(level - trend) == pytest.approx(0.01, abs=5 * 0.001)
    assert np.mean(level - trend) == pytest.approx(0, abs=5 * 0.01 / np.sqrt(50))


def test_shading_darkens_the_corners():
    plan = FramePlan(stacks=(StackPlan(kind="flat", frames=1, light=50000.0),), shading=30.0)
    image = images(simulate_device(one_output(), plan), "flat")[0] - 1000
    # The mean of (1 - 2 i / 127)² over the first 8 rows and columns is 0.893.
    assert image[:8, :8].mean() == pytest.approx(25000 * (1 - 0.3 * 0.893), rel=0.005)
    assert image[60:68, 60:68].mean() == pytest.approx(25000, rel=0.01)


def test_a_converter_of_more_than_16_bits_is_refused():
    sensor = Sensor(technology="cmos", pixel_pitch=5.0, adc_bits=18)
    with pytest.raises(RequestError, match="16 or less"):
        simulate_device(one_output(sensor=sensor), one_stack("bias", 1))


def test_times_leave_room_for_the_exposures():
    plan = frame_plan(bias=2, darks=((2, 100.0),))
    times = [frame.time for frame in simulate_device(one_output(8, 8), plan).frames.frames]
    assert_allclose(np.diff(times), [2.0, 2.0, 102.0])
