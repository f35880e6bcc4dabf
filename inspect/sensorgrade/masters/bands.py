"""One band of one stack: read once, then everything that is wanted of it is computed."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Geometry, Output, Region
from sensorgrade.kernels.flagged import settle_flagged
from sensorgrade.kernels.overscan import overscan_means, profile_means
from sensorgrade.kernels.pairs import MOMENTS, line_sums, pair_tiles
from sensorgrade.kernels.stack import reduce_band
from sensorgrade.masters.reduced import NoiseModel, tile_shape
from sensorgrade.masters.source import OpenStack, Samples
from sensorgrade.masters.survey import used_overscan

EVENT_SIGMAS = 5.0
CAUTION = 0.9  # pixels this close to being events are looked at one by one


@dataclass(slots=True)
class ImageArrays:
    """What `reduce` fills for a stack that becomes an image; (M, N) each, assembled."""

    mean: NDArray[np.float32]
    variance: NDArray[np.float32]
    count: NDArray[np.uint16]


@dataclass(slots=True)
class PairArrays:
    """What is filled for one region: moments (P, Ty, Tx, MOMENTS) and saturated (P, Ty, Tx).

    ``row_sums`` (P, M) and ``column_sums`` (P, Ty, N) float32 when line noise is wanted.
    """

    region: Region
    tile: tuple[int, int]
    moments: NDArray[np.float64]
    saturated: NDArray[np.float64]
    offsets: NDArray[np.float64]
    row_sums: NDArray[np.float32] | None
    column_sums: NDArray[np.float32] | None


@dataclass(frozen=True, slots=True)
class Band:
    """Raw rows ``start`` to ``stop`` of the outputs that share them."""

    start: int
    stop: int
    outputs: tuple[Output, ...]


@dataclass(frozen=True, slots=True)
class Work:
    """What is wanted of one stack, and the arrays to put it in; bands write disjoint parts.

    ``scale`` maps an output's name to (L,) float32 factors about its bias level; ``profiles``
    maps it to (raw columns, (M, K) float32 array) for edge profiles.
    """

    source: OpenStack
    geometry: Geometry
    noise: dict[str, NoiseModel]
    scale: dict[str, NDArray[np.float32]]
    scatter: float
    last_code: float
    image: ImageArrays | None
    pairs: tuple[PairArrays, ...]
    profiles: dict[str, tuple[NDArray[np.int64], NDArray[np.float32]]]


@dataclass(frozen=True, slots=True)
class BandSuspects:
    """Suspects and events of one band; positions assembled."""

    rows: NDArray[np.int32]
    columns: NDArray[np.int32]
    samples: NDArray[np.float32]
    events: int


def do_band(work: Work, band: Band, raw: Samples) -> list[BandSuspects]:
    """Everything that ``work`` wants of raw samples (L, R, W) of one band."""
    suspects = []
    for output in band.outputs:
        offset = _offsets(work, output, raw)
        if work.image is not None:
            suspects.extend(_reduce(work, work.image, output, band, raw, offset))
        for arrays in work.pairs:
            if arrays.region.output == output.name:
                _pairs(work, arrays, output, band, raw, offset)
        if output.name in work.profiles:
            columns, profile = work.profiles[output.name]
            first = band.start - output.image.row_start
            profile_means(
                raw,
                work.source.swap,
                work.source.flip,
                columns,
                offset,
                profile[first : first + raw.shape[1]],
            )
    return suspects


def _offsets(work: Work, output: Output, raw: Samples) -> NDArray[np.float32]:
    """Overscan of each row (L, R) [DN], 0 for an output without."""
    offset = np.zeros(raw.shape[:2], np.float32)
    section = used_overscan(output)
    if section is not None:
        overscan_means(
            raw,
            work.source.swap,
            work.source.flip,
            section.column_start,
            section.column_stop,
            offset,
        )
    return offset


def _reduce(
    work: Work,
    image: ImageArrays,
    output: Output,
    band: Band,
    raw: Samples,
    offset: NDArray[np.float32],
) -> list[BandSuspects]:
    """Mean, variance and count of the output's part of the band, colour plane by colour plane."""
    regions = [region for region in work.geometry.regions if region.output == output.name]
    # Colour planes share one pass; their noise models differ too little to matter for events.
    noise = max((work.noise[region.scope] for region in regions), key=lambda model: model.slope)
    top = output.place.row_start + band.start - output.image.row_start
    rows = slice(top, top + raw.shape[1])
    columns = slice(output.place.column_start, output.place.column_stop)
    mean, variance = image.mean[rows, columns], image.variance[rows, columns]
    count = image.count[rows, columns]
    frames = len(raw)
    count[:] = frames
    flagged = np.empty(mean.shape, np.uint8)
    model = (noise.read, noise.slope, noise.bias_level)
    common = (raw, work.source.swap, work.source.flip, output.image.column_start, offset)
    placed = (*common, work.scale[output.name], noise.bias_level, *model)
    reach = CAUTION * EVENT_SIGMAS * np.sqrt((frames - 1) / frames)
    found = reduce_band(*placed, reach, work.scatter, mean, variance, flagged)
    if frames == 1:
        variance[:] = noise.read + noise.slope * np.maximum(mean - noise.bias_level, 0)
        return []
    if not found:
        return []
    places = np.empty((found, 2), np.int32)
    samples = np.empty((found, frames), np.float32)
    kept, events = settle_flagged(
        *placed, EVENT_SIGMAS, work.scatter, flagged, mean, variance, count, places, samples
    )
    return [
        BandSuspects(
            rows=places[:kept, 0] + np.int32(top),
            columns=places[:kept, 1] + np.int32(output.place.column_start),
            samples=samples[:kept].copy(),
            events=events,
        )
    ]


def _pairs(
    work: Work,
    arrays: PairArrays,
    output: Output,
    band: Band,
    raw: Samples,
    offset: NDArray[np.float32],
) -> None:
    """Tiles of one region, for every pair of the stack, that lie in this band."""
    region = arrays.region
    step = region.rows.step or 1
    shift = region.rows.start - output.place.row_start  # 0 or 1, the colour plane's first row
    column = output.image.column_start + region.columns.start - output.place.column_start
    columns = len(range(region.columns.start, region.columns.stop, step))
    first = band.start - output.image.row_start
    count = len(range(shift, raw.shape[1], step))
    tile_rows, tile_columns = arrays.tile
    for top in range(0, count, tile_rows):
        rows = min(tile_rows, count - top)
        tile = (first // step + top) // tile_rows
        row = shift + top * step
        wanted = arrays.row_sums is not None
        lines = np.zeros((rows, columns) if wanted else (0, 0), np.float32)
        row_sum, column_sum = np.empty(rows, np.float32), np.empty(columns, np.float32)
        for pair in range(arrays.moments.shape[0]):
            a, b = 2 * pair, 2 * pair + 1
            pair_tiles(
                raw[a],
                raw[b],
                work.source.swap[a : b + 1],
                work.source.flip[a : b + 1],
                row,
                rows,
                column,
                columns,
                step,
                tile_columns,
                work.last_code,
                arrays.moments[pair, tile],
                arrays.saturated[pair, tile],
                lines,
            )
            for side, frame in enumerate((a, b)):
                used = offset[frame, row : row + rows * step : step]
                arrays.offsets[pair, tile, side] = used.mean(dtype=np.float64)
            if arrays.row_sums is not None and arrays.column_sums is not None:
                line_sums(lines, row_sum, column_sum)
                at = tile * tile_rows
                arrays.row_sums[pair, at : at + rows] = row_sum
                arrays.column_sums[pair, tile] = column_sum


def new_pair_arrays(region: Region, pairs: int, *, lines: bool) -> PairArrays:
    """Empty arrays for one region of a stack with ``pairs`` pairs."""
    rows = len(range(region.rows.start, region.rows.stop, region.rows.step or 1))
    columns = len(range(region.columns.start, region.columns.stop, region.columns.step or 1))
    tile = tile_shape(rows, columns)
    down, across = -(-rows // tile[0]), -(-columns // tile[1])
    return PairArrays(
        region=region,
        tile=tile,
        moments=np.zeros((pairs, down, across, MOMENTS)),
        saturated=np.zeros((pairs, down, across)),
        offsets=np.zeros((pairs, down, 2)),
        row_sums=np.zeros((pairs, rows), np.float32) if lines else None,
        column_sums=np.zeros((pairs, down, columns), np.float32) if lines else None,
    )
