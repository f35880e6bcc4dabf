"""Local level and scatter of an image, robust against its defects, and departures from them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Region
from sensorgrade.kernels.block_quantiles import block_quantiles
from sensorgrade.kernels.outside_limits import outside_limits

BLOCK = 32  # pixels; a block's median follows shading and is blind to a defect within it


@dataclass(frozen=True, slots=True)
class Lattice:
    """A region's pixels within the assembled image."""

    top: int
    left: int
    row_step: int
    column_step: int
    rows: int
    columns: int

    @property
    def arguments(self) -> tuple[int, int, int, int, int, int]:
        """As the kernels take it."""
        return self.top, self.left, self.row_step, self.column_step, self.rows, self.columns


def lattice(region: Region) -> Lattice:
    """The region as start, step and number of rows and columns."""
    row_step, column_step = region.rows.step or 1, region.columns.step or 1
    return Lattice(
        top=region.rows.start,
        left=region.columns.start,
        row_step=row_step,
        column_step=column_step,
        rows=len(range(region.rows.start, region.rows.stop, row_step)),
        columns=len(range(region.columns.start, region.columns.stop, column_step)),
    )


@dataclass(frozen=True, slots=True)
class Background:
    """Median and robust scatter of blocks, (By, Bx) float32, interpolated between their centres."""

    place: Lattice
    middle: NDArray[np.float32]
    scatter: NDArray[np.float32]

    def at(
        self, rows: NDArray[np.int32], columns: NDArray[np.int32], grid: NDArray[np.floating]
    ) -> NDArray[np.float64]:
        """``grid`` interpolated at pixels of the assembled image, as the kernels do it."""
        row = _between(
            (rows - self.place.top) / self.place.row_step, self.place.rows, grid.shape[0]
        )
        column = _between(
            (columns - self.place.left) / self.place.column_step, self.place.columns, grid.shape[1]
        )
        (k, below, v), (h, right, w) = row, column
        grid = grid.astype(np.float64)
        above = grid[k, h] + w * (grid[k, right] - grid[k, h])
        under = grid[below, h] + w * (grid[below, right] - grid[below, h])
        value: NDArray[np.float64] = above + v * (under - above)
        return value


def _between(
    place: NDArray[np.float64], size: int, blocks: int
) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.float64]]:
    """Block before, block after, weight of the latter."""
    if blocks == 1:
        zero = np.zeros(len(place), np.int64)
        return zero, zero, np.zeros(len(place))
    at = (place + 0.5) * blocks / size - 0.5
    before = np.clip(np.floor(at), 0, blocks - 2).astype(np.int64)
    return before, before + 1, at - before


def background(image: NDArray[np.float32], region: Region) -> Background:
    """Local median and scatter (half the 68 % range) of an image (M, N) within a region."""
    place = lattice(region)
    blocks = max(1, place.rows // BLOCK), max(1, place.columns // BLOCK)
    out = np.empty((3, *blocks), np.float32)
    block_quantiles(np.ascontiguousarray(image), *place.arguments, out)
    return Background(place, out[1], (out[2] - out[0]) / 2)


def outside(
    image: NDArray[np.float32],
    place: Lattice,
    lower: NDArray[np.float32],
    upper: NDArray[np.float32],
) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
    """Rows and columns of the pixels below ``lower`` or above ``upper`` (block grids)."""
    most = 1 << 16
    while (found := few_outside(image, place, lower, upper, most=most)) is None:
        most *= 16
    return found


def few_outside(
    image: NDArray[np.float32],
    place: Lattice,
    lower: NDArray[np.float32],
    upper: NDArray[np.float32],
    *,
    most: int,
) -> tuple[NDArray[np.int32], NDArray[np.int32]] | None:
    """As `outside`; None where they are more than ``most``."""
    rows, columns = np.empty(most, np.int32), np.empty(most, np.int32)
    found = outside_limits(image, *place.arguments, lower, upper, rows, columns)
    return None if found > most else (rows[:found], columns[:found])
