"""A defect as it is recorded, and all defects of a device."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.candidates import Candidates
from sensorgrade.measurement import Finding

# One row of the defect table. Positions are in the assembled image, 0-based and half-open; the
# FITS position is x = column + 1, y = row + 1. (row, column) is the pixel with the largest
# departure. ``significance`` is value over uncertainty past the background, ``probability``
# the chance that the true value is past the threshold.
DEFECT = np.dtype(
    [
        ("kind", "U24"),
        ("row", "i4"),
        ("column", "i4"),
        ("row_start", "i4"),
        ("row_stop", "i4"),
        ("column_start", "i4"),
        ("column_stop", "i4"),
        ("pixels", "i4"),
        ("value", "f8"),
        ("uncertainty", "f8"),
        ("unit", "U24"),
        ("significance", "f8"),
        ("probability", "f8"),
        ("output", "U32"),
        ("zone", "U32"),
    ]
)


@dataclass(frozen=True, slots=True)
class DefectCount:
    """How many defects of one kind: as found, and as a sum of probabilities with its doubt.

    ``kind`` is a countable name as limits use it: hot_pixels, dead_pixels, bad_columns, clusters…
    ``scope`` is "device", "output left", "zone centre"…
    """

    kind: str
    scope: str
    found: int
    expected: float
    standard_uncertainty: float


@dataclass(frozen=True, slots=True)
class Defects:
    """``table`` is a DEFECT array, ``mask`` (M, N) uint16 with the bits of defects/bits.py.

    ``candidates`` are what the counts can be made from again at other thresholds, None where
    nothing was kept for that.
    """

    table: NDArray[np.void]
    mask: NDArray[np.uint16]
    counts: tuple[DefectCount, ...]
    findings: tuple[Finding, ...]
    candidates: Candidates | None = None
