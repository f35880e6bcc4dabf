"""Linearity error against the standard's worked numbers and scipy."""

import numpy as np
from scipy.optimize import curve_fit

from sensorgrade.measure.linearity import relative_line

SIGNAL = np.array([101.0, 199, 302, 400, 498, 603, 701, 796, 900, 990])
LIGHT = np.arange(1.0, 11.0)


def test_line_fitted_to_relative_residuals(outside):
    fit = relative_line(LIGHT, SIGNAL)
    source = "EMVA Standard 1288, linearity, worked example"
    for what, expected, found, digits in (
        ("intercept [DN]", 1.2441293, fit.intercept, 5e-8),
        ("slope [DN]", 99.6219292, fit.slope, 5e-8),
        ("mean departure [%]", 0.412542, np.abs(fit.departure).mean(), 5e-7),
        ("least departure [%]", -0.748240, fit.departure.min(), 5e-7),
        ("largest departure [%]", 0.671863, fit.departure.max(), 5e-7),
    ):
        outside(
            f"linearity: {what}",
            source=source,
            standing="from memory",
            expected=expected,
            found=found,
            atol=digits,
        )


def test_line_against_scipy(outside):
    best, _ = curve_fit(lambda x, a, b: a + b * x, LIGHT, SIGNAL, sigma=SIGNAL)
    fit = relative_line(LIGHT, SIGNAL)
    outside(
        "linearity: intercept and slope",
        source="scipy.optimize.curve_fit with sigma = y",
        standing="library",
        expected=best,
        found=np.array([fit.intercept, fit.slope]),
        rtol=1e-6,
    )
