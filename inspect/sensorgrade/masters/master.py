"""Master frames: what reduction software divides by and subtracts."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.frame import Stack


@dataclass(frozen=True, slots=True)
class Master:
    """A master frame of shape (M, N) with standard uncertainty and samples used.

    ``kind`` bias: [DN], overscan-corrected. dark: [DN] less the master bias, for ``exposure``
    [s]. flat: without bias and dark, divided by its own median, no unit.
    """

    kind: str
    values: NDArray[np.float32]
    uncertainty: NDArray[np.float32]
    count: NDArray[np.uint16]
    unit: str
    stack: Stack


@dataclass(frozen=True, slots=True)
class Masters:
    """The masters that the set allows; None where frames are missing."""

    bias: Master | None
    dark: Master | None
    flat: Master | None
