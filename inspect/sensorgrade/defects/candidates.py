"""Pixels that some threshold may call defects, kept so that thresholds can move without frames."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.recipe.model import Section

# How a pixel stands apart. A value is in the unit of the part's thresholds: dark current above
# the local level [electron/s], response over the local one [%] (two parts, below and above 100),
# departure of the bias level [electron].
PARTS = ("dark", "low response", "high response", "offset")
DARK, LOW, HIGH, OFFSET = range(len(PARTS))
NEUTRAL = (0.0, 100.0, 100.0, 0.0)  # the value of a usual pixel, by part

CANDIDATE = np.dtype(
    [
        ("part", "u1"),
        ("region", "<u2"),
        ("row", "<i4"),
        ("column", "<i4"),
        ("value", "<f4"),
        ("uncertainty", "<f4"),
    ]
)
# What was looked for in one part and region: the ``threshold`` chosen where the recipe states none,
# a usual pixel's standard uncertainty ``typical``, and ``reach``: every pixel that stands apart
# significantly and lies beyond that value is among the candidates. ``scale`` is the relative
# standard uncertainty that all values of the region share: that of its conversion gain.
REACH = np.dtype(
    [
        ("part", "u1"),
        ("region", "<u2"),
        ("threshold", "<f8"),
        ("typical", "<f8"),
        ("reach", "<f8"),
        ("scale", "<f8"),
    ]
)
# Defects of other kinds, whose thresholds cannot move: they share in ranking and in clusters.
SETTLED = np.dtype(
    [
        ("kind", "u1"),
        ("row", "<i4"),
        ("column", "<i4"),
        ("significance", "<f8"),
        ("probability", "<f8"),
    ]
)


@dataclass(frozen=True, slots=True)
class Layout:
    """What is the same for all devices of a kind: shape (rows, columns), outputs and regions.

    ``outputs`` are names with their sections of the assembled image, ``regions`` the scopes that
    CANDIDATE and REACH number.
    """

    shape: tuple[int, int]
    outputs: tuple[tuple[str, Section], ...]
    regions: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Candidates:
    """One device's CANDIDATE, REACH and SETTLED arrays; pixels of bad lines are left out."""

    layout: Layout
    pixels: NDArray[np.void]
    reaches: NDArray[np.void]
    settled: NDArray[np.void]


def outputs_at(
    layout: Layout, rows: NDArray[np.int32], columns: NDArray[np.int32]
) -> NDArray[np.int64]:
    """Number of the output that reads each pixel."""
    number = np.zeros(len(rows), np.int64)
    for place, (_, section) in enumerate(layout.outputs):
        inside = (rows >= section.row_start) & (rows < section.row_stop)
        inside &= (columns >= section.column_start) & (columns < section.column_stop)
        number[inside] = place
    return number
