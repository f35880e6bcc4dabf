"""Charge transfer from overscan: truth comes back in both directions with an honest uncertainty."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from measure.plain_reduction import knowing, plain_inputs, stack_of
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduced import Trails
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.extended_pixel_edge import (
    ChargeTransferOptions,
    charge_transfer,
)
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import Amplifier, Offsets, Response, SensorModel
from sensorgrade.simulate.plan import frame_plan

OVERSCAN, BEYOND = 20, 16
PLAN = frame_plan(bias=6, darks=(), levels=(8e3, 3e4, 5e4), flats=((4, 4e4),))


def sensor(rows, columns):
    # Outputs stand side by side; parallel overscan rows lie above them, or below for the top.
    width = 2 * columns
    outputs = {}
    for at, (name, corner) in enumerate((("left", "bottom left"), ("right", "top right"))):
        across = (at * columns, (at + 1) * columns)
        overscan = (width + at * OVERSCAN, width + (at + 1) * OVERSCAN)
        top = corner.startswith("top")
        along = (BEYOND, BEYOND + rows)
        beyond = (0, BEYOND) if top else (BEYOND + rows, 2 * BEYOND + rows)
        outputs[name] = OutputOptions(
            image=Section(*along, *across),
            overscan=Section(*along, *overscan),
            parallel_overscan=Section(*beyond, *across),
            corner=corner,
        )
    return Sensor(technology="ccd", pixel_pitch=15.0, adc_bits=16, outputs=outputs)


def model(rows=192, columns=128, **changes):
    plain = SensorModel(
        sensor=sensor(rows, columns),
        rows=rows + 2 * BEYOND,
        columns=2 * (columns + OVERSCAN),
        amplifiers={
            "left": Amplifier(conversion_gain=1.5, read_noise=4.0),
            "right": Amplifier(conversion_gain=2.5, read_noise=6.0, bias_level=1400.0),
        },
        response=Response(pixel=1.0),
    )
    return replace(plain, **changes)


def inputs_of(model, *, seed=0, plan=PLAN):
    made = simulate_device(model, plan, seed=seed)
    layout = geometry(model.sensor, {"": (model.rows, model.columns)})
    reduced = reduce_frames(made.frames, layout, model.sensor, threads=1)
    return Inputs(model.sensor, reduced, Masters(None, None, None), {})


def measured(model, *, options=None, **given):
    result = charge_transfer(inputs_of(model, **given), options or ChargeTransferOptions())
    return {(m.name, m.scope): m for m in result.measurements}, result


@pytest.mark.parametrize("parallel, serial", [(1e-6, 1e-6), (1e-5, 3e-6), (1e-4, 1e-4)])
def test_both_directions_and_outputs_are_within_5_per_cent_or_3e_7(parallel, serial):
    found, _ = measured(model(512, 256, cti_parallel=parallel, cti_serial=serial))
    assert len(found) == 4
    for (name, _scope), m in found.items():
        truth = parallel if name == "cti_parallel" else serial
        assert abs(m.value - truth) < max(0.05 * truth, 3e-7), m
        assert abs(m.value - truth) < 5 * m.standard_uncertainty + 0.01 * truth
        assert m.standard_uncertainty < max(0.05 * truth, 3e-7)
        assert m.unit == ""


def test_stated_uncertainty_is_the_scatter_found():
    truth = {"cti_parallel": 2e-6, "cti_serial": 1e-6}
    z = {name: [] for name in truth}
    for seed in range(40):
        found, _ = measured(model(cti_parallel=2e-6, cti_serial=1e-6), seed=seed)
        for (name, _scope), m in found.items():
            z[name].append((m.value - truth[name]) / m.standard_uncertainty)
    for name, deviations in z.items():
        n = len(deviations)
        assert abs(np.mean(deviations)) < 4.5 / np.sqrt(n), name
        assert np.std(deviations) == pytest.approx(1, abs=0.35), name


def test_noise_that_moves_whole_rows_makes_the_parallel_uncertainty_larger():
    noisy = model(cti_parallel=2e-6, offsets=Offsets(row_noise=6.0))
    z = []
    for seed in range(25):
        found, _ = measured(noisy, seed=seed)
        for (name, _scope), m in found.items():
            if name == "cti_parallel":
                z.append((m.value - 2e-6) / m.standard_uncertainty)
    assert np.sqrt(np.mean(np.square(z))) < 1.6


def test_without_loss_the_answer_may_be_negative_and_is_not_clipped():
    values = [m.value for seed in range(6) for m in measured(model(), seed=seed)[0].values()]
    assert min(values) < 0 < max(values)


def test_an_output_with_parallel_overscan_alone_has_its_parallel_loss():
    plain = model(cti_parallel=1e-5)
    outputs = {
        name: replace(output, overscan=None) for name, output in plain.sensor.outputs.items()
    }
    alone = replace(plain, sensor=replace(plain.sensor, outputs=outputs))
    found, result = measured(alone)
    assert {name for name, _ in found} == {"cti_parallel"}
    for m in found.values():
        assert abs(m.value - 1e-5) < 5 * m.standard_uncertainty
    assert {finding.undecides for finding in result.findings} == {("cti_serial",)}


def trails(stack, overscan, *, signal=50000.0, error=0.1, output=""):
    profile = np.concatenate([np.full(8, signal), overscan])
    errors = np.full(len(profile), error)
    none = np.empty(0)
    return Trails(stack, output, 8, profile, errors, none, none)


def plain(columns, *all_trails, technology="ccd", overscan=12):
    one = Sensor(
        technology=technology,
        pixel_pitch=10.0,
        outputs={
            "only": OutputOptions(
                image=Section(0, 32, 0, columns),
                overscan=Section(0, 32, columns, columns + overscan),
            )
        },
    )
    frames = np.full((2, 32, columns + overscan), 100.0)
    given = plain_inputs([(stack_of("bias", 2), frames)], sensor=one)
    return replace(given, reduced=replace(given.reduced, trails=all_trails))


def test_worked_by_hand():
    # (5 + 2 + 1) / (50000 * 64), bias frames show 1 in the first pixel.
    flat, bias = stack_of("flat", 2, exposure=1.0), stack_of("bias", 2)
    trail = np.array([6.0, 2, 1, 0, 0, 0, 0, 0, 0, 0, 0, 0])
    dark = np.array([1.0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0])
    given = plain(
        64, trails(flat, trail, output="only"), trails(bias, dark, signal=0.0, output="only")
    )
    result = charge_transfer(given, ChargeTransferOptions())
    (cti,) = result.measurements
    assert cti.name == "cti_serial"
    assert cti.scope == "device"
    assert_allclose(cti.value, 8 / (50000 * 64), rtol=1e-12)
    # One pixel's variance is 0.1² 6/5; six pixels less the level of six others, of flat and bias.
    variance = 2 * (6 + 36 / 6) * 0.01 * 6 / 5
    assert_allclose(cti.standard_uncertainty, np.sqrt(variance) / (50000 * 64), rtol=1e-12)
    (curve,) = result.curves
    assert_allclose(curve.first, [5.0])
    first = charge_transfer(given, ChargeTransferOptions(pixels=1)).measurements[0]
    assert_allclose(first.value, 5 / (50000 * 64), rtol=1e-12)
    (missing,) = result.findings
    assert missing.undecides == ("cti_parallel",)
    assert "no parallel overscan" in missing.seen


def test_levels_that_differ_by_more_than_noise_make_the_uncertainty_larger():
    def with_tails(*charge):
        return plain(
            64,
            *(
                trails(
                    stack_of("flat", 2, exposure=float(at)),
                    np.array([c, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0]),
                    signal=1e4 * (at + 1),
                    output="only",
                )
                for at, c in enumerate(charge)
            ),
        )

    alike = charge_transfer(with_tails(1, 2, 3, 4), ChargeTransferOptions())
    fat_zero = charge_transfer(with_tails(3, 3, 3, 3), ChargeTransferOptions())
    (same,), (other,) = alike.measurements, fat_zero.measurements
    assert_allclose(same.value, 1 / (1e4 * 64))
    assert other.standard_uncertainty > 2 * same.standard_uncertainty
    assert_allclose(fat_zero.curves[0].inefficiency, 3 / (1e4 * 64 * np.arange(1, 5)))


def test_dark_and_saturated_flats_are_left_out():
    def flat(exposure, signal, charge):
        return trails(
            stack_of("flat", 2, exposure=exposure),
            np.array([charge, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0]),
            signal=signal,
            output="only",
        )

    given = knowing(
        plain(64, flat(1.0, 100.0, 50.0), flat(2.0, 2e4, 2.0), flat(3.0, 5e4, 900.0)),
        Measurement("saturation_capacity", "device", 1e5, 1e3, "electron", 9),
        Measurement("conversion_gain", "device", 2.0, 0.01, "electron / DN", 9),
    )
    result = charge_transfer(given, ChargeTransferOptions())
    assert list(result.curves[0].used) == [False, True, False]
    assert_allclose(result.measurements[0].value, 2 / (2e4 * 64))


@pytest.mark.parametrize(
    "given, sentence",
    [
        (lambda: plain(64, technology="cmos"), "does not apply to a CMOS sensor"),
        (lambda: plain(64), "needs flats"),
        (lambda: plain(64, overscan=3), "needs 4 or more pixels of serial overscan, it has 3"),
        (
            lambda: plain_inputs(
                [(stack_of("bias", 2), np.zeros((2, 8, 8)))],
                sensor=Sensor(technology="ccd", pixel_pitch=9.0),
            ),
            "needs an overscan",
        ),
    ],
)
def test_what_is_missing_is_said(given, sentence):
    with pytest.raises(NotMeasured, match=sentence):
        charge_transfer(given(), ChargeTransferOptions())
