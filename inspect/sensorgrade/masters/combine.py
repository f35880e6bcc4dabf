"""Master bias, dark and flat from reduced stacks, with the uncertainty of every pixel."""

import numpy as np
from numpy.typing import NDArray

from sensorgrade.kernels.combine import (
    differences,
    divided,
    less_light_free,
    standard_errors,
)
from sensorgrade.masters.master import Master, Masters
from sensorgrade.masters.reduced import Reduced, StackImage

ENOUGH = 1 << 18  # samples of which a median has 1/400 of the scatter of one


def combined_masters(reduced: Reduced) -> Masters:
    """The masters that the reduced stacks allow.

    The dark is the stack of longest exposure, the flat the one of most frames (then of most
    light): they have the least noise for what they are used for.
    """
    bias = None if reduced.bias is None else _bias(reduced.bias)
    darks = [image for image in reduced.darks if image.stack.kind == "dark"]
    dark = None
    if darks and reduced.bias is not None:
        longest = max(darks, key=lambda image: (image.stack.exposure or 0.0, image.frames))
        dark = _dark(longest, reduced.bias)
    flat = None
    if reduced.flats:
        best = max(reduced.flats, key=lambda image: (image.frames, float(_light(image, reduced))))
        flat = _flat(best, reduced, dark)
    return Masters(bias=bias, dark=dark, flat=flat)


def _bias(image: StackImage) -> Master:
    return Master(
        kind="bias",
        values=image.mean,
        uncertainty=_standard_error(image),
        count=image.count,
        unit="DN",
        stack=image.stack,
    )


def _dark(image: StackImage, bias: StackImage) -> Master:
    values, uncertainty = np.empty_like(image.mean), np.empty_like(image.mean)
    differences(
        image.mean.ravel(),
        image.variance.ravel(),
        image.count.ravel(),
        bias.mean.ravel(),
        bias.variance.ravel(),
        bias.count.ravel(),
        values.ravel(),
        uncertainty.ravel(),
    )
    return Master(
        kind="dark",
        values=values,
        uncertainty=uncertainty,
        count=image.count,
        unit="DN",
        stack=image.stack,
    )


def _flat(image: StackImage, reduced: Reduced, dark: Master | None) -> Master:
    """The flat less what is there without light, over its own median.

    Without a bias frame the reduction's bias level is taken, which is 0 where overscan was
    subtracted. Dark charge is taken out in proportion to the exposure.
    """
    base = _bias_levels(reduced) if reduced.bias is None else reduced.bias.mean
    share, unlit = 0.0, base
    if dark is not None and dark.stack.exposure and image.stack.exposure:
        share, unlit = image.stack.exposure / dark.stack.exposure, dark.values
    values = np.empty_like(image.mean)
    less_light_free(image.mean.ravel(), base.ravel(), unlit.ravel(), share, values.ravel())
    uncertainty = _standard_error(image)
    middle = _median(values)
    if middle > 0:
        divided(values.ravel(), uncertainty.ravel(), middle)
    return Master(
        kind="flat",
        values=values,
        uncertainty=uncertainty,
        count=image.count,
        unit="",
        stack=image.stack,
    )


def _bias_levels(reduced: Reduced) -> NDArray[np.float32]:
    """The rough bias level of every pixel's region, (M, N) float32 [DN]."""
    levels = np.zeros(reduced.geometry.shape, np.float32)
    for region in reduced.geometry.regions:
        levels[region.rows, region.columns] = reduced.noise[region.scope].bias_level
    return levels


def _light(image: StackImage, reduced: Reduced) -> float:
    """Level of the stack, to tell which of several is brighter [DN]."""
    return next(
        float(levels.mean.mean()) for levels in reduced.levels if levels.stack is image.stack
    )


def _standard_error(image: StackImage) -> NDArray[np.float32]:
    """Standard uncertainty of the stack's mean from the scatter of its samples (GUM type A)."""
    error = np.empty_like(image.variance)
    standard_errors(image.variance.ravel(), image.count.ravel(), error.ravel())
    return error


def _median(values: NDArray[np.float32]) -> float:
    """Median of evenly spread rows and columns, of all if the image is small.

    Strides are odd, so that both rows and columns of a mosaic's cell occur alike.
    """
    step = 1
    while values.size // (step * step) > ENOUGH:
        step += 2
    return float(np.median(values[::step, ::step]))
