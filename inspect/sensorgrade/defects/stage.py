"""The form that every finder of defects has: inputs and options in, candidates out."""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.candidates import CANDIDATE, REACH
from sensorgrade.measure.stage import Inputs

# A pixel that may be past a threshold. ``value`` is its departure in ``unit``, ``significance``
# that over its uncertainty, ``probability`` the chance that the true value is past the threshold,
# ``shared`` how much that changes with one standard uncertainty of what all pixels of an output
# share.
POINT = np.dtype(
    [
        ("kind", "U24"),
        ("row", "i4"),
        ("column", "i4"),
        ("value", "f8"),
        ("uncertainty", "f8"),
        ("unit", "U24"),
        ("significance", "f8"),
        ("probability", "f8"),
        ("shared", "f8"),
    ]
)

NOT_ASKED = ""  # the sentence for a count that the options did not ask for


@dataclass(frozen=True, slots=True)
class CountName:
    """A countable kind: the name limits use, the kinds of defect it counts, and its meaning."""

    name: str
    kinds: tuple[str, ...]
    meaning: str


@dataclass(frozen=True, slots=True)
class Line:
    """A bad column or row, or part of one, half-open in the assembled image.

    ``kind`` such as ``"dim column"``; ``value`` is the mean departure along it in ``unit``.
    """

    kind: str
    row_start: int
    row_stop: int
    column_start: int
    column_stop: int
    value: float
    uncertainty: float
    unit: str
    significance: float
    probability: float


@dataclass(frozen=True, slots=True)
class Found:
    """What one finder found; ``points`` is a POINT array.

    ``candidates`` and ``reaches`` are CANDIDATE and REACH arrays: what the finder keeps for other
    thresholds. ``lacking`` maps a count's name to the sentence saying why it could not be made.
    """

    points: NDArray[np.void]
    lines: tuple[Line, ...]
    lacking: dict[str, str]
    candidates: NDArray[np.void] = field(default_factory=lambda: np.empty(0, CANDIDATE))
    reaches: NDArray[np.void] = field(default_factory=lambda: np.empty(0, REACH))


@dataclass(frozen=True, slots=True)
class DefectStage:
    """One line of the table of finders. ``find(inputs, options)`` looks at the reduced frames."""

    name: str
    options: type
    find: Callable[[Inputs, Any], Found]
    counts: tuple[CountName, ...]
