"""The bits of a defect mask, each declared once: value, name and sentence."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import RequestError


@dataclass(frozen=True, slots=True)
class Bit:
    """One bit of the mask; 0 in every bit means a good pixel."""

    value: int
    name: str
    meaning: str


BITS = (
    Bit(1, "hot", "dark current past the hot threshold"),
    Bit(2, "warm", "dark current past the warm threshold only"),
    Bit(4, "dead", "hardly responds to light"),
    Bit(8, "dim", "responds less than its neighbours"),
    Bit(16, "bright", "responds more than its neighbours"),
    Bit(32, "offset", "level without light or time stands apart"),
    Bit(64, "noisy", "temporal noise past the threshold"),
    Bit(128, "telegraph", "switches between levels in time"),
    Bit(256, "stuck", "gives one code whatever the light"),
    Bit(512, "nonlinear", "response bends against its neighbours"),
    Bit(1024, "column", "belongs to a bad column or part of one"),
    Bit(2048, "row", "belongs to a bad row or part of one"),
    Bit(4096, "cluster", "belongs to a cluster of defective pixels"),
    Bit(8192, "spill", "spoilt by the charge of a strong hot pixel"),
    Bit(16384, "trap", "holds back charge that passes through it"),
    Bit(32768, "no data", "no valid sample in some stack"),
)

BY_NAME = {bit.name: bit for bit in BITS}


def value_of(names: tuple[str, ...]) -> int:
    """The bits of that name, joined.

    Raises
    ------
    RequestError
        A name is no bit of the mask; the message lists those there are.
    """
    unknown = [name for name in names if name not in BY_NAME]
    if unknown:
        raise RequestError(
            f"mask bits: no bit is called {unknown[0]!r}; there are {', '.join(BY_NAME)}"
        )
    return sum({BY_NAME[name].value for name in names})


def names_of(value: int) -> tuple[str, ...]:
    """The names of the bits set in ``value``, lowest first."""
    return tuple(bit.name for bit in BITS if value & bit.value)


def pixels_by_bit(mask: NDArray[np.uint16]) -> dict[str, int]:
    """How many pixels of ``mask`` carry each bit, for the bits that occur."""
    counts = np.bincount(mask.ravel(), minlength=65536)
    codes = np.flatnonzero(counts)
    found = {bit.name: int(counts[codes[codes & bit.value > 0]].sum()) for bit in BITS}
    return {name: count for name, count in found.items() if count}
