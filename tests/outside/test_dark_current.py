"""Dark current against the standard's worked numbers and the law of silicon."""

import numpy as np
import pytest
from scipy.optimize import curve_fit

from sensorgrade import silicon
from sensorgrade.measure.dark_current import straight_rise
from sensorgrade.measure.dark_temperature import temperature_law

JANESICK = "J. R. Janesick, Scientific Charge-Coupled Devices, SPIE Press 2001, ch. 7"


def test_slopes_of_mean_and_variance(outside):
    # K = 0.5 DN/e-, 20 e-/s, read noise 8 e-, offset 200 DN.
    time = np.array([0.0, 1, 2, 4, 8, 16])
    mean = np.array([200.0, 210, 220, 240, 280, 360])
    variance = np.array([16.0833, 21.0833, 26.0833, 36.0833, 56.0833, 96.0833])
    one = np.ones(6)
    outside(
        "dark current from mean and from variance [electron/s]",
        source="EMVA Standard 1288, dark current, worked example",
        standing="from memory",
        expected=np.array([20.0, 20.0]),
        found=np.array(
            [
                2.0 * straight_rise(time, mean, one).slope,
                4.0 * straight_rise(time, variance, one).slope,
            ]
        ),
        rtol=1e-9,
    )


def test_uncertainty_of_a_slope(outside):
    time = np.arange(0.0, 12.0, 2.0)
    rise = straight_rise(time, 3 * time, np.full(6, 5.0))
    outside(
        "uncertainty of dark current, 5 electron at 0, 2, .. 10 s [electron/s]",
        source="least squares, sigma / sqrt(sum (t - mean t)²)",
        standing="derived",
        expected=0.598,
        found=rise.slope_error,
        atol=5e-4,
    )


def test_slope_against_scipy(outside):
    rng = np.random.default_rng(3)
    time, error = np.array([0.0, 5, 10, 30, 60]), np.array([1.0, 0.5, 0.5, 1.0, 2.0])
    value = 100 + 0.7 * time + error * rng.standard_normal(5)
    best, covariance = curve_fit(
        lambda t, a, b: a + b * t, time, value, sigma=error, absolute_sigma=True
    )
    rise = straight_rise(time, value, error)
    outside(
        "weighted line: offset, slope, its error",
        source="scipy.optimize.curve_fit",
        standing="library",
        expected=np.array([*best, np.sqrt(covariance[1, 1])]),
        found=np.array([rise.offset, rise.slope, rise.slope_error]),
        rtol=1e-6,
    )


@pytest.mark.parametrize(
    "kelvin, energy, doubling",
    [
        (300, 0.6343, 8.475),
        (293, 0.6327, 8.104),
        (273, 0.6283, 7.085),
        (253, 0.6240, 6.127),
        (233, 0.6197, 5.233),
        (213, 0.6155, 4.403),
        (173, 0.6073, 2.944),
    ],
)
def test_generation_current_against_temperature(outside, kelvin, energy, doubling):
    temperatures = np.array([-20.0, -10.0, 0.0, 10.0]) + kelvin
    current = silicon.dark_current(1.0, 1e-6, temperatures)
    law = temperature_law(
        list(temperatures - silicon.ZERO_CELSIUS),
        list(current),
        list(0.01 * current),
        at=kelvin - silicon.ZERO_CELSIUS,
    )
    outside(
        f"share of the gap that generation current shows at {kelvin} K",
        source=JANESICK,
        standing="derived",
        expected=0.5,
        found=law.fraction,
        rtol=1e-9,
    )
    outside(
        f"Arrhenius slope of generation current at {kelvin} K [eV]",
        source=JANESICK,
        standing="derived",
        expected=energy,
        found=law.energy,
        atol=6e-5,
    )
    outside(
        f"doubling step of generation current at {kelvin} K [K]",
        source=JANESICK,
        standing="derived",
        expected=doubling,
        found=law.doubling,
        atol=6e-4,
    )


def test_diffusion_current_shows_the_whole_gap(outside):
    temperatures = np.array([273.0, 280.0, 287.0, 294.0])
    gap = silicon.dark_current_band_gap(temperatures)
    current = temperatures**3 * np.exp(-gap / (silicon.BOLTZMANN.value * temperatures))
    law = temperature_law(
        list(temperatures - silicon.ZERO_CELSIUS), list(current), list(0.01 * current), at=19.85
    )
    outside(
        "doubling step of diffusion current at 293 K [K]",
        source="T³ exp(-Eg/kT), tabulated",
        standing="derived",
        expected=4.052,
        found=law.doubling,
        rtol=2e-3,  # the model's T^1.5 in place of T³ bends the curve by this much
    )
