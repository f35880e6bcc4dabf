"""A frame as the audit looks at it: a few rows, boiled down to numbers that compare."""

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.decode import read_rows
from sensorgrade.frames.frame import Frame
from sensorgrade.frames.geometry import Geometry, Output

SAMPLES = 65536  # per frame, about
MOST_ROWS = 32
LEAST_ROWS = 8
BLOCKS = 8  # along rows and along columns
CLIP = 5.0  # deviations beyond which a sample does not count for noise and pattern
STEPS = 20.0  # of a stored pattern in one standard deviation


@dataclass(frozen=True, slots=True)
class Sketch:
    """What a sample of rows says of one frame; rows lie alike in all frames of the device.

    ``stack`` tells frames taken alike.
    ``level`` [DN] is the median of ``blocks``, the medians of (8, 8) parts of the assembled
    image; both less the overscan where there is one. ``overscan`` [DN] is its mean, NaN without.
    ``noise`` [DN] is the scatter from pixel to pixel, temporal and fixed. ``lowest`` and
    ``highest`` are raw samples [DN], ``full`` the share of samples at or past the last code,
    ``finite`` whether all samples are numbers. ``pattern`` (K, N) int8 is the image less its
    neighbours, in units of noise / `STEPS`; its rows lie symmetrically, so that a frame that was
    turned over has its pattern on the same places. ``counts`` are those of the codes from
    ``lowest`` on, None for floats.
    """

    frame: Frame
    stack: int
    level: float
    blocks: NDArray[np.float64]
    overscan: float
    noise: float
    lowest: float
    highest: float
    full: float
    finite: bool
    digest: bytes
    pattern: NDArray[np.int8]
    counts: NDArray[np.int64] | None

    @property
    def constant(self) -> bool:
        """Whether every sample looked at is the same number."""
        return self.lowest == self.highest


def sketch(frame: Frame, geometry: Geometry, *, stack: int, last_code: int, mosaic: bool) -> Sketch:
    """Look at some rows of a frame whose planes have no coding; ``stack`` is its stack's number.

    Raises
    ------
    FrameError
        The file is damaged or shorter than it was.
    OSError
        The file cannot be opened.
    """
    rows = symmetric_rows(geometry.shape)
    image = np.zeros((len(rows), geometry.shape[1]), np.float32)
    digest = hashlib.blake2b(digest_size=16)
    overscans = []
    lowest, highest, full, finite = np.inf, -np.inf, 0, True
    integers: list[NDArray[Any]] | None = []
    read: dict[tuple[str, bytes], NDArray[np.uint16] | NDArray[np.float32]] = {}
    for output in geometry.outputs:
        inside = (rows >= output.place.row_start) & (rows < output.place.row_stop)
        raw_rows = rows[inside] - output.place.row_start + output.image.row_start
        key = output.extension, raw_rows.tobytes()
        if key not in read:
            read[key] = read_rows(frame.planes[output.extension], raw_rows.tolist())
            digest.update(np.ascontiguousarray(read[key]).data)
        samples = read[key][:, output.image.column_start : output.image.column_stop]
        if samples.size == 0:
            continue
        finite = finite and bool(np.isfinite(samples).all())
        lowest, highest = min(lowest, float(samples.min())), max(highest, float(samples.max()))
        full += int(np.count_nonzero(samples >= last_code))
        if integers is not None and samples.dtype == np.uint16:
            integers.append(samples.reshape(-1))
        else:
            integers = None
        level = _overscan(read[key], output)
        overscans.append(level)
        columns = slice(output.place.column_start, output.place.column_stop)
        image[inside, columns] = samples - np.float32(0.0 if np.isnan(level) else level)
    blocks = _blocks(image)
    pattern, noise = _pattern(image, step=2 if mosaic else 1)
    return Sketch(
        frame=frame,
        stack=stack,
        level=float(np.median(blocks)),
        blocks=blocks,
        overscan=float(np.mean(overscans)) if overscans else np.nan,
        noise=noise,
        lowest=lowest,
        highest=highest,
        full=full / image.size,
        finite=finite,
        digest=digest.digest(),
        pattern=pattern,
        counts=(np.bincount(np.concatenate(integers) - np.uint16(lowest)) if integers else None),
    )


def symmetric_rows(shape: tuple[int, int]) -> NDArray[np.int64]:
    """Rows of the assembled image in pairs, the same when counted from the other end."""
    rows, columns = shape
    count = int(np.clip(SAMPLES // columns, LEAST_ROWS, MOST_ROWS))
    if rows <= count:
        return np.arange(rows)
    firsts = np.linspace(0, rows // 2 - 1, max(1, count // 4)).astype(np.int64)
    half = np.concatenate([firsts, firsts + 1])
    return np.unique(np.concatenate([half, rows - 1 - half]))


def _overscan(samples: NDArray[np.uint16] | NDArray[np.float32], output: Output) -> float:
    """Mean of the later half of the overscan columns [DN], NaN without."""
    section = output.overscan
    if section is None:
        return float("nan")
    middle = (section.column_start + section.column_stop) // 2
    late = (
        slice(middle, section.column_stop)
        if "left" in output.corner
        else slice(section.column_start, max(middle, section.column_start + 1))
    )
    return float(samples[:, late].mean(dtype=np.float64))


def _blocks(image: NDArray[np.float32]) -> NDArray[np.float64]:
    """Medians of 8 x 8 parts, fewer where the image is smaller; what is left over is not used."""
    down, across = (min(BLOCKS, size) for size in image.shape)
    height, width = image.shape[0] // down, image.shape[1] // across
    parts = image[: down * height, : across * width].reshape(down, height, across, width)
    flat = parts.swapaxes(1, 2).reshape(down * across, height * width)
    middle = flat.shape[1] // 2
    ordered = np.partition(flat, (max(middle - 1, 0), middle), axis=1)
    low = ordered[:, middle if flat.shape[1] % 2 else middle - 1]
    return ((low.astype(np.float64) + ordered[:, middle]) / 2).reshape(down, across)


def _pattern(image: NDArray[np.float32], *, step: int) -> tuple[NDArray[np.int8], float]:
    """Image less the mean of its neighbours of the same colour, and the noise of one pixel.

    The variance of that difference is 3/2 of a pixel's; outliers are clipped.
    """
    if image.shape[1] <= 2 * step:
        return np.zeros(image.shape, np.int8), 0.0
    with np.errstate(invalid="ignore"):
        difference = np.zeros_like(image)
        neighbours = (image[:, : -2 * step] + image[:, 2 * step :]) / 2
        difference[:, step:-step] = image[:, step:-step] - neighbours
        squares = np.nan_to_num(difference * difference)
        mean = float(squares.mean())
        for _ in range(3):
            kept = squares <= CLIP * CLIP * mean
            mean = float(squares[kept].mean()) if kept.any() else mean
        if mean == 0.0:
            return np.zeros(image.shape, np.int8), 0.0
        scaled = np.clip(np.nan_to_num(difference) / np.sqrt(mean), -CLIP, CLIP)
    return np.rint(scaled * STEPS).astype(np.int8), float(np.sqrt(mean / 1.5))
