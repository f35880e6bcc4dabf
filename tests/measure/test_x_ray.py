"""X-rays: gain, line and charge transfer come back; hot pixels, tracks and splits do not harm."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from measure.plain_reduction import knowing
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.frame import DeviceFrames, Stack
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduced import XRayEvents
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.extended_pixel_edge import ChargeTransferOptions, charge_transfer
from sensorgrade.measure.line_fit import line_fit
from sensorgrade.measure.stage import Inputs
from sensorgrade.measure.x_ray import XRayOptions, x_ray
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.silicon import K_ALPHA, K_BETA, fano_factor, line_width, pair_energy
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import Amplifier, DarkSignal, DefectModel, Events, SensorModel
from sensorgrade.simulate.plan import FramePlan, StackPlan

RATIO = K_BETA.value / K_ALPHA.value
CCD = Sensor(
    technology="ccd",
    pixel_pitch=15.0,
    adc_bits=16,
    outputs={
        "left": OutputOptions(
            image=Section(0, 384, 0, 256), overscan=Section(0, 384, 512, 528), corner="bottom left"
        ),
        "right": OutputOptions(
            image=Section(0, 384, 256, 512), overscan=Section(0, 384, 528, 544), corner="top right"
        ),
    },
)
MODEL = SensorModel(
    sensor=CCD,
    rows=384,
    columns=544,
    amplifiers={
        "left": Amplifier(conversion_gain=1.3, read_noise=4.0),
        "right": Amplifier(conversion_gain=2.1, read_noise=5.0, bias_level=700.0),
    },
    dark=DarkSignal(current=0.05, reference=-100.0, nonuniformity=10.0),
)
TRUTH = {"output left": 1.3, "output right": 2.1}


def plan(photons=1500, frames=20):
    return FramePlan(
        stacks=(
            StackPlan(kind="bias", frames=8),
            StackPlan(kind="x-ray", frames=frames, exposure=20.0, photons=photons),
        ),
        temperature=-100.0,
    )


def inputs_of(model, bench=None, *, seed=0):
    made = simulate_device(model, bench or plan(), seed=seed)
    layout = geometry(model.sensor, {"": (model.rows, model.columns)})
    reduced = reduce_frames(made.frames, layout, model.sensor, threads=1)
    return Inputs(model.sensor, reduced, Masters(None, None, None), {})


def by_name(result):
    return {(m.name, m.scope): m for m in result.measurements}


@pytest.mark.parametrize(
    "parallel, serial, cloud", [(1e-5, 1e-5, 0.0), (3e-6, 1e-4, 0.0), (1e-5, 2e-5, 1.2)]
)
def test_gain_and_transfer_come_back(parallel, serial, cloud):
    model = replace(
        MODEL,
        cti_parallel=parallel,
        cti_serial=serial,
        charge_cloud=cloud,
        defects=(DefectModel(kind="hot", count=30, current=30.0),),
        events=Events(rate=2.0),
    )
    found = by_name(x_ray(inputs_of(model), XRayOptions()))
    for scope, gain in TRUTH.items():
        measured = found["x_ray_gain", scope]
        assert_allclose(measured.value, gain, rtol=0.003)
        assert_allclose(measured.standard_uncertainty / measured.value, 0.005, rtol=0.05)
        assert found["conversion_gain", scope].value == measured.value
        for name, truth in (("cti_parallel", parallel), ("cti_serial", serial)):
            m = found[name, scope]
            assert abs(m.value - truth) < 5 * m.standard_uncertainty + 0.02 * truth, m
        assert_allclose(found["x_ray_line_ratio", scope].value, RATIO, atol=0.003)


def test_width_is_that_of_noise_and_fano_factor():
    found = by_name(x_ray(inputs_of(MODEL), XRayOptions()))
    pair = pair_energy(173.15)
    sd = line_width(K_ALPHA.value, pair, fano_factor(173.15), np.sqrt(4.0**2 + 1.0 + 1.3**2 / 12))
    m = found["x_ray_width", "output left"]
    # Lines of 5898.75 and 5887.65 eV together are a little wider than one.
    assert_allclose(m.value, 2.3548 * sd * pair, rtol=0.03)


def test_stated_uncertainties_are_the_scatter_found():
    # Statistical part only: the pair energy's 0.5 % is the same in every run.
    small = plan(photons=1000, frames=8)
    z = {"cti_parallel": [], "cti_serial": []}
    gains = []
    for seed in range(20):
        result = x_ray(
            inputs_of(replace(MODEL, cti_parallel=1e-5), small, seed=seed), XRayOptions()
        )
        for (name, _scope), m in by_name(result).items():
            if name in z:
                truth = 1e-5 if name == "cti_parallel" else 0.0
                z[name].append((m.value - truth) / m.standard_uncertainty)
        line = result.lines[0]
        error = np.sqrt(line.whole.covariance[0, 0])
        gains.append((line.whole.parameters[0] - K_ALPHA.value / pair_energy(173.15) / 1.3) / error)
    for name, deviations in z.items():
        assert abs(np.mean(deviations)) < 4.5 / np.sqrt(len(deviations)), name
        assert np.std(deviations) == pytest.approx(1, abs=0.4), name
    assert np.std(gains) == pytest.approx(1, abs=0.5)


def test_exact_lines_are_found_exactly():
    # Seven events of the first line and one of the second, each once above and once below.
    places = np.random.default_rng(3).integers(1, 2000, (200, 2)).astype(float)
    transfers = np.repeat(places, 16, axis=0)
    line = np.tile(np.repeat([1.0] * 7 + [RATIO], 2), 200)
    width = np.tile([-9.0, 9.0], 8 * 200) * np.sqrt(line)
    values = 1000.0 * np.exp(-transfers @ np.array([3e-6, 8e-6])) * line + width
    fit = line_fit(values, transfers, ratio=RATIO, fit_ratio=False)
    assert_allclose(fit.parameters, [1000.0, 3e-6, 8e-6], rtol=1e-3)
    assert_allclose(fit.width, 9.0, rtol=0.05)
    assert_allclose(fit.lines[:2], [7 / 8, 1 / 8], atol=0.01)


def test_a_gain_from_flat_pairs_stands():
    given = knowing(
        inputs_of(MODEL),
        *(Measurement("conversion_gain", s, g, 0.01, "electron / DN", 9) for s, g in TRUTH.items()),
    )
    names = [m.name for m in x_ray(given, XRayOptions()).measurements]
    assert "x_ray_gain" in names
    assert "conversion_gain" not in names


def test_the_inefficiency_of_x_rays_stands_before_that_of_overscan():
    bench = plan()
    with_flats = replace(
        bench, stacks=(*bench.stacks, StackPlan(kind="flat", frames=2, exposure=1.0, light=2e4))
    )
    given = inputs_of(replace(MODEL, cti_serial=1e-5), with_flats)
    lines = x_ray(given, XRayOptions())
    after = replace(given, results={"x_ray": lines})
    result = charge_transfer(after, ChargeTransferOptions())
    assert result.measurements == ()
    assert "that of X-rays" in result.findings[0].seen + result.findings[1].seen
    assert len(result.curves) == 2


def test_a_second_line_out_of_place_is_told():
    found = x_ray(inputs_of(MODEL), XRayOptions(second_energy=6700.0))
    assert any("the second line lies at 1.1" in f.seen for f in found.findings)
    assert all("second line" not in f.seen for f in x_ray(inputs_of(MODEL), XRayOptions()).findings)


def test_every_result_carries_the_caution():
    finding = x_ray(inputs_of(MODEL), XRayOptions()).findings[0]
    assert "licensed people under local rules" in finding.seen


def test_events_are_found_in_reading_order_with_what_is_about_them():
    images = [np.full((12, 14), 100.0, np.float32) for _ in range(5)]
    sensor = Sensor(
        technology="ccd", pixel_pitch=9.0, outputs={"": OutputOptions(corner="top right")}
    )
    rng = np.random.default_rng(1)
    bias = [image + rng.normal(0, 1, image.shape).astype(np.float32) for image in images[:3]]
    lit = images[3] + rng.normal(0, 0.1, (12, 14)).astype(np.float32)
    lit[3, 10] += 500.0  # row 8 from the top, column 3 from the right
    lit[2, 10] += 40.0  # read after it
    lit[0, 0] += 500.0  # on the border
    frames = {
        "bias": tuple(frame_from_array(image, kind="bias") for image in bias),
        "x-ray": tuple(frame_from_array(image, kind="x-ray") for image in (images[4], lit)),
    }
    device = DeviceFrames("A", "A", tuple(Stack(kind, f) for kind, f in frames.items()))
    (events,) = reduce_frames(device, geometry(sensor, {"": (12, 14)}), sensor, threads=1).x_rays
    assert_array_equal(events.frame, [1])
    assert_array_equal(events.rows, [8])
    assert_array_equal(events.columns, [3])
    assert_allclose(events.islands[0, 1, 1], 500.0, atol=3)
    assert_allclose(events.islands[0, 2, 1], 40.0, atol=3)
    assert_allclose(events.islands[0, 1, 2], 0.0, atol=3)


def test_pixels_that_give_events_again_and_again_are_left_out():
    given = inputs_of(MODEL)
    (left, right) = given.reduced.x_rays
    hot = 20
    spoilt = XRayEvents(
        left.stack,
        left.output,
        np.concatenate([left.frame, np.arange(hot, dtype=np.int32)]),
        np.concatenate([left.rows, np.full(hot, 50, np.int32)]),
        np.concatenate([left.columns, np.full(hot, 60, np.int32)]),
        np.concatenate([left.islands, np.tile(left.islands[:1], (hot, 1, 1))]),
        left.noise,
    )
    other = replace(given, reduced=replace(given.reduced, x_rays=(spoilt, right)))
    clean, repaired = (x_ray(one, XRayOptions()).lines[0] for one in (given, other))
    assert abs(repaired.fit.events - clean.fit.events) <= 2


@pytest.mark.parametrize(
    "bench, sentence",
    [
        (FramePlan(stacks=(StackPlan(kind="bias", frames=2),)), "needs frames of kind x-ray"),
        (plan(photons=50, frames=2), "needs 100 or more single events"),
    ],
)
def test_what_is_missing_is_said(bench, sentence):
    with pytest.raises(NotMeasured, match=sentence):
        x_ray(inputs_of(MODEL, bench), XRayOptions())


def test_a_cmos_sensor_has_a_gain_but_no_transfer():
    cmos = Sensor(technology="cmos", pixel_pitch=5.0)
    model = replace(MODEL, sensor=cmos, amplifiers={}, amplifier=Amplifier(conversion_gain=1.7))
    found = by_name(x_ray(inputs_of(model), XRayOptions()))
    assert_allclose(found["x_ray_gain", "device"].value, 1.7, rtol=0.003)
    assert not any(name.startswith("cti") for name, _ in found)
