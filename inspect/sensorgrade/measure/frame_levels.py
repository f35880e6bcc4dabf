"""Mean level of a stack in a region, and how much levels scatter from frame to frame."""

from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import FrameLevels
from sensorgrade.measure.stage import Inputs


def levels_of(inputs: Inputs, stack: Stack) -> FrameLevels:
    """The frame levels of a stack; raises NotMeasured when it has none."""
    for levels in inputs.reduced.levels:
        if levels.stack is stack or levels.stack == stack:
            return levels
    raise NotMeasured(f"needs the frame levels of the stack {stack.name}")


def region_index(inputs: Inputs, region: Region) -> int:
    """Column of a region in the arrays of FrameLevels."""
    scopes = [r.scope for r in inputs.reduced.geometry.regions]
    return scopes.index(region.scope)


def offset_scatter(inputs: Inputs, region: Region) -> tuple[float, int]:
    """Standard deviation [DN] of frame levels about their stack's mean, and degrees of freedom.

    Pooled over bias and dark stacks: the level moves from frame to frame by far more than pixel
    noise over a million pixels would have it, and alike in all frames without light. Levels come
    from a sample of the rows; the pixel noise that this leaves in them is taken out, and that of
    the whole region put in.
    """
    index = region_index(inputs, region)
    squares, degrees, sampled = 0.0, 0, 1
    for levels in inputs.reduced.levels:
        if levels.stack.kind in ("bias", "dark") and len(levels.mean) > 1:
            column: NDArray[np.float64] = levels.mean[:, index]
            squares += float(((column - column.mean()) ** 2).sum())
            degrees += len(column) - 1
            sampled = int(levels.sampled[index])
    if degrees == 0:
        raise NotMeasured("needs two bias or dark frames taken alike, to know how levels scatter")
    size = _length(region.rows) * _length(region.columns)
    noise = inputs.reduced.noise[region.scope].read
    scatter = max(squares / degrees - noise / sampled, 0.0) + noise / size
    return sqrt(scatter), degrees


def _length(cut: slice) -> int:
    return len(range(cut.start, cut.stop, cut.step or 1))
