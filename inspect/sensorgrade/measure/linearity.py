"""Linearity of the response of each region to light."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.frame_levels import region_index
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import choice, quantity

FEWEST_LEVELS = 5
SAME_LIGHT = 1e-6  # relative difference below which exposures or levels are taken alike

QUANTITIES = (
    Quantity(
        "linearity_error",
        "%",
        "Mean over levels of the absolute relative departure from the line fitted to relative"
        " residuals (EMVA 1288 release 4), between the lower and upper ends stated",
    ),
    Quantity("linearity_departure", "%", "Largest absolute relative departure from that line"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class LinearityOptions:
    """Recipe keys under ``stages: linearity``."""

    light: str = choice(
        "What is in proportion to light: the exposure time, the level, or their product",
        "automatic",
        "exposure",
        "level",
        "product",
        default="automatic",
    )
    lower: float = quantity(
        "%", "Least signal used, of saturation", default=5.0, minimum=0.1, maximum=50.0
    )
    upper: float = quantity(
        "%", "Greatest signal used, of saturation", default=95.0, minimum=50.0, maximum=100.0
    )


@dataclass(frozen=True, slots=True)
class LineFit:
    """y = a0 + a1 x, fitted to relative residuals; ``departure`` [%] of each point from it.

    ``influence`` (n, n) is the change of the departures [%] with a relative change of each y.
    """

    intercept: float
    slope: float
    departure: NDArray[np.float64]
    influence: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class RegionLinearity:
    """Signals [DN] against light (any unit), and departures [%] of those used."""

    scope: str
    light: NDArray[np.float64]
    signal: NDArray[np.float64]
    used: NDArray[np.bool_]
    fit: LineFit
    by: str
    measurements: tuple[Measurement, ...]


@dataclass(frozen=True, slots=True)
class LinearityResult:
    """Linearity of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionLinearity, ...]


def linearity(inputs: Inputs, options: LinearityOptions) -> LinearityResult:
    """Linearity error and largest departure [%] of every region.

    Raises
    ------
    NotMeasured
        Fewer than five light levels in the range, or nothing says how light went.

    Notes
    -----
    Signal is the mean of a stack's frames less the bias. Its uncertainty is taken from how frames
    of one stack scatter, relative to their light, pooled over all stacks; that holds the lamp's
    flicker, which no average over pixels removes. Wavelengths are fitted one by one and the
    departures joined, since light of another colour has another slope.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021, linearity (from memory).
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_linearity(inputs, region, options),
        stage="linearity",
        undecides=[q.name for q in QUANTITIES],
    )
    return LinearityResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing,
        regions=regions,
    )


def relative_line(light: NDArray[np.float64], signal: NDArray[np.float64]) -> LineFit:
    """The straight line that minimises relative residuals, sum of ((y - a0 - a1 x) / y)².

    Parameters
    ----------
    light : ndarray of shape (n,), any unit
    signal : ndarray of shape (n,) [DN], positive
    """
    design = np.stack([1 / signal, light / signal])
    normal = np.linalg.inv(design @ design.T)
    coefficients = normal @ design.sum(axis=1)
    line = coefficients[0] + coefficients[1] * light
    # For relative changes e of y about the line, departures are (1 - H) e with H the projection.
    projection = design.T @ normal @ design
    return LineFit(
        intercept=float(coefficients[0]),
        slope=float(coefficients[1]),
        departure=100 * (signal - line) / line,
        influence=100 * (np.eye(len(signal)) - projection),
    )


def _region_linearity(inputs: Inputs, region: Region, options: LinearityOptions) -> RegionLinearity:
    index = region_index(inputs, region)
    zero = [lv.mean[:, index] for lv in inputs.reduced.levels if lv.stack.kind == "bias"]
    if not zero:
        raise NotMeasured("needs bias frames, to know the level without light")
    bias = float(np.concatenate(zero).mean())
    flats = [lv for lv in inputs.reduced.levels if lv.stack.kind == "flat"]
    wavelengths = {lv.stack.wavelength for lv in flats}
    if len(wavelengths) > 1:
        counts = {w: sum(lv.stack.wavelength == w for lv in flats) for w in wavelengths}
        most = max(sorted(counts, key=str), key=lambda w: counts[w])
        flats = [lv for lv in flats if lv.stack.wavelength == most]
    light, by = light_of([lv.stack for lv in flats], options.light)
    signal = np.array([lv.mean[:, index].mean() - bias for lv in flats])
    top = _top(inputs, region, signal)
    used = (signal >= options.lower / 100 * top) & (signal <= options.upper / 100 * top)
    if len(np.unique(light[used])) < FEWEST_LEVELS:
        raise NotMeasured(
            f"needs flats at {FEWEST_LEVELS} or more levels of light between {options.lower:g} and"
            f" {options.upper:g} % of saturation, told apart by {by}; the set has"
            f" {len(np.unique(light[used]))}"
        )
    fit = relative_line(light[used], signal[used])
    scatter = _relative_scatter([lv.mean[:, index] - bias for lv in flats])
    frames = np.array([len(lv.mean) for lv in flats])[used]
    covariance = (fit.influence * scatter**2 / frames) @ fit.influence.T
    signs = np.sign(fit.departure) / len(fit.departure)
    worst = int(np.argmax(np.abs(fit.departure)))
    n = len(fit.departure)
    return RegionLinearity(
        scope=region.scope,
        light=light,
        signal=signal,
        used=used,
        fit=fit,
        by=by,
        measurements=(
            Measurement(
                "linearity_error",
                region.scope,
                float(np.abs(fit.departure).mean()),
                sqrt(signs @ covariance @ signs),
                "%",
                n,
            ),
            Measurement(
                "linearity_departure",
                region.scope,
                float(abs(fit.departure[worst])),
                sqrt(covariance[worst, worst]),
                "%",
                n,
            ),
        ),
    )


def light_of(stacks: list[Stack], choice: str) -> tuple[NDArray[np.float64], str]:
    """Light of each stack in any proportional unit, and what tells it.

    Left to itself, it is the level where only levels differ, the exposure time where only times
    do, and their product (level as irradiance) where both differ.
    """
    exposure = [s.exposure for s in stacks]
    level = [s.level for s in stacks]
    if choice == "automatic":
        by_level = None not in level and _vary(level)
        by_time = None not in exposure and _vary(exposure)
        if not by_level and not by_time:
            raise NotMeasured("needs flats whose exposure or level differs")
        choice = "product" if by_level and by_time else "level" if by_level else "exposure"
    wanted = {"exposure": [exposure], "level": [level], "product": [exposure, level]}[choice]
    if any(value is None for values in wanted for value in values):
        raise NotMeasured(f"needs flats that all state what light is told by ({choice})")
    named = {"product": "exposure x level"}.get(choice, choice)
    return np.prod(np.array(wanted, dtype=np.float64), axis=0), named


def _vary(values: list[float | None]) -> bool:
    known = [value for value in values if value is not None]
    return max(known, default=0.0) - min(known, default=0.0) > SAME_LIGHT * max(known, default=0.0)


def _top(inputs: Inputs, region: Region, signal: NDArray[np.float64]) -> float:
    """Saturation [DN] above bias, or the brightest flat where saturation was not reached."""
    try:
        capacity = inputs.measured("saturation_capacity", region.scope).value
        return capacity / inputs.measured("conversion_gain", region.scope).value
    except NotMeasured:
        return float(signal.max())


def _relative_scatter(levels: list[NDArray[np.float64]]) -> float:
    """Standard deviation of frames about their stack's mean, relative to it, pooled."""
    squares = sum(float(((y / y.mean() - 1) ** 2).sum()) for y in levels if len(y) > 1)
    degrees = sum(len(y) - 1 for y in levels)
    if degrees == 0:
        raise NotMeasured("needs two flats taken alike at some level, to know the lamp's flicker")
    return sqrt(squares / degrees)


STAGE = Stage("linearity", LinearityOptions, linearity, QUANTITIES)
