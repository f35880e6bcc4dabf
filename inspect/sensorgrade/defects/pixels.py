"""Single pixels that stand apart: dark current, response, offset, temporal noise."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainccinv, ndtr

from sensorgrade.defects.background import Lattice, background, few_outside, lattice, outside
from sensorgrade.defects.candidates import CANDIDATE, DARK, HIGH, LOW, NEUTRAL, OFFSET, REACH
from sensorgrade.defects.stage import NOT_ASKED, POINT, CountName, DefectStage, Found
from sensorgrade.defects.thresholds import (
    NEAR,
    PixelOptions,
    judged,
    nearest_threshold,
    significance,
)
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Region
from sensorgrade.kernels.excess_scatter import excess_scatter
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Measurement

CHANCE = 1e-8  # of a quiet pixel being called noisy
LEAST_FRAMES = 5  # to tell a noisy pixel by its scatter
# What is kept for other thresholds: pixels past a part of the way to the nearest one, as far as
# they are few.
KEPT_FROM = {DARK: 0.25, LOW: 0.5, HIGH: 0.5, OFFSET: 0.5}
KEPT = 4096  # of each part and region, the farthest
MANY = 1 << 17  # that are looked at for it
UNITS = ("electron / s", "%", "%", "electron")


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
    Pixels short of a threshold are told too where they may be past it, with their probability, and
    those farther from the usual pixel are kept for other thresholds (see `recount`).

    Uncertainty of a pixel's value is sqrt(variance / count) of the stack it comes from, the
    variance being the larger of the pixel's own and the noise model's, so that a lucky pixel of
    few frames is not taken for a sharp one. A pixel is found when its value is past the threshold
    and at least ``significance`` uncertainties from the local level: at 5.5, one pixel in 5e7 of
    a Gaussian population does so by chance.
    """
    found: list[NDArray[np.void]] = []
    kept: list[Kept] = []
    lacking: dict[str, str] = {}
    parts = {"dark": _dark, "response": _response, "offset": _offset}
    regions = inputs.reduced.geometry.regions
    for part, look in parts.items():
        try:
            for number, region in enumerate(regions):
                for sought in look(inputs, options, region):
                    found.extend(_points(sought, options))
                    kept.append(_kept(sought, number, options))
        except NotMeasured as missing:
            lacking.update({name: str(missing) for name in PARTS[part]})
    try:
        found.extend(_noise(inputs, options, region) for region in regions)
    except NotMeasured as missing:
        lacking.update({name: str(missing) for name in PARTS["noise"]})
    if options.warm is None:
        lacking["warm_pixels"] = NOT_ASKED
    return Found(
        points=np.concatenate(found) if found else np.empty(0, POINT),
        lines=(),
        lacking=lacking,
        candidates=np.concatenate([one.pixels for one in kept] or [np.empty(0, CANDIDATE)]),
        reaches=np.array([one.reach for one in kept], REACH),
    )


STAGE = DefectStage("pixels", PixelOptions, pixels, COUNTS)


@dataclass(frozen=True, slots=True)
class Sought:
    """Pixels of one part and region that stand apart: arrays (K,), as in `CANDIDATE`.

    ``automatic``, ``typical``, ``reach`` and ``scale`` are as in `REACH`.
    """

    part: int
    rows: NDArray[np.int32]
    columns: NDArray[np.int32]
    value: NDArray[np.float32]
    error: NDArray[np.float32]
    automatic: float
    typical: float
    reach: float
    scale: float


@dataclass(frozen=True, slots=True)
class Kept:
    """What is kept of a `Sought`: a CANDIDATE array and a REACH row."""

    pixels: NDArray[np.void]
    reach: tuple[int, int, float, float, float, float]


def _dark(inputs: Inputs, options: PixelOptions, region: Region) -> list[Sought]:
    master = inputs.masters.dark
    if master is None or not master.stack.exposure:
        raise NotMeasured("needs a master dark: bias frames, and dark frames with an exposure time")
    gain = inputs.measured("conversion_gain", region.scope)
    factor = gain.value / master.stack.exposure  # electron/s for a DN
    level = background(master.values, region)
    automatic = 10 * max(float(np.median(level.middle)) * factor, 0.0)
    image = _stack_image(inputs, master.stack)
    typical = _typical_error(inputs, image, region) * factor
    nothing = np.full_like(level.middle, -np.inf)

    def past(reach: float) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        return nothing, level.middle + np.float32(reach / factor)

    threshold = nearest_threshold(DARK, options, automatic)
    rows, columns, reach = _beyond(
        master.values,
        level.place,
        past,
        deep=KEPT_FROM[DARK] * threshold,
        needed=threshold - NEAR * typical,
        least=options.significance * typical,
    )
    value = (master.values[rows, columns] - level.at(rows, columns, level.middle)) * factor
    error = _errors(inputs, image, region, rows, columns) * factor
    if inputs.reduced.bias is not None:
        error = np.hypot(
            error, _errors(inputs, inputs.reduced.bias, region, rows, columns) * factor
        )
    return [
        Sought(
            DARK,
            rows,
            columns,
            value.astype(np.float32),
            error.astype(np.float32),
            automatic,
            typical,
            reach,
            _relative(gain),
        )
    ]


def _response(inputs: Inputs, options: PixelOptions, region: Region) -> list[Sought]:
    master = inputs.masters.flat
    if master is None:
        raise NotMeasured("needs flat frames")
    level = background(master.values, region)
    image = _stack_image(inputs, master.stack)
    typical = 100 * _typical_error(inputs, image, region) / float(_level(inputs, image, region))
    found = []
    for part, sign in ((LOW, -1.0), (HIGH, 1.0)):

        def past(
            reach: float, sign: float = sign
        ) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
            bound = level.middle * np.float32((100.0 + sign * reach) / 100)
            open_side = np.full_like(level.middle, -sign * np.inf)
            return (bound, open_side) if sign < 0 else (open_side, bound)

        threshold = abs(nearest_threshold(part, options, 0.0) - 100.0)
        rows, columns, reach = _beyond(
            master.values,
            level.place,
            past,
            deep=KEPT_FROM[part] * threshold,
            needed=threshold - NEAR * typical,
            least=options.significance * typical,
        )
        local = level.at(rows, columns, level.middle)
        value = 100 * master.values[rows, columns] / local
        error = np.maximum(100 * master.uncertainty[rows, columns] / local, typical)
        found.append(
            Sought(
                part,
                rows,
                columns,
                value.astype(np.float32),
                error.astype(np.float32),
                0.0,
                typical,
                100.0 + sign * reach,
                0.0,
            )
        )
    return found


def _offset(inputs: Inputs, options: PixelOptions, region: Region) -> list[Sought]:
    image = inputs.reduced.bias
    if image is None or image.frames < 2:
        raise NotMeasured("needs two bias frames or more")
    gain = inputs.measured("conversion_gain", region.scope)
    level = background(image.mean, region)
    noise = float(np.sqrt(inputs.reduced.noise[region.scope].read) * gain.value)
    typical = noise / float(np.sqrt(image.frames))

    def past(reach: float) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        by = np.float32(reach / gain.value)
        return level.middle - by, level.middle + by

    threshold = nearest_threshold(OFFSET, options, 10 * noise)
    rows, columns, reach = _beyond(
        image.mean,
        level.place,
        past,
        deep=KEPT_FROM[OFFSET] * threshold,
        needed=threshold - NEAR * typical,
        least=options.significance * typical,
    )
    value = (image.mean[rows, columns] - level.at(rows, columns, level.middle)) * gain.value
    error = _errors(inputs, image, region, rows, columns) * gain.value
    return [
        Sought(
            OFFSET,
            rows,
            columns,
            value.astype(np.float32),
            error.astype(np.float32),
            10 * noise,
            typical,
            reach,
            _relative(gain),
        )
    ]


def _beyond(
    image: NDArray[np.float32],
    place: Lattice,
    past: Callable[[float], tuple[NDArray[np.float32], NDArray[np.float32]]],
    *,
    deep: float,
    needed: float,
    least: float,
) -> tuple[NDArray[np.int32], NDArray[np.int32], float]:
    """Pixels that depart by more than ``deep``, or than ``needed`` where those are too many.

    ``past(reach)`` gives the lower and upper limits for a departure. Below ``least`` no departure
    is significant, so that what is complete to there is complete. Returns rows, columns and the
    departure beyond which all are told.
    """
    wanted = min(deep, needed)
    found = few_outside(image, place, *past(max(wanted, least)), most=MANY)
    if found is None:
        wanted = needed
        found = outside(image, place, *past(max(wanted, least)))
    return *found, 0.0 if wanted <= least else wanted


def _points(sought: Sought, options: PixelOptions) -> list[NDArray[np.void]]:
    """POINT arrays of the kinds that the pixels may be."""
    value, error = sought.value.astype(np.float64), sought.error.astype(np.float64)
    found = []
    for one in judged(
        sought.part,
        value,
        error,
        options,
        automatic=sought.automatic,
        typical=sought.typical,
        scale=sought.scale,
    ):
        points = np.zeros(len(one.places), POINT)
        points["kind"], points["unit"] = one.kind, UNITS[sought.part]
        points["row"], points["column"] = sought.rows[one.places], sought.columns[one.places]
        points["value"], points["uncertainty"] = value[one.places], error[one.places]
        points["significance"] = significance(sought.part, value, error)[one.places]
        points["probability"], points["shared"] = one.probability, one.shared
        found.append(points)
    return found


def _kept(sought: Sought, region: int, options: PixelOptions) -> Kept:
    """The significant pixels, as many of the farthest as are kept."""
    apart = np.abs(sought.value - np.float32(NEUTRAL[sought.part]))
    chosen = np.flatnonzero(apart >= options.significance * sought.error)
    reach = sought.reach
    if len(chosen) > KEPT:
        order = chosen[np.argsort(-apart[chosen], kind="stable")]
        sign = -1.0 if sought.part == LOW else 1.0
        reach = NEUTRAL[sought.part] + sign * float(apart[order[KEPT]])
        chosen = np.sort(order[:KEPT])
    pixels = np.zeros(len(chosen), CANDIDATE)
    pixels["part"], pixels["region"] = sought.part, region
    pixels["row"], pixels["column"] = sought.rows[chosen], sought.columns[chosen]
    pixels["value"], pixels["uncertainty"] = sought.value[chosen], sought.error[chosen]
    return Kept(
        pixels, (sought.part, region, sought.automatic, sought.typical, reach, sought.scale)
    )


def _relative(gain: Measurement) -> float:
    return gain.standard_uncertainty / gain.value


def _noise(inputs: Inputs, options: PixelOptions, region: Region) -> NDArray[np.void]:
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
    points = np.zeros(len(rows), POINT)
    points["kind"], points["unit"] = "noisy", "electron"
    points["row"], points["column"] = rows, columns
    points["value"], points["uncertainty"] = noise, error
    points["significance"] = noise / error
    points["probability"] = ndtr((noise - limit) / error)
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
