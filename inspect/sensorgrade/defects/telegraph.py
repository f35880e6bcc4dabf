"""Pixels that switch between two levels in time."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import entr, gammainccinv, gammaln, log_ndtr, ndtr

from sensorgrade.defects.stage import POINT, CountName, DefectStage, Found
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import NoiseModel, StackImage
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number

LEAST_FRAMES = 8
TELEGRAPH = "telegraph"
CHANCE = 5e-8  # of a quiet pixel's samples parting so by themselves
NOISE_CHANCE = 1e-3  # of a switching pixel scattering more about its levels than is allowed
PARTICLES = 1e-2  # pixels of a stack that particles alone may make look switched
FAVOUR = 2.5  # log likelihood by which two levels must be better than one of more noise


@dataclass(frozen=True, slots=True, kw_only=True)
class TelegraphOptions:
    """Recipe keys under ``stages: telegraph``."""

    amplitude: float = number(
        "Difference of the levels over a sample's noise, from which a pixel counts",
        default=3.0,
        minimum=2.0,
    )
    times: int = number(
        "Frames that must lie on either level, so that particles do not count; more are asked for"
        " where particles are frequent",
        default=2,
        minimum=2,
    )
    transitions: int = number(
        "Changes of level that must be seen, so that drift does not count", default=2, minimum=1
    )


COUNTS = (CountName("telegraph_pixels", (TELEGRAPH,), "Pixels that switch between levels in time"),)


@dataclass(frozen=True, slots=True)
class Switching:
    """Two levels in the samples of S pixels, each array (S,).

    ``low`` and ``high`` [DN] are the levels, ``upper`` the samples on the high one, ``quiet``
    [DN] is the noise that the model gives a sample, ``noise`` the larger of it and of the
    scatter about the levels, ``transitions`` the changes of level in time.
    ``chance`` is the log of the probability that one level and noise part so by themselves;
    ``favour`` the log likelihood of two levels over that of one level with more noise.
    """

    low: NDArray[np.float64]
    high: NDArray[np.float64]
    upper: NDArray[np.int64]
    quiet: NDArray[np.float64]
    noise: NDArray[np.float64]
    transitions: NDArray[np.int64]
    chance: NDArray[np.float64]
    favour: NDArray[np.float64]


def two_levels(samples: NDArray[np.float32], model: NoiseModel, *, times: int) -> Switching:
    """The best parting of each pixel's samples (S, L) [DN], in order of time, into two levels.

    Samples in order of size are split where the scatter within both parts is least, ``times`` or
    more on either side. The pixel's mean level says how much shot noise the
    model adds.
    """
    frames = samples.shape[1]
    pixel = np.arange(len(samples))
    ordered = np.sort(samples.astype(np.float64), axis=1)
    splits = np.arange(times, frames - times + 1)
    sums = np.cumsum(ordered, axis=1)
    lows = sums[:, splits - 1] / splits
    highs = (sums[:, -1:] - sums[:, splits - 1]) / (frames - splits)
    between = splits * (frames - splits) / frames * (highs - lows) ** 2
    at = np.argmax(between, axis=1)
    low, high, gained = lows[pixel, at], highs[pixel, at], between[pixel, at]
    upper = frames - splits[at]
    mean = ordered.mean(axis=1)
    total = ((ordered - mean[:, None]) ** 2).sum(axis=1)
    within = np.maximum(total - gained, 0)
    quiet = model.read + model.slope * np.maximum(mean - model.bias_level, 0)
    noise2 = np.maximum(within / (frames - 2), quiet)
    ways = gammaln(frames + 1) - gammaln(upper + 1) - gammaln(frames - upper + 1)
    share = upper / frames
    # Each sample of two levels also has to be on the level where it is.
    order = frames * (entr(share) + entr(1 - share))
    spread = np.maximum(within / frames, quiet)
    one = np.maximum(total / frames, quiet)
    favour = (frames * np.log(one / spread) + total / one - within / spread) / 2 - order
    on_high = samples > ((low + high) / 2)[:, None]
    return Switching(
        low=low,
        high=high,
        upper=upper,
        quiet=np.sqrt(quiet),
        noise=np.sqrt(noise2),
        transitions=(on_high[:, 1:] != on_high[:, :-1]).sum(axis=1),
        chance=np.log(len(splits)) + ways + log_ndtr(-np.sqrt(gained / noise2)),
        favour=favour,
    )


def telegraph(inputs: Inputs, options: TelegraphOptions) -> Found:
    """Two levels in the samples of the pixels that the noise model does not explain.

    Notes
    -----
    A pixel counts when its levels differ by ``amplitude`` times the noise that the model gives a
    sample; when quiet samples would part so only with a chance of 5e-8, all partings counted; when
    the scatter about the levels is what the model gives them, and two levels explain the samples
    better than one level of more noise (a merely noisy pixel); when it changed level
    ``transitions`` times (a drift does so once); and when more samples are on the high level than
    particles would hit in any pixel of the stack.
    """
    images = [
        image
        for image in (inputs.reduced.bias, *inputs.reduced.darks)
        if image is not None and image.frames >= LEAST_FRAMES
    ]
    lacking = ""
    if not images:
        lacking = f"needs a stack of {LEAST_FRAMES} bias or dark frames or more"
    elif not all(image.suspects.complete for image in images):
        lacking = "more pixels scatter than the noise model explains than are looked at one by one"
    try:
        parts = [
            _switching(inputs, options, image, region)
            for image in images
            for region in inputs.reduced.geometry.regions
        ]
    except NotMeasured as missing:
        lacking = str(missing)
    if lacking:
        return Found(np.empty(0, POINT), (), {COUNTS[0].name: lacking})
    points = np.concatenate(parts)
    # A pixel that switches in several stacks is one pixel: its strongest showing is kept.
    points = points[np.argsort(-points["significance"], kind="stable")]
    _, first = np.unique(points[["row", "column"]], return_index=True)
    return Found(points=points[np.sort(first)], lines=(), lacking={})


STAGE = DefectStage("telegraph", TelegraphOptions, telegraph, COUNTS)


def _switching(
    inputs: Inputs, options: TelegraphOptions, image: StackImage, region: Region
) -> NDArray[np.void]:
    suspects = image.suspects
    inside = _within(suspects.rows, region.rows) & _within(suspects.columns, region.columns)
    if not inside.any() or image.frames < 2 * options.times:
        return np.empty(0, POINT)
    gain = inputs.measured("conversion_gain", region.scope).value
    model = inputs.reduced.noise[region.scope]
    found = two_levels(suspects.samples[inside], model, times=options.times)
    step = found.high - found.low
    degrees = image.frames - 2
    most = 2 * gammainccinv(degrees / 2, NOISE_CHANCE) / degrees
    counted = (
        (found.noise**2 <= most * found.quiet**2)
        & (step >= options.amplitude * found.quiet)
        & (found.chance <= np.log(CHANCE))
        & (found.favour >= FAVOUR)
        & (found.transitions >= options.transitions)
        & (found.upper >= _beyond_particles(image))
    )
    error = found.noise * np.sqrt(1 / found.upper + 1 / (image.frames - found.upper))
    points = np.zeros(len(step), POINT)
    points["kind"], points["unit"] = TELEGRAPH, "electron"
    points["row"], points["column"] = suspects.rows[inside], suspects.columns[inside]
    points["value"], points["uncertainty"] = step * gain, error * gain
    points["significance"] = step / error
    points["probability"] = ndtr((step - options.amplitude * found.quiet) / error)
    kept: NDArray[np.void] = points[counted]
    return kept


def _beyond_particles(image: StackImage) -> int:
    """Samples of one pixel that particles are not expected to hit anywhere in the stack.

    With p the share of samples left out as hit, k hits among L frames are expected in
    M N C(L, k) p^k pixels.
    """
    frames, pixels = image.frames, image.mean.size
    hit = max(image.events / (pixels * frames), 1e-12)
    hits = np.arange(1, frames + 1)
    ways = gammaln(frames + 1) - gammaln(hits + 1) - gammaln(frames - hits + 1)
    expected = np.log(pixels) + ways + hits * np.log(hit)
    rare = hits[expected < np.log(PARTICLES)]
    return int(rare[0]) if len(rare) else frames


def _within(places: NDArray[np.int32], part: slice) -> NDArray[np.bool_]:
    """Which positions a slice of the image takes in."""
    step = part.step or 1
    inside: NDArray[np.bool_] = (
        (places >= part.start) & (places < part.stop) & ((places - part.start) % step == 0)
    )
    return inside
