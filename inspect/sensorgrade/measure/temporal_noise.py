"""Temporal noise without light, parted into pixel, row and column noise, and over the pixels."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.pair_points import points_of
from sensorgrade.measure.photon_transfer import ROUNDING_VARIANCE
from sensorgrade.measure.read_noise import bias_pairs
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement

BINS = 100
SAMPLES = 1 << 20  # pixels whose order statistics are taken

QUANTITIES = (
    Quantity(
        "pixel_noise",
        "electron",
        "Temporal noise that is independent from pixel to pixel; line noise and rounding taken out",
    ),
    Quantity(
        "row_noise", "electron", "Temporal noise shared by the samples of a row, new in every frame"
    ),
    Quantity(
        "column_noise",
        "electron",
        "Temporal noise shared by the samples of a column, new in every frame",
    ),
    Quantity(
        "temporal_noise_median",
        "electron",
        "Median over pixels of the noise of one sample in the bias stack, rounding included",
    ),
    Quantity(
        "temporal_noise_99",
        "electron",
        "Noise that 99 % of the pixels do not exceed; the scatter of a deviation found from as"
        " many frames as the bias stack has is included",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class TemporalNoiseOptions:
    """Recipe keys under ``stages: temporal_noise``; there are none."""


@dataclass(frozen=True, slots=True)
class RegionTemporalNoise:
    """Parts of the noise, and how the pixels are distributed.

    ``edges`` (B + 1,) [electron] and ``counts`` (B,) are a histogram of the pixels' standard
    deviations, empty when the set has fewer than three bias frames. ``frames`` is their number.
    """

    scope: str
    edges: NDArray[np.float64]
    counts: NDArray[np.int64]
    frames: int
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class TemporalNoiseResult:
    """Temporal noise of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionTemporalNoise, ...]


def temporal_noise(inputs: Inputs, options: TemporalNoiseOptions) -> TemporalNoiseResult:
    """Pixel, row and column noise [electron] of every region, and their distribution.

    Raises
    ------
    NotMeasured
        There are no bias pairs or no gain.

    Notes
    -----
    With variances p, r and c of pixel, row and column noise in a region of M rows and N columns,
    a tile's difference has p + r + c (per frame), row means r + p/N, column means c + p/M.
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_noise(inputs, region),
        stage="temporal_noise",
        undecides=[q.name for q in QUANTITIES],
    )
    return TemporalNoiseResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def _region_noise(inputs: Inputs, region: Region) -> RegionTemporalNoise:
    points = points_of(inputs, region, kind="bias")
    if not points:
        raise NotMeasured("needs two or more bias frames, which the set does not have")
    gain = inputs.measured("conversion_gain", region.scope)
    pairs = bias_pairs(inputs, region)
    rows = len(range(region.rows.start, region.rows.stop, region.rows.step or 1))
    columns = len(range(region.columns.start, region.columns.stop, region.columns.step or 1))
    weights = np.concatenate([p.degrees for p in points])
    tile = float(np.average(np.concatenate([p.variance for p in points]), weights=weights))
    row_mean = float(np.concatenate([p.row_variance for p in pairs]).mean()) / 2
    column_mean = float(np.concatenate([p.column_variance for p in pairs]).mean()) / 2
    count = sum(len(p.row_variance) for p in pairs)
    pixel = (tile - row_mean - column_mean) / (1 - 1 / columns - 1 / rows)
    parts = (
        ("pixel_noise", pixel - ROUNDING_VARIANCE, tile * sqrt(2 / weights.sum()), weights.sum()),
        (
            "row_noise",
            row_mean - pixel / columns,
            row_mean * sqrt(2 / (count * (rows - 1))),
            count * (rows - 1),
        ),
        (
            "column_noise",
            column_mean - pixel / rows,
            column_mean * sqrt(2 / (count * (columns - 1))),
            count * (columns - 1),
        ),
    )
    measurements: list[Measurement] = []
    findings: list[Finding] = []
    for name, variance, error, n in parts:
        if variance > 2 * error:
            value = sqrt(variance)
            doubt = np.hypot(gain.value * error / (2 * value), value * gain.standard_uncertainty)
            measurements.append(
                Measurement(
                    name, region.scope, value * gain.value, float(doubt), "electron", int(n)
                )
            )
        else:
            limit = gain.value * sqrt(max(variance, 0.0) + 2 * error)
            findings.append(
                Finding(
                    severity="note",
                    where=f"temporal_noise, {region.scope}",
                    seen=(
                        f"{name.replace('_', ' ')} is not resolved; it is below {limit:.2g}"
                        " electron"
                    ),
                    remedy="more bias pairs would tell",
                    undecides=(name,),
                )
            )
    edges, counts, spread = _over_pixels(inputs, region, gain)
    return RegionTemporalNoise(
        scope=region.scope,
        edges=edges,
        counts=counts,
        frames=0 if inputs.reduced.bias is None else inputs.reduced.bias.frames,
        measurements=(*measurements, *spread),
        findings=tuple(findings),
    )


def _over_pixels(
    inputs: Inputs, region: Region, gain: Measurement
) -> tuple[NDArray[np.float64], NDArray[np.int64], tuple[Measurement, ...]]:
    """Histogram, median and 99 % point of the pixels' standard deviations [electron]."""
    bias = inputs.reduced.bias
    if bias is None or bias.frames < 3:
        return np.empty(0), np.empty(0, np.int64), ()
    variance = bias.variance[region.rows, region.columns]
    step = max(1, int(sqrt(variance.size / SAMPLES)))
    noise = gain.value * np.sqrt(variance[::step, ::step], dtype=np.float32).ravel()
    middle, lower, upper, high = (float(q) for q in np.quantile(noise, [0.5, 0.985, 0.995, 0.99]))
    counts, edges = np.histogram(noise, bins=BINS, range=(0.0, 3 * middle))
    relative = gain.standard_uncertainty / gain.value
    sd = 1.0 / sqrt(2 * (bias.frames - 1))
    doubts = (
        np.hypot(middle * 1.2533 * sd / sqrt(noise.size), middle * relative),
        # Standard error of a quantile, sqrt(p (1 - p) / n) over the density there.
        np.hypot(sqrt(0.99 * 0.01 / noise.size) * (upper - lower) / 0.01, high * relative),
    )
    measurements = tuple(
        Measurement(name, region.scope, value, float(doubt), "electron", noise.size)
        for name, value, doubt in zip(
            ("temporal_noise_median", "temporal_noise_99"), (middle, high), doubts, strict=True
        )
    )
    return edges.astype(np.float64), counts.astype(np.int64), measurements


STAGE = Stage("temporal_noise", TemporalNoiseOptions, temporal_noise, QUANTITIES)
