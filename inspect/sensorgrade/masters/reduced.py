"""What is left of the raw frames after they were read once: everything later works on this."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Geometry, Region

TILE = 32  # rows and columns of a photon-transfer tile, within a region
LARGE = 1 << 22  # pixels of a region that has tiles enough when each is four times as large
FLAT_TILE = 16, 256  # rows and columns of those: few rows, as whole tiles are read at once


@dataclass(frozen=True, slots=True)
class Suspects:
    """Samples of the pixels whose scatter or extremes the noise model does not explain.

    They are what telegraph and noisy pixels are judged by. ``rows`` and ``columns`` (S,) int32
    are positions in the assembled image, ``samples`` (S, L) float32 [DN] the corrected samples in
    order of time. ``complete`` is False when there were more than the limit that is kept.
    """

    rows: NDArray[np.int32]
    columns: NDArray[np.int32]
    samples: NDArray[np.float32]
    complete: bool


@dataclass(frozen=True, slots=True)
class StackImage:
    """A stack reduced pixel by pixel, in the assembled image's coordinates.

    Samples are raw DN less their row's overscan (where the output has one), else raw DN. Flats
    are scaled about the bias level to their mean light before they are joined, so that lamp
    drift is not noise. ``mean`` (M, N) float32 [DN] over the samples kept; ``variance`` (M, N)
    float32 [DN²] of one sample (ddof = 1); ``count`` (M, N) uint16 samples kept. ``events``
    is the number of samples left out as particle events. ``suspects`` as above.
    """

    stack: Stack
    mean: NDArray[np.float32]
    variance: NDArray[np.float32]
    count: NDArray[np.uint16]
    events: int
    suspects: Suspects

    @property
    def frames(self) -> int:
        """L, the number of frames joined."""
        return len(self.stack.frames)


def tile_shape(rows: int, columns: int) -> tuple[int, int]:
    """Rows and columns of a photon-transfer tile in a region of that size."""
    return (TILE, TILE) if rows * columns < LARGE else FLAT_TILE


@dataclass(frozen=True, slots=True)
class PairTiles:
    """Second moments of successive frame pairs, tile by tile, for one stack and one region.

    Pair p is frames 2p and 2p+1 of the stack, named A and B. Tiles are parts of the region
    (`tile_shape`, less at its edges). All arrays are float64 of shape (P, Ty, Tx); sums run
    over ``count`` pixels kept (differences past 5 sigma of their tile are left out of all sums).

    mean_a, mean_b      mean of raw DN less the row's overscan (else raw DN)
    var_a, var_b, cov_ab    sample (co)variances (ddof = 1) of A and of B over the tile [DN²], of
                            the raw samples: subtracting overscan row by row would add its noise
    cov_right, cov_down     covariance of the difference A - B with its right and lower
                            neighbour of the same region [DN²]
    saturated           samples of A or B at or above the converter's last code
    ``row_variance`` (P,), ``column_variance`` (P,): variance [DN²] of the region's row means and
    column means of A - B after each tile's mean is taken out (the degrees of freedom so lost are
    counted); pixel noise, 2 sigma²/columns and 2 sigma²/rows, is still in it.
    """

    stack: Stack
    region: Region
    count: NDArray[np.float64]
    mean_a: NDArray[np.float64]
    mean_b: NDArray[np.float64]
    var_a: NDArray[np.float64]
    var_b: NDArray[np.float64]
    cov_ab: NDArray[np.float64]
    cov_right: NDArray[np.float64]
    cov_down: NDArray[np.float64]
    saturated: NDArray[np.float64]
    row_variance: NDArray[np.float64]
    column_variance: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NoiseModel:
    """Expected temporal variance of one sample in one region: read + slope * signal [DN²].

    ``read`` [DN²], ``slope`` [DN] (0 when no light was there to measure it), ``bias_level`` [DN]
    (0 for an output with overscan). Rough, a few per cent: used to tell events from noise only.
    """

    read: float
    slope: float
    bias_level: float


@dataclass(frozen=True, slots=True)
class FrameLevels:
    """Level of each frame from a sample of its rows, for drift and for the audit.

    ``mean`` (L, R) float64 [DN], frames by regions, overscan-corrected; ``overscan`` (L, R) mean
    overscan level [DN] or NaN without one; ``sampled`` (R,) samples of a frame that its level is
    the mean of. ``rows`` holds, for bias stacks, the sampled rows of each region, (L, S, N)
    float32 [raw DN]; it is empty for others.
    """

    stack: Stack
    mean: NDArray[np.float64]
    overscan: NDArray[np.float64]
    sampled: NDArray[np.int64]
    rows: tuple[NDArray[np.float32], ...] = ()


@dataclass(frozen=True, slots=True)
class Trails:
    """Mean edge profiles of one bias or flat stack and output, for charge transfer [DN].

    ``serial`` (K + V,) runs along the readout direction across the last K image columns and the
    V overscan columns, averaged over rows; ``parallel`` likewise over rows; each is empty without
    its overscan. Bias (mean of the far half of the overscan) is subtracted.
    ``serial_uncertainty``, ``parallel_uncertainty`` are standard errors from the scatter.
    """

    stack: Stack
    output: str
    image_pixels: int
    serial: NDArray[np.float64]
    serial_uncertainty: NDArray[np.float64]
    parallel: NDArray[np.float64]
    parallel_uncertainty: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class XRayEvents:
    """What stands out in the X-ray frames of one stack and output: E events.

    ``rows`` and ``columns`` (E,) int32 count from the pixel that is read first, ``frame`` (E,)
    from the stack's first; ``islands`` (E, 3, 3) float32 [DN] are the samples about each event in
    the same order, less everything that is there without X-rays. ``noise`` [DN] of one sample.
    """

    stack: Stack
    output: str
    frame: NDArray[np.int32]
    rows: NDArray[np.int32]
    columns: NDArray[np.int32]
    islands: NDArray[np.float32]
    noise: float


@dataclass(frozen=True, slots=True)
class Reduced:
    """The whole set of one device, reduced.

    ``bias`` is None when the set has none. ``darks`` and ``flats`` hold the stacks that make
    images: every dark stack; the flat stacks of three or more frames, or, when there is none,
    the flat stack that is best for a master. ``pairs`` holds bias and flat stacks of two or more
    frames, stack after stack, region after region. ``noise`` maps a region's scope to its model.
    ``pumped`` holds every pumped stack, ``x_rays`` the events of every X-ray stack and output.
    """

    geometry: Geometry
    bias: StackImage | None
    darks: tuple[StackImage, ...]
    flats: tuple[StackImage, ...]
    pairs: tuple[PairTiles, ...]
    noise: dict[str, NoiseModel]
    levels: tuple[FrameLevels, ...]
    trails: tuple[Trails, ...]
    pumped: tuple[StackImage, ...] = ()
    x_rays: tuple[XRayEvents, ...] = ()
