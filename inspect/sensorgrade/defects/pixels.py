"""Single pixels that stand apart: dark current, response, offset, temporal noise."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainccinv, ndtr

from sensorgrade.defects.background import background, lattice, outside
from sensorgrade.defects.stage import NOT_ASKED, POINT, CountName, DefectStage, Found
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Region
from sensorgrade.kernels.excess_scatter import excess_scatter
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number, quantity

CHANCE = 1e-8  # of a quiet pixel being called noisy
LEAST_FRAMES = 5  # to tell a noisy pixel by its scatter


@dataclass(frozen=True, slots=True, kw_only=True)
class PixelOptions:
    """Recipe keys under ``stages: pixels``."""

    hot: float | None = quantity(
        "electron / s",
        "Dark current above the local level from which a pixel is hot; else ten times the median",
        default=None,
        minimum=0.0,
    )
    warm: float | None = quantity(
        "electron / s",
        "The same for warm pixels; none are looked for without it",
        default=None,
        minimum=0.0,
    )
    dead: float = quantity(
        "%", "Response over the local one below which a pixel is dead", default=20.0, minimum=0.0
    )
    dim: float = quantity(
        "%", "Response over the local one below which a pixel is dim", default=80.0, minimum=0.0
    )
    bright: float = quantity(
        "%", "Response over the local one above which it is bright", default=120.0, minimum=100.0
    )
    offset: float | None = quantity(
        "electron",
        "Departure of the bias level from the local one; else ten times the read noise",
        default=None,
        minimum=0.0,
    )
    noisy: float = number(
        "Temporal noise over the output's from which a pixel is noisy", default=3.0, minimum=1.0
    )
    significance: float = number(
        "A departure counts only from so many of its standard uncertainties",
        default=5.5,
        minimum=3.0,
    )


COUNTS = (
    CountName("hot_pixels", ("hot",), "Pixels whose dark current is past the hot threshold"),
    CountName("warm_pixels", ("warm",), "Pixels past the warm threshold but not the hot one"),
    CountName("dead_pixels", ("dead",), "Pixels that hardly respond to light"),
    CountName("dim_pixels", ("dim",), "Pixels that respond less than their neighbours"),
    CountName("bright_pixels", ("bright",), "Pixels that respond more than their neighbours"),
    CountName("offset_pixels", ("offset",), "Pixels whose bias level stands apart"),
    CountName("noisy_pixels", ("noisy",), "Pixels whose temporal noise is past the threshold"),
)
PARTS = {
    "dark": ("hot_pixels", "warm_pixels"),
    "response": ("dead_pixels", "dim_pixels", "bright_pixels"),
    "offset": ("offset_pixels",),
    "noise": ("noisy_pixels",),
}


def pixels(inputs: Inputs, options: PixelOptions) -> Found:
    """Pixels past the thresholds, each against the median of its surroundings.

    Notes
    -----
    Uncertainty of a pixel's value is sqrt(variance / count) of the stack it comes from, the
    variance being the larger of the pixel's own and the noise model's, so that a lucky pixel of
    few frames is not taken for a sharp one. A pixel is found when its value is past the threshold
    and at least ``significance`` uncertainties from the local level: at 5.5, one pixel in 5e7 of
    a Gaussian population does so by chance.
    """
    found: list[NDArray[np.void]] = []
    lacking: dict[str, str] = {}
    parts = {"dark": _dark, "response": _response, "offset": _offset, "noise": _noise}
    for part, look in parts.items():
        try:
            for region in inputs.reduced.geometry.regions:
                found.extend(look(inputs, options, region))
        except NotMeasured as missing:
            lacking.update({name: str(missing) for name in PARTS[part]})
    if options.warm is None:
        lacking["warm_pixels"] = NOT_ASKED
    points = np.concatenate(found) if found else np.empty(0, POINT)
    return Found(points=points, lines=(), lacking=lacking)


STAGE = DefectStage("pixels", PixelOptions, pixels, COUNTS)


def _dark(inputs: Inputs, options: PixelOptions, region: Region) -> list[NDArray[np.void]]:
    master = inputs.masters.dark
    if master is None or not master.stack.exposure:
        raise NotMeasured("needs a master dark: bias frames, and dark frames with an exposure time")
    gain = inputs.measured("conversion_gain", region.scope).value
    factor = gain / master.stack.exposure  # electron/s for a DN
    level = background(master.values, region)
    hot = options.hot
    if hot is None:
        hot = 10 * max(float(np.median(level.middle)) * factor, 0.0)
    least = hot if options.warm is None else min(options.warm, hot)
    image = _stack_image(inputs, master.stack)
    floor = options.significance * _typical_error(inputs, image, region) * factor
    upper = level.middle + np.float32(max(least, floor) / factor)
    nothing = np.full_like(level.middle, -np.inf)
    rows, columns = outside(master.values, level.place, nothing, upper)
    value = (master.values[rows, columns] - level.at(rows, columns, level.middle)) * factor
    error = _errors(inputs, image, region, rows, columns) * factor
    if inputs.reduced.bias is not None:
        error = np.hypot(
            error, _errors(inputs, inputs.reduced.bias, region, rows, columns) * factor
        )
    points = _points("hot", rows, columns, value, error, "electron / s", value - hot)
    if options.warm is not None:
        warm = value < hot
        points["kind"][warm] = "warm"
        points["probability"][warm] = ndtr((value - options.warm) / error)[warm]
    past = value > least
    return [points[past & (points["significance"] >= options.significance)]]


def _response(inputs: Inputs, options: PixelOptions, region: Region) -> list[NDArray[np.void]]:
    master = inputs.masters.flat
    if master is None:
        raise NotMeasured("needs flat frames")
    level = background(master.values, region)
    low = np.float32(max(options.dim, options.dead) / 100)
    high = np.float32(options.bright / 100)
    rows, columns = outside(master.values, level.place, level.middle * low, level.middle * high)
    local = level.at(rows, columns, level.middle)
    response = 100 * master.values[rows, columns] / local
    error = 100 * master.uncertainty[rows, columns] / local
    image = _stack_image(inputs, master.stack)
    typical = 100 * _typical_error(inputs, image, region) / float(_level(inputs, image, region))
    error = np.maximum(error, typical)
    kinds = np.where(
        response < options.dead, "dead", np.where(response < options.dim, "dim", "bright")
    )
    limit = {"dead": options.dead, "dim": options.dim, "bright": options.bright}
    bounds = np.array([limit[kind] for kind in kinds])
    past = np.where(kinds == "bright", response - bounds, bounds - response)
    points = _points("dim", rows, columns, response, error, "%", past)
    points["kind"] = kinds
    points["significance"] = np.abs(response - 100) / error
    return [points[points["significance"] >= options.significance]]


def _offset(inputs: Inputs, options: PixelOptions, region: Region) -> list[NDArray[np.void]]:
    image = inputs.reduced.bias
    if image is None or image.frames < 2:
        raise NotMeasured("needs two bias frames or more")
    gain = inputs.measured("conversion_gain", region.scope).value
    level = background(image.mean, region)
    noise = np.sqrt(inputs.reduced.noise[region.scope].read) * gain
    limit = 10 * noise if options.offset is None else options.offset
    reach = np.float32(max(limit, options.significance * noise / np.sqrt(image.frames)) / gain)
    rows, columns = outside(image.mean, level.place, level.middle - reach, level.middle + reach)
    value = (image.mean[rows, columns] - level.at(rows, columns, level.middle)) * gain
    error = _errors(inputs, image, region, rows, columns) * gain
    points = _points("offset", rows, columns, value, error, "electron", np.abs(value) - limit)
    points["significance"] = np.abs(value) / error
    return [points[points["significance"] >= options.significance]]


def _noise(inputs: Inputs, options: PixelOptions, region: Region) -> list[NDArray[np.void]]:
    images = [i for i in (inputs.reduced.bias, *inputs.reduced.darks) if i is not None]
    images = [image for image in images if image.frames >= LEAST_FRAMES]
    if not images:
        raise NotMeasured(f"needs a stack of {LEAST_FRAMES} bias or dark frames or more")
    image = max(images, key=lambda one: one.frames)
    gain = inputs.measured("conversion_gain", region.scope).value
    model = inputs.reduced.noise[region.scope]
    degrees = image.frames - 1
    chance = 2 * float(gammainccinv(degrees / 2, CHANCE)) / degrees
    high = max(options.noisy**2, chance)
    place = lattice(region)
    room = 1 << 16
    while True:
        rows, columns = np.empty(room, np.int32), np.empty(room, np.int32)
        found = excess_scatter(
            (image.mean,), (image.variance,), (image.count,),
            model.read, model.slope, np.array([model.bias_level], np.float32),
            *place.arguments, -1.0, high, rows, columns,
        )  # fmt: skip
        if found <= room:
            rows, columns = rows[:found], columns[:found]
            break
        room = found
    noise = np.sqrt(image.variance[rows, columns].astype(np.float64)) * gain
    error = noise / np.sqrt(2 * degrees)
    signal = np.maximum(image.mean[rows, columns] - model.bias_level, 0)
    limit = options.noisy * np.sqrt(model.read + model.slope * signal) * gain
    return [_points("noisy", rows, columns, noise, error, "electron", noise - limit)]


def _points(
    kind: str,
    rows: NDArray[np.int32],
    columns: NDArray[np.int32],
    value: NDArray[np.float64],
    error: NDArray[np.float64],
    unit: str,
    past: NDArray[np.float64],
) -> NDArray[np.void]:
    """POINT rows; ``past`` is how far each value is beyond its threshold."""
    points = np.zeros(len(rows), POINT)
    points["kind"], points["unit"] = kind, unit
    points["row"], points["column"] = rows, columns
    points["value"], points["uncertainty"] = value, error
    points["significance"] = value / error
    points["probability"] = ndtr(past / error)
    return points


def _stack_image(inputs: Inputs, stack: Stack) -> StackImage:
    """The reduced stack that a master was made from."""
    images = (*inputs.reduced.darks, *inputs.reduced.flats)
    return next(image for image in images if image.stack is stack)


def _level(inputs: Inputs, image: StackImage, region: Region) -> float:
    """Typical level of a stack above bias in a region [DN]."""
    sample = image.mean[region.rows, region.columns][::7, ::7]
    level = float(np.median(sample))
    bias = inputs.reduced.bias
    if bias is None:
        return level - inputs.reduced.noise[region.scope].bias_level
    return level - float(np.median(bias.mean[region.rows, region.columns][::7, ::7]))


def _typical_error(inputs: Inputs, image: StackImage, region: Region) -> float:
    """Standard error [DN] that the noise model gives a usual pixel of the stack's mean."""
    model = inputs.reduced.noise[region.scope]
    signal = max(_level(inputs, image, region), 0.0)
    return float(np.sqrt((model.read + model.slope * signal) / image.frames))


def _errors(
    inputs: Inputs,
    image: StackImage,
    region: Region,
    rows: NDArray[np.int32],
    columns: NDArray[np.int32],
) -> NDArray[np.float64]:
    """Standard errors of the stack's mean [DN]: the larger of the pixel's own and the model's."""
    model = inputs.reduced.noise[region.scope]
    signal = np.maximum(image.mean[rows, columns] - model.bias_level, 0)
    variance = np.maximum(image.variance[rows, columns], model.read + model.slope * signal)
    error: NDArray[np.float64] = np.sqrt(variance / image.count[rows, columns], dtype=np.float64)
    return error
