"""Which parts of a large sensor the page shows at full resolution: those around its defects."""

import numpy as np
from numpy.typing import NDArray

from sensorgrade.report.picture import TILE

MOST_TILES = 480  # 480 tiles of three masters take about 1.7 MB of the page
REACH = 8  # pixels about a defect that must be seen


def tiles_around(
    rows: NDArray[np.integer], columns: NDArray[np.integer], shape: tuple[int, int]
) -> NDArray[np.int64]:
    """Tiles (T, 2) that show the surroundings of defects at (rows, columns), in order of need.

    Defects come in order of weight; those past MOST_TILES are seen in the overview only.
    """
    chosen: dict[tuple[int, int], None] = {}
    last = (shape[0] - 1) // TILE, (shape[1] - 1) // TILE
    for row, column in zip(rows.tolist(), columns.tolist(), strict=True):
        for down in (-REACH, REACH):
            for right in (-REACH, REACH):
                place = (
                    min(max((row + down) // TILE, 0), last[0]),
                    min(max((column + right) // TILE, 0), last[1]),
                )
                chosen[place] = None
        if len(chosen) >= MOST_TILES:
            break
    return np.array(list(chosen)[:MOST_TILES], dtype=np.int64).reshape(-1, 2)
