"""Spatial non-uniformity of an image: slow shading, row, column and pixel parts."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Region
from sensorgrade.kernels.unevenness import line_sums, scatter_sums
from sensorgrade.masters.reduced import StackImage

DEGREE = 6  # of the polynomial surface that is taken as shading
BLOCK = 32  # largest side of the blocks whose means the surface is fitted to
REJECT = 5.0  # pixels farther off, in deviations of their own scatter, are defects
SAMPLES = 1 << 17  # pixels from which the first surface and the rejection limits are taken
MAD_TO_SD = 1.4826022


@dataclass(frozen=True, slots=True)
class Part:
    """A variance (in the image's unit squared, or relative), its standard error and freedom."""

    variance: float
    standard_error: float
    degrees: int


@dataclass(frozen=True, slots=True)
class SpatialNoise:
    """Spatial variance of an image, temporal noise taken out, defects left out, parted.

    ``total`` is row + column + pixel; ``all_pixels`` the same with no pixel left out.
    ``shading`` is the variance of the smooth surface over the region and ``mean`` its mean.
    ``surface`` (By, Bx) is the surface at the centres of coarse blocks. ``rejected`` is the number
    of pixels left out, ``frames`` that of frames joined in the image.
    """

    mean: float
    row: Part
    column: Part
    pixel: Part
    total: Part
    all_pixels: Part
    shading: Part
    surface: NDArray[np.float64]
    row_profile: NDArray[np.float64]
    column_profile: NDArray[np.float64]
    rejected: int
    frames: int


def spatial_noise(
    image: StackImage, base: StackImage | None, region: Region, *, relative: bool
) -> SpatialNoise:
    """Parts of the spatial variance of ``image - base`` in a region.

    Parameters
    ----------
    image : StackImage, of shape (M, N) [DN]
    base : StackImage or None
        Subtracted pixel by pixel; its own temporal noise is counted.
    relative : bool
        Departures over the local level of the surface (without unit) instead of in DN.

    Notes
    -----
    A polynomial surface of degree 6 is the shading. What is left is parted by the analysis of
    variance of a two-way table without replication: with P = mean square of what rows and columns
    do not explain, row variance = R - P/N, column variance = C - P/M, pixel variance = P less the
    mean temporal variance over the number of frames. The degrees of freedom that the surface
    takes from rows, columns and pixels are counted, so the parts are unbiased for small images
    too. Standard errors are those of a sample from a population of such pixels, rows, columns;
    for pixels the fourth moment is used, since tails of dark current are not Gaussian.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021 (row, column and pixel parts; from memory).
    H. Scheffé, The Analysis of Variance, Wiley 1959, chapter 4.
    """
    cut = region.rows, region.columns
    values = np.ascontiguousarray(image.mean[cut])
    variance = np.ascontiguousarray(image.variance[cut])
    count = np.ascontiguousarray(image.count[cut])
    if base is None:
        base_values = base_variance = np.empty((0, 0), np.float32)
        base_count = np.empty((0, 0), np.uint16)
    else:
        base_values = np.ascontiguousarray(base.mean[cut])
        base_variance = np.ascontiguousarray(base.variance[cut])
        base_count = np.ascontiguousarray(base.count[cut])
    rows, columns = values.shape
    row_basis, column_basis = _basis(rows), _basis(columns)
    single = row_basis.astype(np.float32), column_basis.astype(np.float32)
    surface, spread = _first_surface(values, base_values, row_basis, column_basis, relative)
    block = int(np.clip(min(rows, columns) // 16, 1, BLOCK))
    row_sum, row_count = np.zeros(rows), np.zeros(rows)
    column_sum, column_count = np.zeros(columns), np.zeros(columns)
    blocks = -(-rows // block), -(-columns // block)
    block_sum, block_count = np.zeros(blocks), np.zeros(blocks)
    line_sums(
        values, base_values, surface, *single, relative, REJECT * spread, block,
        row_sum, row_count, column_sum, column_count, block_sum, block_count,
    )  # fmt: skip
    # The surface through the means of all pixels kept takes out what the sampled one left.
    correction = _fitted(
        block_sum / np.maximum(block_count, 1), block_count, row_basis, column_basis, block
    )
    row_mean = row_sum / np.maximum(row_count, 1) - row_basis.T @ (
        correction @ column_basis.mean(axis=1)
    )
    column_mean = column_sum / np.maximum(column_count, 1) - column_basis.T @ (
        correction.T @ row_basis.mean(axis=1)
    )
    # Departures relative to the corrected surface: to first order the correction is additive.
    surface = surface + correction * (float(surface[0, 0]) if relative else 1.0)
    row_mean -= row_mean.mean()
    column_mean -= column_mean.mean()
    limit = REJECT * _scatter_about_lines(
        values, base_values, surface, row_basis, column_basis, row_mean, column_mean, relative
    )
    kept, square, fourth, noise, all_square, all_fourth, all_noise = scatter_sums(
        values, base_values, surface, *single, relative, limit,
        row_mean.astype(np.float32), column_mean.astype(np.float32),
        variance, count, base_variance, base_count,
    )  # fmt: skip
    frames = image.frames
    size = rows * columns
    terms = (DEGREE + 1) * (DEGREE + 2) // 2
    freedom = (rows - 1) * (columns - 1) - (terms - 1 - 2 * DEGREE)
    share = freedom / size
    square, fourth, noise = square / (kept * share), fourth / kept, noise / kept
    temporal_error = noise * sqrt(2 / (size * max(frames - 1, 1)))
    pixel = _pixel_part(square, fourth, noise, temporal_error, freedom)
    row = _line_part(row_mean, DEGREE, square, columns)
    column = _line_part(column_mean, DEGREE, square, rows)
    everything = _pixel_part(
        all_square / freedom, all_fourth / size, all_noise / size, temporal_error, freedom
    )
    weights = surface.copy()
    mean = float(row_basis.mean(axis=1) @ surface @ column_basis.mean(axis=1))
    weights[0, 0] = 0.0
    # The basis is orthogonal with unit mean square, so variances add.
    shading = float((weights**2).sum()) / (mean**2 if relative else 1.0)
    shading_error = 2 * sqrt(shading * square / size) + square * terms / size
    return SpatialNoise(
        mean=mean,
        row=row,
        column=column,
        pixel=pixel,
        total=_sum(row, column, pixel),
        all_pixels=_sum(row, column, everything),
        shading=Part(shading, shading_error, terms - 1),
        surface=row_basis[:, block // 2 :: block].T
        @ surface
        @ column_basis[:, block // 2 :: block],
        row_profile=row_mean,
        column_profile=column_mean,
        rejected=int(size - kept),
        frames=frames,
    )


def _basis(length: int) -> NDArray[np.float64]:
    """Polynomials (DEGREE + 1, length), orthogonal over the pixels, each with mean square 1."""
    x = np.linspace(-1.0, 1.0, length)
    q, r = np.linalg.qr(np.polynomial.legendre.legvander(x, DEGREE))
    basis: NDArray[np.float64] = (q * np.sign(np.diag(r))).T * sqrt(length)
    return basis


def _triangle() -> NDArray[np.bool_]:
    """Which terms a, b of the surface are of total degree DEGREE or less."""
    degree = np.add.outer(np.arange(DEGREE + 1), np.arange(DEGREE + 1))
    inside: NDArray[np.bool_] = degree <= DEGREE
    return inside


def _fitted(
    means: NDArray[np.float64],
    weights: NDArray[np.float64],
    row_basis: NDArray[np.float64],
    column_basis: NDArray[np.float64],
    block: int,
) -> NDArray[np.float64]:
    """Coefficients (T, T) of the surface through block means, by weighted least squares."""
    rows = np.add.reduceat(row_basis, np.arange(0, row_basis.shape[1], block), axis=1)
    columns = np.add.reduceat(column_basis, np.arange(0, column_basis.shape[1], block), axis=1)
    heights = np.add.reduceat(np.ones(row_basis.shape[1]), np.arange(0, row_basis.shape[1], block))
    widths = np.add.reduceat(
        np.ones(column_basis.shape[1]), np.arange(0, column_basis.shape[1], block)
    )
    first, second = np.nonzero(_triangle())
    design = ((rows / heights)[first][:, :, None] * (columns / widths)[second][:, None, :]).reshape(
        len(first), -1
    )
    weight = weights.ravel()
    found = np.linalg.solve((design * weight) @ design.T, (design * weight) @ means.ravel())
    coefficients = np.zeros((DEGREE + 1, DEGREE + 1))
    coefficients[first, second] = found
    return coefficients


def _sampled(
    image: NDArray[np.float32], base: NDArray[np.float32]
) -> tuple[NDArray[np.float64], int]:
    """Every k-th pixel of every k-th row of ``image - base``, and k."""
    step = max(1, round(sqrt(image.size / SAMPLES)))
    sample = image[::step, ::step].astype(np.float64)
    if base.size:
        sample -= base[::step, ::step]
    return sample, step


def _first_surface(
    image: NDArray[np.float32],
    base: NDArray[np.float32],
    row_basis: NDArray[np.float64],
    column_basis: NDArray[np.float64],
    relative: bool,
) -> tuple[NDArray[np.float64], float]:
    """A surface through block medians of a sample of the pixels, and the spread about it."""
    sample, step = _sampled(image, base)
    rows, columns = sample.shape
    block = int(np.clip(min(rows, columns) // 16, 1, 16))
    tall, wide = rows // block, columns // block
    cut = sample[: tall * block, : wide * block].reshape(tall, block, wide, block)
    medians = np.median(cut.transpose(0, 2, 1, 3).reshape(tall, wide, -1), axis=-1)
    thin_rows = row_basis[:, ::step][:, : tall * block]
    thin_columns = column_basis[:, ::step][:, : wide * block]
    surface = _fitted(medians, np.ones_like(medians), thin_rows, thin_columns, block)
    level = row_basis[:, ::step].T @ surface @ column_basis[:, ::step]
    departure = (sample - level) / level if relative else sample - level
    return surface, _spread(departure)


def _spread(values: NDArray[np.float64]) -> float:
    """Standard deviation by the median absolute deviation; plain where most values coincide."""
    middle = MAD_TO_SD * float(np.median(np.abs(values)))
    return middle or float(values.std()) or 1.0


def _scatter_about_lines(
    image: NDArray[np.float32],
    base: NDArray[np.float32],
    surface: NDArray[np.float64],
    row_basis: NDArray[np.float64],
    column_basis: NDArray[np.float64],
    row_mean: NDArray[np.float64],
    column_mean: NDArray[np.float64],
    relative: bool,
) -> float:
    """Robust spread of a sample of pixels about surface, rows and columns."""
    sample, step = _sampled(image, base)
    level = row_basis[:, ::step].T @ surface @ column_basis[:, ::step]
    departure = (sample - level) / level if relative else sample - level
    departure -= row_mean[::step, None] + column_mean[None, ::step]
    return _spread(departure)


def _pixel_part(
    square: float, fourth: float, noise: float, noise_error: float, degrees: int
) -> Part:
    """Pixel variance with the temporal one taken out."""
    scatter = sqrt(max(fourth - square**2, 0.0) / degrees)
    return Part(square - noise, sqrt(scatter**2 + noise_error**2), degrees)


def _line_part(profile: NDArray[np.float64], terms: int, square: float, length: int) -> Part:
    """Variance of row or column means beyond what pixels of that scatter give them."""
    degrees = len(profile) - 1 - terms
    found = float(profile @ profile) / degrees
    return Part(found - square / length, found * sqrt(2 / degrees), degrees)


def _sum(row: Part, column: Part, pixel: Part) -> Part:
    return Part(
        row.variance + column.variance + pixel.variance,
        sqrt(row.standard_error**2 + column.standard_error**2 + pixel.standard_error**2),
        pixel.degrees,
    )
