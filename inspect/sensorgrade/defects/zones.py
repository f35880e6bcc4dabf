"""Which named zones a pixel lies in."""

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from sensorgrade.recipe.model import Zone


def in_zone(
    zone: Zone, rows: NDArray[np.int32], columns: NDArray[np.int32], shape: tuple[int, int]
) -> NDArray[np.bool_]:
    """True for the pixels (0-based) whose centre lies in the zone of an image of ``shape``."""
    inside = np.zeros(len(rows), np.bool_)
    if zone.rectangle is not None:
        box = zone.rectangle
        inside |= (
            (rows >= box.row_start)
            & (rows < box.row_stop)
            & (columns >= box.column_start)
            & (columns < box.column_stop)
        )
    x, y = columns + 1.0, rows + 1.0
    if zone.circle is not None:
        cx, cy, radius = zone.circle
        inside |= np.hypot(x - cx, y - cy) <= radius
    if zone.ring is not None:
        cx, cy, inner, outer = zone.ring
        distance = np.hypot(x - cx, y - cy)
        inside |= (distance >= inner) & (distance <= outer)
    if zone.border is not None:
        edge = np.minimum(
            np.minimum(rows, shape[0] - 1 - rows), np.minimum(columns, shape[1] - 1 - columns)
        )
        inside |= edge < zone.border
    return inside


def zone_names(
    zones: Mapping[str, Zone],
    rows: NDArray[np.int32],
    columns: NDArray[np.int32],
    shape: tuple[int, int],
) -> NDArray[np.str_]:
    """The first zone of the recipe that holds each pixel, or an empty text."""
    names = np.zeros(len(rows), "U32")
    for name, zone in reversed(list(zones.items())):
        names[in_zone(zone, rows, columns, shape)] = name
    return names
