"""Every number of a lot by name and place: one value for each device."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.lot.result import DeviceResult


@dataclass(frozen=True, slots=True)
class Place:
    """Values (D,) of one quantity at one place; NaN for devices where it was not measured."""

    scope: str
    values: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class LotQuantity:
    """One measurement or count of a lot, with each place it was measured at.

    ``counted`` says that it is a number of defects, as found.
    """

    name: str
    unit: str
    counted: bool
    places: tuple[Place, ...]


def lot_quantities(results: Sequence[DeviceResult]) -> tuple[LotQuantity, ...]:
    """Measurements in the order of the stages, then counts; by name, then by place.

    A name whose unit differs between devices, as it may after a change of program, is kept apart
    unit by unit.
    """
    found: dict[tuple[str, str, bool], dict[str, NDArray[np.float64]]] = {}

    def keep(name: str, unit: str, counted: bool, scope: str, row: int, value: float) -> None:
        places = found.setdefault((name, unit, counted), {})
        if scope not in places:
            places[scope] = np.full(len(results), np.nan)
        places[scope][row] = value

    for row, result in enumerate(results):
        for one in result.measurements:
            keep(one.name, one.unit, False, one.scope, row, one.value)
        for count in result.defects:
            keep(count.kind, "", True, count.scope, row, count.found)
    return tuple(
        LotQuantity(
            name, unit, counted, tuple(Place(scope, places[scope]) for scope in sorted(places))
        )
        for (name, unit, counted), places in sorted(found.items(), key=lambda one: one[0][2])
    )
