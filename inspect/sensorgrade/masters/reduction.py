"""The single pass over a device's raw frames: everything later works on what it leaves."""

import os
import queue
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainccinv

from sensorgrade.frames.frame import DeviceFrames, Stack
from sensorgrade.frames.geometry import Geometry, Output
from sensorgrade.masters.bands import (
    Band,
    BandSuspects,
    ImageArrays,
    PairArrays,
    Work,
    do_band,
    new_pair_arrays,
)
from sensorgrade.masters.reduced import (
    NoiseModel,
    PairTiles,
    Reduced,
    StackImage,
    Suspects,
    Trails,
)
from sensorgrade.masters.source import OpenStack, open_stack, opened_files, read_band
from sensorgrade.masters.survey import Survey, noise_models, survey
from sensorgrade.masters.trails import edge_columns, edge_trails
from sensorgrade.masters.x_ray_events import x_ray_events
from sensorgrade.recipe.model import Sensor

BAND_BYTES = 1 << 22  # of raw samples, so that a band stays in the cache while it is worked on
SUSPECT_BYTES = 1 << 25  # of suspects' samples that are kept for one stack
SCATTER_CHANCE = 1e-4  # of a quiet pixel scattering more than the limit
IMAGED = ("bias", "dark", "flat", "pump")


def reduce_frames(
    device: DeviceFrames, geometry: Geometry, sensor: Sensor, *, threads: int | None = None
) -> Reduced:
    """Read every frame of a device once and reduce it.

    Bands of rows are read and reduced by ``threads`` threads (all cores by default), each
    reading its next band while the others compute. Results do not depend on their number.

    Raises
    ------
    FrameError
        A file vanished, ends too early or cannot be read.
    """
    stacks = [stack for stack in device.stacks if stack.kind in IMAGED]
    frames = tuple(
        frame
        for stack in device.stacks
        if stack.kind in (*IMAGED, "x-ray")
        for frame in stack.frames
    )
    with opened_files(frames) as files:
        opened = [
            {key: open_stack(stack, key, files) for key in geometry.raw_shapes} for stack in stacks
        ]
        surveys = [
            survey(stack, sources, geometry) for stack, sources in zip(stacks, opened, strict=True)
        ]
        noise = noise_models(surveys, geometry)
        images = _stacks_for_images(surveys, noise, geometry)
        workers = threads or os.cpu_count() or 1
        done = [
            _reduce_stack(sources, looked, geometry, sensor, noise, workers, image=index in images)
            for index, (sources, looked) in enumerate(zip(opened, surveys, strict=True))
        ]
        image_of = [image for image, _, _ in done if image is not None]
        bias = next((image for image in image_of if image.stack.kind == "bias"), None)
        x_rays = [
            events
            for stack in device.stacks
            if stack.kind == "x-ray"
            for events in x_ray_events(
                {key: open_stack(stack, key, files) for key in geometry.raw_shapes},
                geometry,
                bias,
                noise,
            )
        ]
    return Reduced(
        geometry=geometry,
        bias=bias,
        darks=tuple(image for image in image_of if image.stack.kind == "dark"),
        flats=tuple(image for image in image_of if image.stack.kind == "flat"),
        pairs=tuple(tiles for _, pairs, _ in done for tiles in pairs),
        noise=noise,
        levels=tuple(looked.levels for looked in surveys),
        trails=tuple(trail for _, _, trails in done for trail in trails),
        pumped=tuple(image for image in image_of if image.stack.kind == "pump"),
        x_rays=tuple(x_rays),
    )


def _stacks_for_images(
    surveys: list[Survey], noise: dict[str, NoiseModel], geometry: Geometry
) -> set[int]:
    """Which stacks become images: all bias, dark and pump stacks, and the flats worth it.

    Flats of three or more frames; where there is none, those nearest a fifth, half and four
    fifths of the brightest level.
    """
    chosen = {i for i, s in enumerate(surveys) if s.levels.stack.kind != "flat"}
    flats = [i for i, s in enumerate(surveys) if s.levels.stack.kind == "flat"]
    large = [i for i in flats if len(surveys[i].levels.stack.frames) >= 3]
    if large or not flats:
        return chosen | set(large)
    dark = noise[geometry.regions[0].scope].bias_level
    light = {i: surveys[i].level(0) - dark for i in flats}
    brightest = max(light.values())
    for share in (0.2, 0.5, 0.8):
        chosen.add(min(flats, key=lambda i: (abs(light[i] - share * brightest), i)))
    return chosen


def _reduce_stack(
    sources: dict[str, OpenStack],
    looked: Survey,
    geometry: Geometry,
    sensor: Sensor,
    noise: dict[str, NoiseModel],
    workers: int,
    *,
    image: bool,
) -> tuple[StackImage | None, list[PairTiles], list[Trails]]:
    """One stack, band by band."""
    stack = looked.levels.stack
    frames = len(stack.frames)
    arrays = None
    if image:
        arrays = ImageArrays(
            mean=np.empty(geometry.shape, np.float32),
            variance=np.empty(geometry.shape, np.float32),
            count=np.empty(geometry.shape, np.uint16),
        )
    paired = frames // 2 if stack.kind in ("bias", "flat") else 0
    pairs = tuple(
        new_pair_arrays(region, paired, lines=stack.kind == "bias")
        for region in geometry.regions
        if paired
    )
    profiles = {
        output.name: (
            columns := edge_columns(output),
            np.empty((output.image.shape[0], len(columns)), np.float32),
        )
        for output in geometry.outputs
        if stack.kind in ("bias", "flat") and (output.overscan or output.parallel_overscan)
    }
    scale = {output.name: _scale(looked, output, noise, geometry) for output in geometry.outputs}
    scatter = 1.0
    if frames > 1:
        scatter = 2 * float(gammainccinv((frames - 1) / 2, SCATTER_CHANCE)) / (frames - 1)
    found: list[BandSuspects] = []
    for key, source in sources.items():
        work = Work(
            source=source,
            geometry=geometry,
            noise=noise,
            scale=scale,
            scatter=scatter,
            last_code=_last_code(source, sensor),
            image=arrays,
            pairs=pairs,
            profiles=profiles,
        )
        tallest = max((part.tile[0] for part in pairs), default=0)
        bands = list(_bands(source, key, geometry, tile_rows=tallest))
        found.extend(_do_bands(work, bands, workers))
    return (
        None if arrays is None else _stack_image(stack, arrays, found),
        [_pair_tiles(stack, part) for part in pairs],
        [
            trails
            for output in geometry.outputs
            if output.name in profiles
            and (trails := edge_trails(stack, output, profiles[output.name][1], sources))
            is not None
        ],
    )


def _do_bands(work: Work, bands: list[Band], workers: int) -> list[BandSuspects]:
    """All bands of one extension, each read and reduced in one of the workers' buffers."""
    tallest = max(band.stop - band.start for band in bands)
    shape = (len(work.source.planes), tallest, work.source.columns)
    buffers: queue.SimpleQueue[NDArray[np.uint8]] = queue.SimpleQueue()
    count = min(workers, len(bands))
    for _ in range(count):
        buffers.put(np.empty(int(np.prod(shape)) * work.source.dtype.itemsize, np.uint8))

    def one(band: Band) -> list[BandSuspects]:
        buffer = buffers.get()
        rows = band.stop - band.start
        size = shape[0] * rows * shape[2] * work.source.dtype.itemsize
        raw = buffer[:size].view(work.source.dtype).reshape(shape[0], rows, shape[2])
        read_band(work.source, band.start, band.stop, raw)
        found = do_band(work, band, raw)
        buffers.put(buffer)
        return found

    if count == 1:
        return [suspects for band in bands for suspects in one(band)]
    with ThreadPoolExecutor(count) as pool:
        return [suspects for found in pool.map(one, bands) for suspects in found]


def _bands(
    source: OpenStack, extension: str, geometry: Geometry, *, tile_rows: int
) -> Iterable[Band]:
    """Bands of rows for each group of outputs that lie in the same rows of the raw frame.

    No band parts a tile; ``tile_rows`` is 0 for stacks without.
    """
    groups: dict[tuple[int, int], list[Output]] = {}
    for output in geometry.outputs:
        if output.extension == extension:
            rows = (output.image.row_start, output.image.row_stop)
            groups.setdefault(rows, []).append(output)
    step = max(region.rows.step or 1 for region in geometry.regions)
    unit = max(1, tile_rows * step)
    line = len(source.planes) * source.columns * source.dtype.itemsize
    height = max(1, BAND_BYTES // (line * unit)) * unit
    for (start, stop), outputs in groups.items():
        for top in range(start, stop, height):
            yield Band(top, min(top + height, stop), tuple(outputs))


def _scale(
    looked: Survey, output: Output, noise: dict[str, NoiseModel], geometry: Geometry
) -> NDArray[np.float32]:
    """Factors that bring each flat of a stack to the stack's mean light; 1 for other kinds."""
    frames = len(looked.levels.stack.frames)
    if looked.levels.stack.kind != "flat":
        return np.ones(frames, np.float32)
    own = [i for i, region in enumerate(geometry.regions) if region.output == output.name]
    dark = np.array([noise[geometry.regions[i].scope].bias_level for i in own])
    light = (looked.levels.mean[:, own] - dark).mean(axis=1)
    if light.min() <= 0:
        return np.ones(frames, np.float32)
    scale: NDArray[np.float32] = (light.mean() / light).astype(np.float32)
    return scale


def _last_code(source: OpenStack, sensor: Sensor) -> float:
    """The converter's end code [DN]; infinite for floating-point samples of unknown range."""
    if sensor.adc_bits is not None:
        return float(2**sensor.adc_bits - 1)
    return 65535.0 if source.dtype == np.uint16 else np.inf


def _stack_image(stack: Stack, arrays: ImageArrays, found: list[BandSuspects]) -> StackImage:
    """The reduced stack with its suspects in row-major order."""
    frames = len(stack.frames)
    rows = np.concatenate([part.rows for part in found] or [np.empty(0, np.int32)])
    columns = np.concatenate([part.columns for part in found] or [np.empty(0, np.int32)])
    samples = np.concatenate(
        [part.samples for part in found] or [np.empty((0, frames), np.float32)]
    )
    order = np.lexsort((columns, rows))
    most = SUSPECT_BYTES // (4 * frames)
    kept = order[:most]
    return StackImage(
        stack=stack,
        mean=arrays.mean,
        variance=arrays.variance,
        count=arrays.count,
        events=sum(part.events for part in found),
        suspects=Suspects(
            rows=rows[kept],
            columns=columns[kept],
            samples=samples[kept],
            complete=len(order) <= most,
        ),
    )


def _pair_tiles(stack: Stack, arrays: PairArrays) -> PairTiles:
    """Sums to moments: means less overscan, (co)variances with their degrees of freedom."""
    count, sum_a, sum_b, *sums = np.moveaxis(arrays.moments, -1, 0)
    square_a, square_b, product, right, down, rights, downs = sums
    freedom = np.maximum(count - 1, 1)
    kept = np.maximum(count, 1)
    offset_a = arrays.offsets[:, :, None, 0]
    offset_b = arrays.offsets[:, :, None, 1]
    row_variance = column_variance = np.zeros(len(count))
    if arrays.row_sums is not None and arrays.column_sums is not None:
        rows, columns = arrays.row_sums.shape[1], arrays.column_sums.shape[2]
        down_tiles, across_tiles = count.shape[1:]
        row_means = arrays.row_sums.astype(np.float64) / columns
        column_means = arrays.column_sums.sum(axis=1, dtype=np.float64) / rows
        # A tile's mean is taken out of its rows and columns: one degree of freedom for each tile.
        row_variance = (row_means**2).sum(axis=1) / max(rows - down_tiles, 1)
        column_variance = (column_means**2).sum(axis=1) / max(columns - across_tiles, 1)
    return PairTiles(
        stack=stack,
        region=arrays.region,
        count=count.copy(),  # a view would keep all moments
        mean_a=sum_a / kept - offset_a,
        mean_b=sum_b / kept - offset_b,
        var_a=square_a / freedom,
        var_b=square_b / freedom,
        cov_ab=product / freedom,
        cov_right=right / np.maximum(rights, 1),
        cov_down=down / np.maximum(downs, 1),
        saturated=arrays.saturated,
        row_variance=row_variance,
        column_variance=column_variance,
    )
