"""What a set of frames will give, against the scatter of the estimators themselves."""

from dataclasses import replace
from math import inf

import numpy as np
import pytest
from scipy.special import ndtr

from sensorgrade.grading.expected_uncertainty import (
    ExpectedDevice,
    FrameSet,
    conversion_gain_uncertainty,
    dark_current_uncertainty,
    dsnu_uncertainty,
    hot_pixels_uncertainty,
    linearity_error_uncertainty,
    prnu_uncertainty,
    read_noise_uncertainty,
    saturation_capacity_uncertainty,
)
from sensorgrade.measure.dark_current import straight_rise
from sensorgrade.measure.linearity import relative_line
from sensorgrade.measure.variance_fit import variance_fit

DEVICE = ExpectedDevice(
    pixels=16 * 1024,
    conversion_gain=2.0,
    read_noise=6.0,
    offset_scatter=0.5,
    saturation=80_000.0,
    dark_current=0.4,
    dsnu=3.0,
    prnu=0.8,
    lamp_noise=0.5,
    hot_threshold=2.0,
    hot_scale=1.0,
    flat_signal=50.0,
)
TAKEN = FrameSet(bias=10, darks=6, dark_exposure=60.0, pairs=2, levels=8, flats=8)


def scattered(signal, pixels, repeats, rng):
    """Variances [DN²] of pairs at these signals, each a chi-square of ``pixels`` degrees."""
    true = 9.0 + 1 / 12 + signal / 2.0
    return true * rng.chisquare(pixels, (repeats, signal.size)) / pixels


@pytest.mark.parametrize("levels, order", [(3, 1), (8, 2)])
def test_conversion_gain(levels, order):
    rng = np.random.default_rng(1)
    taken = replace(TAKEN, levels=levels)
    top = 0.7 * 80_000 / 2.0
    signal = np.concatenate(
        [np.zeros(5), np.repeat(top * np.arange(1, levels + 1) / levels, taken.pairs)]
    )
    degrees = np.full(signal.size, float(DEVICE.pixels))
    gains = [
        1 / variance_fit(signal, one, degrees, order=order).coefficients[1]
        for one in scattered(signal, DEVICE.pixels, 400, rng)
    ]
    assert conversion_gain_uncertainty(DEVICE, taken) == pytest.approx(np.std(gains), rel=0.2)


def test_read_noise():
    rng = np.random.default_rng(2)
    few = replace(DEVICE, pixels=1024)
    variance = scattered(np.zeros(1), 1024 * 5, 4000, rng)[:, 0]
    gain = rng.normal(2.0, conversion_gain_uncertainty(few, TAKEN), 4000)
    noise = gain * np.sqrt(variance - 1 / 12)
    assert read_noise_uncertainty(few, TAKEN) == pytest.approx(noise.std(), rel=0.1)


def test_dark_current():
    rng = np.random.default_rng(3)
    currents = []
    for _ in range(2000):
        level = rng.normal(0.0, 0.25, 16)  # DN, of 10 biases and 6 darks
        means = np.array([level[:10].mean(), level[10:].mean() + 0.4 * 60.0 / 2.0])
        rise = straight_rise(np.array([0.0, 60.0]), means, 0.25 / np.sqrt([10, 6]))
        currents.append(rng.normal(2.0, conversion_gain_uncertainty(DEVICE, TAKEN)) * rise.slope)
    assert dark_current_uncertainty(DEVICE, TAKEN) == pytest.approx(np.std(currents), rel=0.1)


@pytest.mark.parametrize("spatial, formula", [(3.0, dsnu_uncertainty), (320.0, prnu_uncertainty)])
def test_spatial_deviations(spatial, formula):
    rng = np.random.default_rng(4)
    few = replace(DEVICE, pixels=900)
    frames = 6 if formula is dsnu_uncertainty else 8
    temporal = 36.0 + (0.4 * 60.0 if formula is dsnu_uncertainty else 40_000.0)
    found = []
    for _ in range(600):
        true = rng.normal(0.0, spatial, 900)
        taken = true + rng.normal(0.0, np.sqrt(temporal), (frames, 900))
        within = taken.var(axis=0, ddof=1).mean() / frames
        found.append(np.sqrt(taken.mean(axis=0).var(ddof=1) - within))
    scatter = np.std(found)
    if formula is prnu_uncertainty:
        scatter *= 100.0 / 40_000.0
    expected = formula(few, TAKEN)
    if formula is dsnu_uncertainty:
        gain = 3.0 * conversion_gain_uncertainty(few, TAKEN) / 2.0
        expected = np.sqrt(expected**2 - gain**2)
    assert expected == pytest.approx(scatter, rel=0.15)


def test_linearity_error_of_a_bent_response():
    rng = np.random.default_rng(5)
    levels = np.arange(1, 9) / 8
    # Bent enough that the signs of the departures do not depend on the lamp.
    true = 20_000.0 * levels * (1 - 0.05 * levels)
    found = []
    for _ in range(2000):
        signal = true * (1 + rng.normal(0.0, 0.001 / 2.0, 8))  # 2 pairs: 4 frames a level
        found.append(np.abs(relative_line(levels, signal).departure).mean())
    expected = linearity_error_uncertainty(replace(DEVICE, lamp_noise=0.1), TAKEN)
    assert expected == pytest.approx(np.std(found), rel=0.15)


def test_hot_pixels_past_an_exponential_tail():
    rng = np.random.default_rng(6)
    true = rng.exponential(1.0, 2000)
    doubt = np.sqrt(36.0 * (1 / 10 + 1 / 6) + 2.0 * 60.0 / 6) / 60.0
    relative = conversion_gain_uncertainty(DEVICE, TAKEN) / 2.0
    error = []
    for _ in range(2000):
        read = (true + rng.normal(0.0, doubt, true.size)) * rng.normal(1.0, relative)
        error.append(np.sum(ndtr((read - 2.0) / doubt)) - np.sum(true > 2.0))
    # The uncertainty of a population's count has the places of its pixels at random too.
    expected = hot_pixels_uncertainty(DEVICE, TAKEN, expected=float(np.sum(true > 2.0)))
    assert np.std(error) == pytest.approx(expected, rel=0.2)


def test_sets_that_cannot_measure_have_no_uncertainty_to_offer():
    bare = FrameSet(bias=0, darks=0, dark_exposure=0.0, pairs=0, levels=0, flats=0)
    for formula in (
        conversion_gain_uncertainty,
        read_noise_uncertainty,
        dark_current_uncertainty,
        dsnu_uncertainty,
        prnu_uncertainty,
        saturation_capacity_uncertainty,
        linearity_error_uncertainty,
    ):
        assert formula(DEVICE, bare) == inf
    assert hot_pixels_uncertainty(DEVICE, bare, expected=10.0) == inf


def test_spatial_deviation_below_the_noise_of_two_frames():
    rng = np.random.default_rng(8)
    few = replace(DEVICE, pixels=10_000, read_noise=10.0, dark_current=0.0, dsnu=3.0)
    found = []
    for _ in range(400):
        taken = rng.normal(0.0, 3.0, 10_000) + rng.normal(0.0, 10.0, (2, 10_000))
        within = taken.var(axis=0, ddof=1).mean() / 2
        found.append(np.sqrt(taken.mean(axis=0).var(ddof=1) - within))
    gain = 3.0 * conversion_gain_uncertainty(few, TAKEN) / 2.0
    expected = np.sqrt(dsnu_uncertainty(few, replace(TAKEN, darks=2)) ** 2 - gain**2)
    assert expected == pytest.approx(np.std(found), rel=0.18)
