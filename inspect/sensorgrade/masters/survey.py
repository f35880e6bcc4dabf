"""A first look at a stack through a sample of its rows: levels, drift and noise.

It comes before the pass over every sample, because outliers are told from noise by the variance
that samples should have, not by their own scatter.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Geometry, Output, Region
from sensorgrade.masters.reduced import FrameLevels, NoiseModel
from sensorgrade.masters.source import OpenStack, Samples, read_rows
from sensorgrade.recipe.model import Section

SAMPLE_ROWS = 16
SAMPLE_PIXELS = 32768
CLIP = 5.0
ROUNDING_VARIANCE = 1 / 12  # DN², the least that whole-DN samples can scatter


@dataclass(frozen=True, slots=True)
class Survey:
    """Levels of a stack's frames and the rough temporal variance in each region [DN²].

    ``variance`` is None for a stack of a single frame.
    """

    levels: FrameLevels
    variance: dict[str, float] | None

    def level(self, region: int) -> float:
        """Mean level of a region over the frames [DN]."""
        return float(self.levels.mean[:, region].mean())


def survey(stack: Stack, sources: dict[str, OpenStack], geometry: Geometry) -> Survey:
    """Levels and noise of one stack from evenly spread rows of each output."""
    means = np.empty((len(stack.frames), len(geometry.regions)))
    overscans = np.full_like(means, np.nan)
    variance: dict[str, float] = {}
    sampled = np.zeros(len(geometry.regions), np.int64)
    parts: dict[int, NDArray[np.float32]] = {}
    read: dict[tuple[str, int, int], tuple[NDArray[np.int64], Samples]] = {}
    for output in geometry.outputs:
        key = (output.extension, output.image.row_start, output.image.row_stop)
        if key not in read:
            source = sources[output.extension]
            rows = sample_rows(output, source.columns)
            read[key] = rows, read_rows(source, rows)
        rows, samples = read[key]
        image = samples[:, :, output.image.column_start : output.image.column_stop]
        overscan = overscan_level(samples, output)
        for index, region in enumerate(geometry.regions):
            if region.output != output.name:
                continue
            part = image[:, in_region(rows, output, region)][:, :, region_columns(output, region)]
            means[:, index] = part.mean(axis=(1, 2), dtype=np.float64) - np.nan_to_num(overscan)
            overscans[:, index] = overscan
            sampled[index] = part[0].size
            if stack.kind == "bias":
                parts[index] = part.astype(np.float32)
            if len(stack.frames) > 1:
                variance[region.scope] = temporal_variance(part)
    levels = FrameLevels(
        stack=stack,
        mean=means,
        overscan=overscans,
        sampled=sampled,
        rows=tuple(parts[index] for index in sorted(parts)),
    )
    return Survey(levels, variance or None)


def sample_rows(output: Output, columns: int) -> NDArray[np.int64]:
    """Raw rows to look at, spread evenly, in runs of two so that both rows of a mosaic occur."""
    start, stop = output.image.row_start, output.image.row_stop
    count = min(stop - start, max(SAMPLE_ROWS, SAMPLE_PIXELS // columns))
    firsts = np.linspace(start, max(start, stop - 2), max(1, count // 2)).astype(np.int64)
    return np.unique(np.concatenate([firsts, np.minimum(firsts + 1, stop - 1)]))


def in_region(rows: NDArray[np.int64], output: Output, region: Region) -> NDArray[np.bool_]:
    """Which of the raw rows belong to the region."""
    place = rows - output.image.row_start + output.place.row_start
    found: NDArray[np.bool_] = (place - region.rows.start) % (region.rows.step or 1) == 0
    return found


def region_columns(output: Output, region: Region) -> slice:
    """The region's columns within the output's image section."""
    return slice(region.columns.start - output.place.column_start, None, region.columns.step or 1)


def used_overscan(output: Output) -> Section | None:
    """The overscan columns that are read late enough to hold no trailed image charge.

    The first quarter is left out. Overscan runs on in its output's readout direction: to the
    right for outputs that start at the left, to the left for those that start at the right.
    """
    section = output.overscan
    if section is None:
        return None
    columns = section.column_stop - section.column_start
    skip = columns // 4
    if "left" in output.corner:
        return Section(0, 0, section.column_start + skip, section.column_stop)
    return Section(0, 0, section.column_start, section.column_stop - skip)


def overscan_level(samples: Samples, output: Output) -> NDArray[np.float64]:
    """Mean overscan of each frame (L,) [DN], NaN for an output without."""
    section = used_overscan(output)
    if section is None:
        return np.full(len(samples), np.nan)
    level: NDArray[np.float64] = samples[:, :, section.column_start : section.column_stop].mean(
        axis=(1, 2), dtype=np.float64
    )
    return level


def temporal_variance(part: Samples) -> float:
    """Variance of one sample [DN²] from successive frames (L, S, W), events clipped.

    Means of squares and not medians: medians of whole DN are no measure of a small noise.
    """
    total, count = 0.0, 0
    for first, second in zip(part[:-1:2], part[1::2], strict=False):
        difference = first.astype(np.float32) - second
        difference -= difference.mean()
        squares = difference * difference
        mean = float(squares.mean())
        for _ in range(3):
            kept = squares[squares <= CLIP * CLIP * max(mean, 2 * ROUNDING_VARIANCE)]
            mean = float(kept.mean())
        total += mean / 2
        count += 1
    return max(total / count, ROUNDING_VARIANCE)


def noise_models(surveys: list[Survey], geometry: Geometry) -> dict[str, NoiseModel]:
    """Read variance and slope of each region, from whichever stacks there are.

    Read variance comes from bias, else dark frames; the slope from the flats above it, their
    median. With flats alone a straight line through their variances gives both.
    """
    return {
        region.scope: _noise_model(index, region.scope, surveys)
        for index, region in enumerate(geometry.regions)
    }


def _noise_model(index: int, scope: str, surveys: list[Survey]) -> NoiseModel:
    dark_level, read = None, None
    for kind in ("bias", "dark", "pump"):
        found = [s for s in surveys if s.levels.stack.kind == kind]
        if found and dark_level is None:
            dark_level = min(s.level(index) for s in found)
        variances = [s.variance[scope] for s in found if s.variance]
        if variances and read is None:
            read = min(variances)
    flats = [
        (s.level(index), s.variance[scope])
        for s in surveys
        if s.levels.stack.kind == "flat" and s.variance
    ]
    bias_level = dark_level or 0.0
    if read is None:
        if len(flats) < 2:
            read = flats[0][1] if flats else ROUNDING_VARIANCE
            return NoiseModel(read=read, slope=0.0, bias_level=bias_level)
        light, scattered = np.array(flats).T
        slope, intercept = np.polyfit(light, scattered, 1)
        read = max(float(intercept + slope * bias_level), ROUNDING_VARIANCE)
        return NoiseModel(read=read, slope=max(float(slope), 0.0), bias_level=bias_level)
    slopes = [
        (variance - read) / (level - bias_level)
        for level, variance in flats
        if level - bias_level > np.sqrt(read)
    ]
    slope = max(float(np.median(slopes)), 0.0) if slopes else 0.0
    return NoiseModel(read=read, slope=slope, bias_level=bias_level)
