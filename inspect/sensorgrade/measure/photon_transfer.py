"""Photon transfer: conversion gain, and read noise from the intercept, of each region."""

from dataclasses import dataclass, replace
from math import sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.pair_points import PairPoints, points_of
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measure.variance_curve import (
    AT_END,
    VarianceCurve,
    variance_curve,
    variance_peak,
)
from sensorgrade.measure.variance_fit import VarianceFit, joined, variance_fit
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import choice, quantity

ROUNDING_VARIANCE = 1 / 12  # DN², whole-DN steps
RESOLVABLE_VARIANCE = 0.24  # DN², below it rounding hides the noise [EMVA 1288]
LEVELS_FOR_CURVATURE = 5  # distinct light levels that a quadratic model asks for
UNLIKELY = 0.01  # a misfit less likely than this widens the uncertainty

QUANTITIES = (
    Quantity(
        "conversion_gain",
        "electron / DN",
        "Electrons for one DN at zero signal, from the temporal variance of flat pairs",
    ),
    Quantity(
        "read_noise_intercept",
        "electron",
        "Read noise from the variance of flat pairs continued to zero signal; pixel and line"
        " noise included, rounding taken out",
    ),
    Quantity(
        "variance_curvature",
        "1 / electron",
        "Relative fall of the variance over shot noise with signal, as charge repels charge",
    ),
    Quantity(
        "neighbour_covariance_right",
        "1 / electron",
        "Covariance with the neighbour along the row over the square of the signal",
    ),
    Quantity(
        "neighbour_covariance_down",
        "1 / electron",
        "Covariance with the neighbour along the column over the square of the signal",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class PhotonTransferOptions:
    """Recipe keys under ``stages: photon_transfer``."""

    model: str = choice(
        "Variance against signal: straight, with curvature, or curvature where the levels allow",
        "automatic",
        "linear",
        "quadratic",
        default="automatic",
    )
    upper: float = quantity(
        "%",
        "Brightest signal used, in per cent of the signal where the variance peaks",
        default=70.0,
        minimum=10.0,
        maximum=100.0,
    )


@dataclass(frozen=True, slots=True)
class RegionTransfer:
    """The transfer of one region: curve, range chosen, fit.

    ``curve`` is binned over all signals, ``fitted`` the model's variance [DN²] at the curve's
    signals. The fit used flats between ``lower`` and ``upper`` [DN]; ``range_reason`` says why.
    ``model`` is "linear" or "quadratic"; ``anchored`` tells whether bias pairs joined at zero.
    """

    scope: str
    curve: VarianceCurve
    fitted: NDArray[np.float64]
    model: str
    lower: float
    upper: float
    range_reason: str
    anchored: bool
    levels: int
    fit: VarianceFit
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class PhotonTransferResult:
    """Transfer of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionTransfer, ...]


def photon_transfer(inputs: Inputs, options: PhotonTransferOptions) -> PhotonTransferResult:
    """Conversion gain [electron/DN] of every region from flat pairs, and what comes with it.

    Raises
    ------
    NotMeasured
        No region has flat pairs below saturation with a known bias level.

    Notes
    -----
    V(s) = R + K s + c s² is fitted to the temporal variance of tiles (R in DN², K in DN per
    electron); the gain is 1/K at zero signal, the curvature c is per electron as it stands. Bias
    pairs, where there are any, join as points at zero signal unless they contradict the flats.
    Light that makes more than one electron (below about 400 nm) makes the gain of that light.

    References
    ----------
    J. R. Janesick, Photon Transfer, SPIE Press 2007. P. Antilogus et al., JINST 9 (2014) C03048.
    """
    regions, missing = by_region(
        inputs,
        lambda region: region_transfer(inputs, region, options),
        stage="photon_transfer",
        undecides=[q.name for q in QUANTITIES],
    )
    return PhotonTransferResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def region_transfer(
    inputs: Inputs, region: Region, options: PhotonTransferOptions
) -> RegionTransfer:
    """Photon transfer of one region; raises NotMeasured as `photon_transfer` does."""
    flats = points_of(inputs, region, kind="flat")
    if not flats:
        raise NotMeasured("needs two or more flats taken alike, which the set does not have")
    curve = variance_curve(flats)
    upper, reason = _upper(flats, curve, options.upper)
    signal, variance, degrees, pair = _below(flats, upper)
    if not len(signal):
        raise NotMeasured("every flat pair is saturated; take pairs at lower light")
    biases = points_of(inputs, region, kind="bias")
    lower = float(signal.min())  # dim tiles weigh as little as they say, so none is cut off
    levels = _levels(flats, upper)
    order = 2 if options.model == "quadratic" else 1
    if options.model == "automatic" and levels >= LEVELS_FOR_CURVATURE:
        order = 2
    if levels + bool(biases) < order + 1:
        raise NotMeasured(
            f"a {'quadratic' if order == 2 else 'linear'} transfer needs {order + 1} levels,"
            f" bias pairs counted as one; the set has {levels + bool(biases)}"
        )
    alone = None
    if levels >= order + 1:
        alone = _widened(variance_fit(signal, variance, degrees, order=order, group=pair))
    fit, anchored = alone, False
    findings: list[Finding] = []
    if biases:
        zero = np.concatenate([p.variance for p in biases])
        zero_degrees = np.concatenate([p.degrees for p in biases])
        anchor = _widened(
            variance_fit(
                np.concatenate([np.zeros_like(zero), signal]),
                np.concatenate([zero, variance]),
                np.concatenate([zero_degrees, degrees]),
                order=order,
                group=np.concatenate([np.zeros(len(zero), np.int64), pair + 1]),
            )
        )
        if alone is None or _agree(alone, zero, zero_degrees):
            fit, anchored = anchor, True
        else:
            findings.append(_disagreement(region, alone, zero, zero_degrees))
    assert fit is not None  # levels + bias was checked above
    measurements = _measurements(region, fit, alone, flats, upper, order)
    return RegionTransfer(
        scope=region.scope,
        curve=curve,
        fitted=fit.at(curve.signal),
        model="quadratic" if order == 2 else "linear",
        lower=lower,
        upper=upper,
        range_reason=reason,
        anchored=anchored,
        levels=levels,
        fit=fit,
        measurements=measurements,
        findings=tuple(findings),
    )


def _upper(
    flats: tuple[PairPoints, ...], curve: VarianceCurve, percent: float
) -> tuple[float, str]:
    """Brightest signal [DN] to fit, and why."""
    peak = variance_peak(curve)
    if peak is not None:
        upper = percent / 100 * peak.lower
        return upper, f"{percent:g} % of {peak.lower:.0f} DN, where the variance peaks"
    clipped = curve.signal[curve.saturated > AT_END]
    if clipped.size:
        upper = percent / 100 * float(clipped.min())
        return upper, f"{percent:g} % of {clipped.min():.0f} DN, where the converter ends"
    top = max(float(p.signal.max()) for p in flats)
    return top, "the variance rises up to the brightest flat, so all are used"


def _below(
    flats: tuple[PairPoints, ...], upper: float
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.int64]]:
    """Signal, variance, degrees and pair (numbered through) of tiles not above ``upper``."""
    firsts = np.cumsum([0, *(int(p.pair.max(initial=-1)) + 1 for p in flats)])
    kept = [p.signal <= upper for p in flats]
    return (
        np.concatenate([p.signal[k] for p, k in zip(flats, kept, strict=True)]),
        np.concatenate([p.variance[k] for p, k in zip(flats, kept, strict=True)]),
        np.concatenate([p.degrees[k] for p, k in zip(flats, kept, strict=True)]),
        np.concatenate([p.pair[k] + f for p, k, f in zip(flats, kept, firsts[:-1], strict=True)]),
    )


def _levels(flats: tuple[PairPoints, ...], upper: float) -> int:
    """Number of distinct light levels used: mean signals of pairs that differ by a tenth."""
    sums = [(np.bincount(p.pair, p.signal), np.bincount(p.pair)) for p in flats]
    means = sorted(
        float(total / count)
        for totals, counts in sums
        for total, count in zip(totals, counts, strict=True)
        if count and total / count <= upper
    )
    if not means:
        return 1
    count, last = 1, means[0]
    for mean in means[1:]:
        if mean > 1.1 * last or mean - last > 0.03 * means[-1]:
            count, last = count + 1, mean
    return count


def _widened(fit: VarianceFit) -> VarianceFit:
    """The fit with its covariance widened by a misfit that chance does not explain.

    Of tiles, and of the means of pairs: what moves a whole pair (light that changes during the
    exposure, a response that bends) hardly shows in the scatter of its tiles.
    """
    factor = 1.0
    for square, degrees in (
        (fit.chi_square, fit.degrees),
        (fit.group_chi_square, fit.group_degrees),
    ):
        if degrees > 0 and chi2.sf(square, degrees) < UNLIKELY:
            factor = max(factor, square / degrees)
    return replace(fit, covariance=fit.covariance * factor)


def _zero(zero: NDArray[np.float64], degrees: NDArray[np.float64]) -> tuple[float, float]:
    """Mean variance of the bias pairs and its standard error [DN²]."""
    mean = float(np.average(zero, weights=degrees))
    return mean, mean * sqrt(2 / float(degrees.sum()))


def _agree(alone: VarianceFit, zero: NDArray[np.float64], degrees: NDArray[np.float64]) -> bool:
    """Whether bias pairs lie on the flats' own curve within four standard errors."""
    mean, error = _zero(zero, degrees)
    apart = abs(float(alone.coefficients[0]) - mean)
    return apart <= 4 * sqrt(float(alone.covariance[0, 0]) + error**2)


def _disagreement(
    region: Region, alone: VarianceFit, zero: NDArray[np.float64], degrees: NDArray[np.float64]
) -> Finding:
    mean, _ = _zero(zero, degrees)
    return Finding(
        severity="warning",
        where=f"photon_transfer, {region.scope}",
        seen=(
            f"flat pairs continue to {alone.coefficients[0]:.3g} DN² at zero signal, bias pairs"
            f" have {mean:.3g} DN²; the gain is from the flats alone"
        ),
        remedy="look for light leaks, response that bends, or noise that only flats or biases have",
    )


def _measurements(
    region: Region,
    fit: VarianceFit,
    alone: VarianceFit | None,
    flats: tuple[PairPoints, ...],
    upper: float,
    order: int,
) -> tuple[Measurement, ...]:
    slope, slope_error = float(fit.coefficients[1]), sqrt(fit.covariance[1, 1])
    if not slope > 3 * slope_error:
        raise NotMeasured("the variance does not rise with signal, so there is no gain to be had")
    gain = 1 / slope
    n = fit.degrees
    found = [
        Measurement(
            "conversion_gain", region.scope, gain, gain**2 * slope_error, "electron / DN", n
        )
    ]
    if alone is not None:
        intercept = float(alone.coefficients[0]) - ROUNDING_VARIANCE
        error = sqrt(alone.covariance[0, 0])
        # An intercept that is not clear of zero has no square root to speak of.
        if intercept > 2 * error and alone.coefficients[0] >= RESOLVABLE_VARIANCE:
            k = float(alone.coefficients[1])
            noise = sqrt(intercept) / k
            # With r = sqrt(R)/K: dr/dR = r/(2R), dr/dK = -r/K.
            gradient = noise * np.array([1 / (2 * intercept), -1 / k])
            doubt = sqrt(float(gradient @ alone.covariance[:2, :2] @ gradient))
            found.append(
                Measurement(
                    "read_noise_intercept", region.scope, noise, doubt, "electron", alone.degrees
                )
            )
    if order == 2:
        found.append(
            Measurement(
                "variance_curvature",
                region.scope,
                float(fit.coefficients[2]),
                sqrt(fit.covariance[2, 2]),
                "1 / electron",
                n,
            )
        )
    found.extend(_neighbours(region, fit, flats, upper))
    return tuple(found)


def _neighbours(
    region: Region, fit: VarianceFit, flats: tuple[PairPoints, ...], upper: float
) -> list[Measurement]:
    """Slopes of neighbour covariance with the square of the signal, for both directions."""
    found = []
    signal = np.concatenate([p.signal for p in flats])
    steady = np.isfinite(np.concatenate([p.right for p in flats])) & (signal <= upper)
    signal = signal[steady]
    if len(signal) < 3 or np.ptp(signal) < 0.1 * upper:
        return []
    degrees = np.concatenate([p.degrees for p in flats])[steady]
    for name, both in (
        ("right", np.concatenate([p.right for p in flats])),
        ("down", np.concatenate([p.down for p in flats])),
    ):
        level, covariance, weights = joined(signal, both[steady], degrees)
        # The covariance of independent samples of variance V scatters by V² over their number.
        weight = weights / fit.at(level) ** 2
        basis = np.stack([np.ones(len(level)), level**2])
        normal = (basis * weight) @ basis.T
        _, slope = np.linalg.solve(normal, (basis * weight) @ covariance)
        error = sqrt(np.linalg.inv(normal)[1, 1])
        found.append(
            Measurement(
                f"neighbour_covariance_{name}",
                region.scope,
                float(slope),
                error,
                "1 / electron",
                len(signal) - 2,
            )
        )
    return found


STAGE = Stage("photon_transfer", PhotonTransferOptions, photon_transfer, QUANTITIES)
