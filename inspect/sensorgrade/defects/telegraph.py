"""Pixels that switch between two levels in time."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from sensorgrade.defects.stage import POINT, CountName, DefectStage, Found
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number

LEAST_FRAMES = 8
TELEGRAPH = "telegraph"


@dataclass(frozen=True, slots=True, kw_only=True)
class TelegraphOptions:
    """Recipe keys under ``stages: telegraph``."""

    amplitude: float = number(
        "Difference of the levels over a sample's noise, from which a pixel counts",
        default=4.0,
        minimum=2.0,
    )
    times: int = number(
        "Frames that must lie on either level, so that particles do not count",
        default=2,
        minimum=2,
    )


COUNTS = (CountName("telegraph_pixels", (TELEGRAPH,), "Pixels that switch between levels in time"),)


def telegraph(inputs: Inputs, options: TelegraphOptions) -> Found:
    """Two levels in the samples of the pixels that the noise model does not explain.

    Notes
    -----
    Samples in order of size are split where the scatter within both parts is least. A pixel
    counts when its levels differ by ``amplitude`` deviations of a sample, each level holds
    ``times`` frames or more, and what is left within the levels scatters less than twice the
    noise expected at that level: a merely noisy pixel does not. One frame on the upper level is
    what a particle leaves.
    """
    images = [
        image
        for image in (inputs.reduced.bias, *inputs.reduced.darks)
        if image is not None and image.frames >= LEAST_FRAMES and image.stack.kind != "pump"
    ]
    if not images:
        sentence = f"needs a stack of {LEAST_FRAMES} bias or dark frames or more"
        return Found(np.empty(0, POINT), (), {COUNTS[0].name: sentence})
    try:
        parts = [
            _switching(inputs, options, image, region)
            for image in images
            for region in inputs.reduced.geometry.regions
        ]
    except NotMeasured as missing:
        return Found(np.empty(0, POINT), (), {COUNTS[0].name: str(missing)})
    points = np.concatenate(parts)
    # A pixel that switches in several stacks is one pixel: its strongest showing is kept.
    order = np.argsort(-points["significance"], kind="stable")
    points = points[order]
    _, first = np.unique(points[["row", "column"]], return_index=True)
    return Found(points=points[np.sort(first)], lines=(), lacking={})


STAGE = DefectStage("telegraph", TelegraphOptions, telegraph, COUNTS)


def _switching(
    inputs: Inputs, options: TelegraphOptions, image: StackImage, region: Region
) -> NDArray[np.void]:
    suspects = image.suspects
    inside = _within(suspects.rows, region.rows) & _within(suspects.columns, region.columns)
    samples = np.sort(suspects.samples[inside].astype(np.float64), axis=1)
    points = np.zeros(len(samples), POINT)
    if not len(samples):
        return points
    gain = inputs.measured("conversion_gain", region.scope).value
    model = inputs.reduced.noise[region.scope]
    frames = samples.shape[1]
    splits = np.arange(options.times, frames - options.times + 1)
    if not len(splits):
        return points[:0]
    sums = np.concatenate([np.zeros((len(samples), 1)), np.cumsum(samples, axis=1)], axis=1)
    low = sums[:, splits] / splits
    high = (sums[:, -1:] - sums[:, splits]) / (frames - splits)
    gained = splits * (frames - splits) / frames * (high - low) ** 2
    at = np.argmax(gained, axis=1)
    one = np.arange(len(samples))
    step = (high - low)[one, at]
    total = ((samples - samples.mean(axis=1, keepdims=True)) ** 2).sum(axis=1)
    within = np.maximum(total - gained[one, at], 0) / (frames - 2)
    level = np.maximum(high[one, at] - model.bias_level, 0)
    noise = np.sqrt(model.read + model.slope * level)
    counts = splits[at]
    error = noise * np.sqrt(1 / counts + 1 / (frames - counts))
    points["kind"], points["unit"] = TELEGRAPH, "electron"
    points["row"], points["column"] = suspects.rows[inside], suspects.columns[inside]
    points["value"], points["uncertainty"] = step * gain, error * gain
    points["significance"] = step / error
    points["probability"] = ndtr((step - options.amplitude * noise) / error)
    kept: NDArray[np.void] = points[(step >= options.amplitude * noise) & (within <= 4 * noise**2)]
    return kept


def _within(places: NDArray[np.int32], part: slice) -> NDArray[np.bool_]:
    """Which positions a slice of the image takes in."""
    step = part.step or 1
    inside: NDArray[np.bool_] = (
        (places >= part.start) & (places < part.stop) & ((places - part.start) % step == 0)
    )
    return inside
