"""Bias level, drift, line noise, pickup, lag and crosstalk: what is put in comes out."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import periodogram

from measure.plain_reduction import knowing, plain_inputs, stack_of
from sensorgrade.errors import NotMeasured
from sensorgrade.measure.bias_drift import BiasDriftOptions, bias_drift
from sensorgrade.measure.bias_level import BiasLevelOptions, bias_level
from sensorgrade.measure.crosstalk import CrosstalkOptions, crosstalk
from sensorgrade.measure.lag import LagOptions, lag
from sensorgrade.measure.pickup import PickupOptions, mean_spectrum, pickup
from sensorgrade.measure.temporal_noise import TemporalNoiseOptions, temporal_noise
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor

GAIN = Measurement("conversion_gain", "device", 2.0, 0.01, "electron / DN", 1)
CMOS = Sensor(technology="cmos", pixel_pitch=5.0)


def by_name(result) -> dict[str, Measurement]:
    return {m.name: m for m in result.measurements}


def test_bias_level_worked_by_hand():
    # Levels 499, 500, 504: mean 501, standard deviation sqrt(7), over sqrt(3) frames.
    frames = np.array([499.0, 500, 504])[:, None, None] * np.ones((1, 32, 32))
    found = bias_level(plain_inputs([(stack_of("bias", 3), frames)]), BiasLevelOptions())
    assert found.measurements[0].value == 501.0
    assert found.measurements[0].standard_uncertainty == pytest.approx(np.sqrt(7 / 3))


def test_drift_of_the_bias_level_is_found_with_its_rate():
    rng = np.random.default_rng(1)
    times = [600.0 * i for i in range(12)]
    levels = 500 + 1.5 * np.array(times) / 3600 + 0.02 * rng.standard_normal(12)
    frames = levels[:, None, None] * np.ones((1, 32, 32))
    inputs = plain_inputs([(stack_of("bias", 12, times=times), frames)])
    found = by_name(bias_drift(inputs, BiasDriftOptions()))
    assert found["bias_drift"].value == pytest.approx(np.ptp(levels))
    rate = found["bias_drift_rate"]
    assert abs(rate.value - 1.5) < 5 * rate.standard_uncertainty
    assert rate.standard_uncertainty < 0.3


def test_pixel_row_and_column_noise_are_told_apart():
    rng = np.random.default_rng(2)
    scores = []
    for _ in range(20):
        frames = 500 + rng.normal(0, 3, (10, 128, 160))
        frames += rng.normal(0, 1, (10, 128, 1)) + rng.normal(0, 0.5, (10, 1, 160))
        inputs = knowing(plain_inputs([(stack_of("bias", 10), frames)]), GAIN)
        found = by_name(temporal_noise(inputs, TemporalNoiseOptions()))
        scores.append(
            [
                (found[name].value - truth) / found[name].standard_uncertainty
                for name, truth in (
                    ("pixel_noise", 2 * np.sqrt(9 - 1 / 12)),
                    ("row_noise", 2.0),
                    ("column_noise", 1.0),
                )
            ]
        )
    assert np.all(np.abs(np.mean(scores, axis=0)) < 5 / np.sqrt(20))
    assert np.all(np.std(scores, axis=0) < 2)


def test_line_noise_that_is_not_there_is_given_as_a_limit():
    frames = 500 + np.random.default_rng(3).normal(0, 3, (4, 128, 160))
    inputs = knowing(plain_inputs([(stack_of("bias", 4), frames)]), GAIN)
    result = temporal_noise(inputs, TemporalNoiseOptions())
    assert "row_noise" not in by_name(result)
    assert any("row noise is not resolved" in finding.seen for finding in result.findings)


def with_pickup(amplitude: float, frequency: float, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    frames = 500 + rng.normal(0, 4, (6, 32, 512))
    frames += 5 * rng.standard_normal((1, 32, 512))  # fixed pattern
    # A source that runs on: a new phase in each frame, the same step from row to row.
    phase = rng.uniform(0, 2 * np.pi, (6, 1, 1)) + 1.3 * np.arange(32)[:, None]
    return frames + amplitude * np.sin(2 * np.pi * frequency * np.arange(512) + phase)


def test_pickup_is_found_with_frequency_and_amplitude():
    scores = []
    for seed in range(40):
        inputs = knowing(
            plain_inputs([(stack_of("bias", 6), with_pickup(1.0, 0.1234, seed))],
                         sensor=replace(CMOS, pixel_time=2.0)),
            GAIN,
        )  # fmt: skip
        found = by_name(pickup(inputs, PickupOptions()))
        assert found["pickup_frequency"].value == pytest.approx(0.1234, abs=0.5 / 512)
        assert found["pickup_frequency_hertz"].value == pytest.approx(61700, abs=300)
        scores.append((found["pickup"].value - 2.0) / found["pickup"].standard_uncertainty)
    assert abs(np.mean(scores)) < 5 / np.sqrt(40)
    assert 0.5 < np.std(scores) < 1.5


def test_noise_alone_makes_no_line():
    lines = [
        pickup(
            knowing(plain_inputs([(stack_of("bias", 6), with_pickup(0.0, 0.1, seed))]), GAIN),
            PickupOptions(),
        )
        .regions[0]
        .lines
        for seed in range(100)
    ]
    # 100 spectra with a chance of 1/1000 each.
    assert sum(map(len, lines)) <= 2


def test_spectrum_against_scipy():
    rows = with_pickup(1.0, 0.2, 1).astype(np.float32)
    noise = rows - rows.mean(axis=0)
    frequency, density = periodogram(noise, window="hann", detrend="constant", axis=2)
    expected = density.mean(axis=(0, 1)) / 2 * 6 / 5  # one-sided density doubles the power
    found = mean_spectrum(rows)
    np.testing.assert_allclose(found[0], frequency)
    np.testing.assert_allclose(found[1][1:-1], expected[1:-1], rtol=1e-3)


def lagging(share: float, *, seed: int = 5) -> list:
    rng = np.random.default_rng(seed)

    def frame(level: float) -> np.ndarray:
        return level + 0.05 * rng.standard_normal() + np.zeros((32, 32))

    flat, times = [], []
    dark, dark_times = [], []
    clock = 0.0
    for _ in range(3):
        flat.append(frame(20500.0))
        times.append(clock)
        dark.append(frame(500.0 + share * 20000))
        dark.append(frame(500.0))
        dark.append(frame(500.0))
        dark_times += [clock + 1, clock + 2, clock + 3]
        clock += 4
    return [
        (stack_of("bias", 9, times=dark_times), np.stack(dark)),
        (stack_of("flat", 3, level=1.0, times=times), np.stack(flat)),
    ]


@pytest.mark.parametrize("share", [0.0, 0.001])
def test_lag_is_the_excess_after_a_bright_frame(share):
    found = lag(plain_inputs(lagging(share)), LagOptions()).measurements[0]
    assert abs(found.value - 100 * share) < 5 * found.standard_uncertainty
    assert found.value == pytest.approx(100 * share, abs=0.001)


def test_lag_without_times_is_not_measured():
    frames = [(replace(s, frames=tuple(replace(f, time=None) for f in s.frames)), v)
              for s, v in lagging(0.001)]  # fmt: skip
    with pytest.raises(NotMeasured, match="times of all"):
        lag(plain_inputs(frames), LagOptions())


def two_outputs(share: float) -> tuple[Sensor, np.ndarray, np.ndarray]:
    """Bias and darks of two outputs read from the outer corners; left leaks into right."""
    sensor = replace(
        CMOS,
        outputs={
            "left": OutputOptions(image=Section(0, 100, 0, 128), corner="bottom left"),
            "right": OutputOptions(image=Section(0, 100, 128, 256), corner="bottom right"),
        },
    )
    rng = np.random.default_rng(6)
    left = np.where(rng.random((100, 128)) < 0.005, 3000.0, 0.0)
    right = share * left[:, ::-1]
    signal = np.hstack([left, right])
    dark = 520 + signal + 3 * rng.standard_normal((6, 100, 256))
    return sensor, 500 + 3 * rng.standard_normal((6, 100, 256)), dark


@pytest.mark.parametrize("share", [2e-3, -2e-3])
def test_crosstalk_is_found_in_the_order_of_reading(share):
    sensor, bias, dark = two_outputs(share)
    inputs = plain_inputs(
        [(stack_of("bias", 6), bias), (stack_of("dark", 6, exposure=60.0), dark)], sensor=sensor
    )
    result = crosstalk(inputs, CrosstalkOptions())
    found = next(m for m in result.measurements if m.scope == "output right")
    assert abs(found.value - 0.2) < 5 * found.standard_uncertainty
    assert found.standard_uncertainty < 0.02
    assert np.sign(result.share[0, 1]) == np.sign(share)


def test_no_crosstalk_is_given_as_a_limit():
    sensor, bias, dark = two_outputs(0.0)
    inputs = plain_inputs(
        [(stack_of("bias", 6), bias), (stack_of("dark", 6, exposure=60.0), dark)], sensor=sensor
    )
    result = crosstalk(inputs, CrosstalkOptions())
    assert not result.measurements
    assert "crosstalk is below" in result.findings[0].seen
