"""Photon transfer and noise against worked numbers of the standards and independent fits."""

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.stats import norm

from measure.plain_reduction import knowing, plain_inputs, stack_of
from measure.simulated import exposures
from sensorgrade.errors import NotMeasured
from sensorgrade.masters.reduced import PairTiles
from sensorgrade.measure.pair_points import pair_points, points_of
from sensorgrade.measure.photon_transfer import (
    RESOLVABLE_VARIANCE,
    ROUNDING_VARIANCE,
    PhotonTransferOptions,
    photon_transfer,
)
from sensorgrade.measure.read_noise import ReadNoiseOptions, read_noise
from sensorgrade.measure.saturation import least_signal
from sensorgrade.measure.spatial_noise import MAD_TO_SD
from sensorgrade.measure.variance_fit import variance_fit
from sensorgrade.measurement import Measurement

EMVA = "EMVA Standard 1288"
JANESICK = "J. R. Janesick, Photon Transfer, SPIE Press 2007"


@pytest.mark.parametrize("drift", [0.0, 6.0])
def test_two_frame_variance(outside, drift):
    # Differences -4, 8, -6, 2: 15 DN² as the standard divides, 20 DN² over the degrees of freedom.
    first = np.array([[1000.0, 1010.0], [990.0, 1000.0]])
    second = np.array([[1004.0, 1002.0], [996.0, 998.0]]) + drift
    inputs = plain_inputs([(stack_of("bias", 2), np.tile(np.stack([first, second]), (1, 4, 4)))])
    points = points_of(inputs, inputs.reduced.geometry.regions[0], kind="bias")[0]
    pixels = points.degrees[0] + 1
    outside(
        f"two-frame temporal variance, second frame {drift:g} DN up [DN²]",
        source=f"{EMVA}, two-frame estimator, worked example",
        standing="derived",
        expected=15.0,
        found=points.variance[0] * (pixels - 1) / pixels,
        rtol=1e-9,
    )


def test_gain_and_read_noise_of_one_pair(outside):
    fit = variance_fit(
        np.array([0.0, 20000.0]),
        np.array([50.0, 10050.0]) / 2,
        np.array([1e4, 1e4]),
        order=1,
    )
    source = f"pair method after {JANESICK}: means 21000 and 1000 DN, variances 10050 and 50 DN²"
    gain = 1 / fit.coefficients[1]
    outside(
        "conversion gain of one pair [electron/DN]",
        source=source,
        standing="confirmed",
        expected=4.0,
        found=gain,
        rtol=1e-9,
    )
    outside(
        "read noise of one pair, rounding left in [electron]",
        source=source,
        standing="confirmed",
        expected=20.0,
        found=gain * np.sqrt(fit.coefficients[0]),
        rtol=1e-9,
    )


@pytest.mark.parametrize("signal, percent", [(100.0, 0.906), (1000.0, 0.206), (20000.0, 0.144)])
def test_uncertainty_of_the_gain_of_one_pair(outside, signal, percent):
    # 1e6 pixels, read noise 20 e-, gain 1 electron/DN.
    variances = np.array([400.0, 400.0 + signal])
    fit = variance_fit(np.array([0.0, signal]), variances, np.array([1e6 - 1, 1e6 - 1]), order=1)
    outside(
        f"relative uncertainty of the gain from one pair at {signal:g} electron [%]",
        source="sampling theory of variances, 1e6 pixels, read noise 20 e-",
        standing="derived",
        expected=percent,
        found=100 * np.sqrt(fit.covariance[1, 1]) / fit.coefficients[1],
        atol=5e-4,
    )


def test_gain_of_a_bent_curve(outside):
    signal = np.linspace(500, 40000, 40)  # DN, 0.5 DN per electron
    variance = 10 + 0.5 * signal - 2e-6 * signal**2
    fit = variance_fit(signal, variance, np.full(40, 1e6), order=2)
    source = "quadratic transfer curve, P. Antilogus et al., JINST 9 (2014) C03048"
    outside(
        "slope and curvature of an exact quadratic transfer curve",
        source=source,
        standing="derived",
        expected=np.array([0.5, -2e-6]),
        found=fit.coefficients[1:],
        rtol=1e-9,
    )


def test_fit_against_a_likelihood_maximised_by_scipy(outside):
    rng = np.random.default_rng(7)
    signal = np.repeat(np.linspace(200, 30000, 12), 4)
    degrees = np.full(48, 200.0)
    variance = (20 + 0.4 * signal) * rng.chisquare(degrees) / degrees
    fit = variance_fit(signal, variance, degrees, order=1)

    def cost(p):
        model = np.exp(p[0]) + np.exp(p[1]) * signal
        return float(np.sum(degrees / 2 * (np.log(model) + variance / model)))

    best = minimize(
        cost,
        np.log([20, 0.4]),
        method="Nelder-Mead",
        options={"xatol": 1e-10, "fatol": 1e-10, "maxiter": 5000},
    )
    outside(
        "read variance and slope of noisy variances",
        source="scipy.optimize.minimize of the chi-square likelihood",
        standing="library",
        expected=np.exp(best.x),
        found=fit.coefficients,
        rtol=1e-5,
    )


def test_ratio_takes_out_lamp_drift(outside):
    # Exact moments: light 1000 and 900 DN, pattern variance 100 DN² at 1000 DN, V = 25 + 0.5 s.
    one = np.ones((1, 1, 1))
    ratio = 1000 / 900
    pairs = PairTiles(
        stack=stack_of("flat", 2),
        region=None,  # type: ignore[arg-type]
        count=1024 * one,
        mean_a=1500 * one,
        mean_b=1400 * one,
        var_a=(100 + 25 + 500) * one,
        var_b=(100 / ratio**2 + 25 + 450) * one,
        cov_ab=100 / ratio * one,
        cov_right=0 * one,
        cov_down=0 * one,
        saturated=0 * one,
        row_variance=np.zeros(1),
        column_variance=np.zeros(1),
    )
    points = pair_points(pairs, np.full((1, 1), 500.0))
    outside(
        "variance of a pair whose light fell by a tenth, at its signal [DN²]",
        source="algebra of var(A - rB)",
        standing="derived",
        expected=25 + 0.5 * points.signal,
        found=points.variance,
        rtol=1e-9,
    )


def test_threshold_signal_and_dynamic_range(outside):
    # K = 0.5 DN/e-, 10 e-, 8000 e-.
    noise = Measurement("read_noise", "device", 10.0, 0.1, "electron", 1)
    gain = Measurement("conversion_gain", "device", 2.0, 0.0, "electron / DN", 1)
    least, _ = least_signal(noise, gain)
    source = f"{EMVA}, absolute sensitivity threshold and dynamic range, worked example"
    outside(
        "signal with a signal-to-noise ratio of 1 [electron]",
        source=source,
        standing="from memory",
        expected=10.529124,
        found=least,
        atol=5e-7,
    )
    outside(
        "dynamic range of that [dB]",
        source=source,
        standing="from memory",
        expected=57.6140,
        found=20 * np.log10(8000 / least),
        atol=5e-5,
    )


def test_rounding_floor(outside):
    outside(
        "least read noise that whole-DN steps can show [DN]",
        source=f"{EMVA}, 0.24 DN²",
        standing="from memory",
        expected=0.39581,
        found=np.sqrt(RESOLVABLE_VARIANCE - ROUNDING_VARIANCE),
        atol=5e-6,
    )


def test_noise_below_the_floor_is_given_as_a_limit():
    rng = np.random.default_rng(8)
    bias = np.rint(100.0 + 0.2 * rng.standard_normal((4, 64, 64)))
    gain = Measurement("conversion_gain", "device", 2.0, 0.01, "electron / DN", 1)
    inputs = knowing(plain_inputs([(stack_of("bias", 4), bias)]), gain)
    with pytest.raises(NotMeasured, match=r"below 0\.8 electron"):
        read_noise(inputs, ReadNoiseOptions())


@pytest.mark.parametrize("true", [0.5, 0.7, 1.0])
def test_rounding_adds_a_twelfth(outside, true):
    rng = np.random.default_rng(9)
    means = 100 + np.arange(64)[:, None] / 64 * np.ones((64, 64))
    bias = np.rint(means + true * rng.standard_normal((20, 64, 64)))
    gain = Measurement("conversion_gain", "device", 1.0, 0.0, "electron / DN", 1)
    inputs = knowing(plain_inputs([(stack_of("bias", 20), bias)]), gain)
    found = read_noise(inputs, ReadNoiseOptions()).measurements[0]
    outside(
        f"read noise of {true:g} DN in whole-DN samples [DN]",
        source="rounded Gaussian, averaged over the phase of the mean",
        standing="derived",
        expected=true,
        found=found.value,
        atol=5 * found.standard_uncertainty,
    )


def test_robust_spread_factor(outside):
    outside(
        "median absolute deviation to standard deviation",
        source="scipy.stats.norm",
        standing="library",
        expected=1 / norm.ppf(0.75),
        found=MAD_TO_SD,
        rtol=1e-7,
    )


def test_read_noise_uncertainty_of_one_pair(outside):
    rng = np.random.default_rng(10)
    bias = 500 + 5 * rng.standard_normal((2, 1000, 1000))
    gain = Measurement("conversion_gain", "device", 1.0, 0.0, "electron / DN", 1)
    found = read_noise(
        knowing(plain_inputs([(stack_of("bias", 2), bias)]), gain), ReadNoiseOptions()
    ).measurements[0]
    outside(
        "relative uncertainty of read noise from one pair of 1e6 pixels [%]",
        source="sampling theory, 1/sqrt(2(N - 1))",
        standing="derived",
        expected=0.0707,
        found=100 * found.standard_uncertainty / found.value,
        rtol=0.02,
    )


def test_spread_against_the_cramer_rao_bound(outside):
    # Two biases and eight flat pairs of 64 x 64 pixels, 2 electron/DN, 8 electron, 300 devices.
    shape, light = (64, 64), np.linspace(1000, 40000, 8)
    gains, noises = [], []
    for seed in range(300):
        rng = np.random.default_rng([14, seed])
        response = 1 + 0.01 * rng.standard_normal(shape)
        frames = [(stack_of("bias", 2), exposures(rng, np.zeros(shape), frames=2))]
        frames += [
            (stack_of("flat", 2, level=x), exposures(rng, x * response, frames=2)) for x in light
        ]
        inputs = plain_inputs(frames)
        transfer = photon_transfer(inputs, PhotonTransferOptions(model="linear"))
        inputs = knowing(inputs, *transfer.measurements)
        gains.append(transfer.measurements[0].value)
        noises.append(read_noise(inputs, ReadNoiseOptions()).measurements[0].value)
    # Fisher information of Gaussian samples of variance V about an unknown mean: N / 2V² a pair.
    signal = np.concatenate([[0.0], light / 2])
    variance = 16 + 1 / 12 + signal / 2
    weight = 64 * 64 / (2 * variance**2)
    basis = np.stack([np.ones(9), signal])
    bound = np.linalg.inv((basis * weight) @ basis.T)
    gradient = np.array([1 / (2 * 4 * 0.5), -4 / 0.25])  # of sqrt(R - 1/12) / K
    for what, found, least in (
        ("gain", gains, 4 * np.sqrt(bound[1, 1])),
        ("read noise", noises, np.sqrt(gradient @ bound @ gradient)),
    ):
        outside(
            f"spread of {what} over 300 devices, over the Cramér-Rao bound of its pairs",
            source="Fisher information of Gaussian samples, linear model",
            standing="derived",
            expected=1.0,
            found=np.std(found, ddof=1) / least,
            atol=0.15,
        )
