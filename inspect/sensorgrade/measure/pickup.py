"""Pickup: periodic noise along the rows, found as lines in the spectrum of bias frames."""

from dataclasses import dataclass
from math import hypot, log, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import median_filter

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.frame_levels import region_index
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement

FALSE_ALARM = 1e-3  # chance that noise alone makes one line in a spectrum
LOBE = 2  # bins to each side of a line that the window spreads it over
BACKGROUND = 31  # bins whose median is the background
SLOWEST = 4  # bins from zero that hold drift along the row and not lines

QUANTITIES = (
    Quantity("pickup", "electron", "Amplitude of the strongest periodic noise along the rows"),
    Quantity("pickup_frequency", "1 / pix", "Its frequency in cycles per pixel"),
    Quantity(
        "pickup_frequency_hertz", "Hz", "Its frequency, where the pixel time is given; aliased"
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class PickupOptions:
    """Recipe keys under ``stages: pickup``; there are none."""


@dataclass(frozen=True, slots=True)
class Line:
    """A line: frequency [cycles/pixel] and amplitude of the sine [DN], with standard errors."""

    frequency: float
    frequency_error: float
    amplitude: float
    amplitude_error: float


@dataclass(frozen=True, slots=True)
class RegionPickup:
    """Spectrum of one region, mean power [DN²] of each bin against ``frequency`` [cycles/pixel].

    A white noise of variance v has power v in every bin. ``threshold`` is what makes a line;
    ``lines`` are the strongest first.
    """

    scope: str
    frequency: NDArray[np.float64]
    power: NDArray[np.float64]
    threshold: NDArray[np.float64]
    lines: tuple[Line, ...]
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class PickupResult:
    """Pickup of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionPickup, ...]


def pickup(inputs: Inputs, options: PickupOptions) -> PickupResult:
    """Lines in the spectrum of the rows of bias frames, fixed pattern taken out.

    Raises
    ------
    NotMeasured
        There are fewer than two bias frames with rows of 64 pixels or more.

    Notes
    -----
    The mean over the frames is taken from each sampled row, the rest is windowed (Hann) and its
    power averaged over rows and frames. A sine of amplitude A adds N A²/4 over the bins of its
    lobe, for rows of N pixels. A line must pass the power that noise alone would exceed with a
    chance of 1/1000 in the whole spectrum. Frequencies above half a cycle per pixel appear folded
    below it. With the mean goes what L random phases leave in it, which differs from set to set:
    the uncertainty counts a relative power of 1/sqrt(L (L - 1)) for that.
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_pickup(inputs, region),
        stage="pickup",
        undecides=[q.name for q in QUANTITIES],
    )
    return PickupResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def mean_spectrum(rows: NDArray[np.float32]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Frequencies [cycles/pixel] and mean power [DN²] of rows (L, S, N) less their mean frame.

    Events would spread over all frequencies: samples past six deviations are set to zero.
    """
    frames, _, columns = rows.shape
    noise = np.asarray(rows - rows.mean(axis=0), dtype=np.float64)
    noise -= noise.mean(axis=2, keepdims=True)
    noise[np.abs(noise) > 6 * noise.std()] = 0.0
    window = np.hanning(columns + 1)[:-1]
    transform = np.fft.rfft(noise * window, axis=2)
    power = (transform.real**2 + transform.imag**2).mean(axis=(0, 1)) / (window**2).sum()
    frequency = np.asarray(np.fft.rfftfreq(columns), dtype=np.float64)
    return frequency, np.asarray(power * frames / (frames - 1), dtype=np.float64)


def lines_of(
    frequency: NDArray[np.float64], power: NDArray[np.float64], *, frames: int, rows: int
) -> tuple[tuple[Line, ...], NDArray[np.float64]]:
    """Lines of a mean over rows and frames, strongest first, and the threshold of each bin."""
    spectra = (frames - 1) * rows
    columns = 2 * (len(power) - 1)
    background = median_filter(power, BACKGROUND, mode="nearest")
    # The mean of n exponential powers has the relative deviation 1/sqrt(n); this many of them
    # leave noise a chance of FALSE_ALARM over all bins (tail of a sum of exponentials).
    reach = log(len(power) / FALSE_ALARM)
    threshold = background * (1 + sqrt(2 * reach / spectra) + reach / spectra)
    left = power.copy()
    left[:SLOWEST] = 0.0
    lines = []
    while True:
        top = int(np.argmax(np.where(left > threshold, left, 0.0)))
        if left[top] <= threshold[top] or left[top] == 0.0:
            break
        lobe = slice(max(top - LOBE, 0), min(top + LOBE + 1, len(power)))
        excess = np.maximum(left[lobe] - background[lobe], 0.0)
        energy = float(excess.sum())
        size = lobe.stop - lobe.start
        level = float(background[top])
        # Noise alone, noise beating with the line, and the phases that went with the mean.
        error = sqrt(
            (level**2 * size + 2 * level * energy) / spectra + energy**2 / (frames * (frames - 1))
        )
        # By Parseval's theorem a sine puts N A²/4 into the positive half of the spectrum.
        amplitude = sqrt(4 * energy / columns)
        at = float((excess * frequency[lobe]).sum() / energy)
        width = 1 / columns
        lines.append(
            Line(
                frequency=at,
                frequency_error=width * sqrt((level / energy + 1 / 12) / spectra),
                amplitude=amplitude,
                amplitude_error=amplitude * error / (2 * energy),
            )
        )
        left[lobe] = 0.0
    return tuple(sorted(lines, key=lambda line: -line.amplitude)), threshold


def _region_pickup(inputs: Inputs, region: Region) -> RegionPickup:
    index = region_index(inputs, region)
    rows = [lv.rows[index] for lv in inputs.reduced.levels if lv.stack.kind == "bias" and lv.rows]
    if not rows or len(rows[0]) < 2 or rows[0].shape[2] < 2 * BACKGROUND:
        raise NotMeasured(
            f"needs two or more bias frames with rows of {2 * BACKGROUND} pixels or more"
        )
    gain = inputs.measured("conversion_gain", region.scope)
    frequency, power = mean_spectrum(rows[0])
    frames, height, _ = rows[0].shape
    lines, threshold = lines_of(frequency, power, frames=frames, rows=height)
    spectra = (frames - 1) * height
    if region.columns.step not in (None, 1):
        step = region.columns.step
        frequency = frequency / step
        lines = tuple(
            Line(
                line.frequency / step,
                line.frequency_error / step,
                line.amplitude,
                line.amplitude_error,
            )
            for line in lines
        )
    measurements: tuple[Measurement, ...] = ()
    findings: tuple[Finding, ...] = ()
    if lines:
        measurements = _measurements(inputs, region, lines[0], gain, spectra)
    else:
        quiet = slice(SLOWEST, None)
        lobe = float((threshold - threshold / 2)[quiet].max())
        limit = gain.value * sqrt(4 * lobe * (2 * LOBE + 1) / (2 * (len(power) - 1)))
        findings = (
            Finding(
                severity="note",
                where=f"pickup, {region.scope}",
                seen=f"no line in the spectrum; pickup is below {limit:.2g} electron",
                remedy="nothing to do",
                undecides=("pickup",),
            ),
        )
    return RegionPickup(region.scope, frequency, power, threshold, lines, measurements, findings)


def _measurements(
    inputs: Inputs, region: Region, line: Line, gain: Measurement, n: int
) -> tuple[Measurement, ...]:
    doubt = hypot(line.amplitude_error * gain.value, line.amplitude * gain.standard_uncertainty)
    found = [
        Measurement("pickup", region.scope, line.amplitude * gain.value, doubt, "electron", n),
        Measurement(
            "pickup_frequency", region.scope, line.frequency, line.frequency_error, "1 / pix", n
        ),
    ]
    if inputs.sensor.pixel_time:
        rate = 1e6 / inputs.sensor.pixel_time  # pixels per second
        found.append(
            Measurement(
                "pickup_frequency_hertz",
                region.scope,
                line.frequency * rate,
                line.frequency_error * rate,
                "Hz",
                n,
            )
        )
    return tuple(found)


STAGE = Stage("pickup", PickupOptions, pickup, QUANTITIES)
