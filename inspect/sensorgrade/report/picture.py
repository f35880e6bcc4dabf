"""A master frame made small enough for a page: overview, full-resolution tiles, and its values.

Values travel as 16-bit codes on a scale that is linear near the median and logarithmic far from
it, so that both the noise of a bias and a saturated pixel can be read under the pointer:

    value = median + spread * sinh((code - CENTRE) / STEPS),  spread = 128 sigma

Near the median one code is a tenth of sigma; far from it, 0.08 % of the value.
"""

import base64
import math
import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.png import png

OVERVIEW = 768  # most rows or columns of an overview; smaller sensors are shown whole
THUMBNAIL = 256  # the same for the image that stands where no script runs
TILE = 32  # rows and columns of a full-resolution tile
STEPS = 1280.0
SPREAD = 128.0  # in units of sigma
CENTRE = 32896  # middle of a high byte, so that noise leaves the high bytes alone
NO_VALUE = 0
SAMPLES = 200_000  # pixels that median, sigma and stretch are taken from


@dataclass(frozen=True, slots=True)
class Coding:
    """How values become codes; ``low`` and ``high`` are the stretch, shown as black and white."""

    median: float
    spread: float
    low: float
    high: float

    def codes(self, values: NDArray[np.floating]) -> NDArray[np.uint16]:
        """Codes of values of any shape; NO_VALUE where a value is not finite."""
        with np.errstate(invalid="ignore"):
            steps = np.arcsinh((values - np.float32(self.median)) / np.float32(self.spread))
            steps = np.rint(steps * np.float32(STEPS)) + CENTRE
        finite = np.isfinite(steps)
        return np.where(finite, np.clip(steps, 1, 65535), NO_VALUE).astype(np.uint16)

    def grey(self, values: NDArray[np.floating]) -> NDArray[np.uint8]:
        """Grey levels of values of any shape, black at ``low`` and below."""
        scaled = np.nan_to_num((values - self.low) / (self.high - self.low))
        levels: NDArray[np.uint8] = (np.clip(scaled, 0, 1) * 255).astype(np.uint8)
        return levels


@dataclass(frozen=True, slots=True)
class Picture:
    """A master for the page.

    ``block`` is the side in pixels of what one overview sample is the mean of (1: every pixel).
    ``overview`` and ``tiles`` are deflated, base64-coded codes, high bytes before low bytes;
    ``tiles`` follow one another in the order of the page's tile list. ``thumbnail`` is a PNG as
    data URL, first row at the bottom as FITS images are shown.
    """

    title: str
    unit: str
    rows: int
    columns: int
    block: int
    coding: Coding
    overview: str
    tiles: str
    thumbnail: str


def picture(
    values: NDArray[np.float32], *, title: str, unit: str, tiles: NDArray[np.int64]
) -> Picture:
    """A picture of ``values`` (M, N) with full-resolution ``tiles`` (T, 2), their rows, columns.

    Tiles are numbered from 0 along each axis; they are left out when the overview shows every
    pixel.
    """
    rows, columns = values.shape
    block = math.ceil(max(rows, columns) / OVERVIEW)
    small = values if block == 1 else block_mean(values, block)
    coded = coding(values)
    cut = np.empty(0, dtype=np.uint16)
    if block > 1 and len(tiles):
        cut = coded.codes(np.stack([_tile(values, *place) for place in tiles]))
    thumb = math.ceil(max(small.shape) / THUMBNAIL)
    grey = coded.grey(small if thumb == 1 else block_mean(small, thumb))
    return Picture(
        title=title,
        unit=unit,
        rows=rows,
        columns=columns,
        block=block,
        coding=coded,
        overview=packed(coded.codes(small)),
        tiles=packed(cut),
        thumbnail="data:image/png;base64," + base64.b64encode(png(grey[::-1])).decode(),
    )


def coding(values: NDArray[np.float32]) -> Coding:
    """Median, spread and stretch from a regular sample of the pixels.

    The stretch runs from the 0.5th to the 99.5th percentile, so that defects do not set it.
    """
    stride = max(1, math.isqrt(values.size // SAMPLES))
    # An odd stride that shares no factor with the powers of two of readout patterns
    stride += 1 - stride % 2
    sample = values[::stride, ::stride].ravel()
    sample = sample[np.isfinite(sample)].astype(np.float64)
    if not sample.size:
        return Coding(0.0, SPREAD, 0.0, 1.0)
    low, lower, median, upper, high = np.percentile(sample, (0.5, 15.87, 50, 84.13, 99.5))
    sigma = (upper - lower) / 2 or max(abs(median) * 1e-4, 1e-6)
    if high <= low:
        low, high = median - sigma, median + sigma
    return Coding(float(median), float(SPREAD * sigma), float(low), float(high))


def block_mean(values: NDArray[np.floating], block: int) -> NDArray[np.float32]:
    """Means over squares of ``block`` pixels; those at the far edges may be smaller."""
    rows, columns = values.shape
    row_starts, column_starts = np.arange(0, rows, block), np.arange(0, columns, block)
    sums = np.add.reduceat(np.add.reduceat(values, row_starts, axis=0), column_starts, axis=1)
    heights = np.diff(np.append(row_starts, rows))
    widths = np.diff(np.append(column_starts, columns))
    means: NDArray[np.float32] = (sums / np.outer(heights, widths)).astype(np.float32)
    return means


def _tile(values: NDArray[np.float32], tile_row: int, tile_column: int) -> NDArray[np.float32]:
    """One tile; what lies past the edge of the frame has no value."""
    part = values[
        tile_row * TILE : (tile_row + 1) * TILE, tile_column * TILE : (tile_column + 1) * TILE
    ]
    if part.shape == (TILE, TILE):
        return part
    whole = np.full((TILE, TILE), np.nan, dtype=np.float32)
    whole[: part.shape[0], : part.shape[1]] = part
    return whole


def packed(codes: NDArray[np.uint16]) -> str:
    """Codes as base64 text of a zlib stream (RFC 1950), high bytes first, then low bytes.

    Run-length matching only: noise has no longer repeats, and it is five times as fast.
    """
    flat = codes.ravel()
    planes = (flat >> 8).astype(np.uint8).tobytes() + flat.astype(np.uint8).tobytes()
    deflate = zlib.compressobj(1, zlib.DEFLATED, 15, 9, zlib.Z_RLE)
    return base64.b64encode(deflate.compress(planes) + deflate.flush()).decode()
