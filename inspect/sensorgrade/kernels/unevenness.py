"""Sums over an image less a smooth surface: rows, columns, blocks, and the scatter that is left."""

import numpy as np
from numba import njit


@njit(nogil=True, cache=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def surface_row(coefficients, row_basis, column_basis, row, surface):  # type: ignore[no-untyped-def]
    """One row of the surface sum C[a, b] p_a(row) q_b(column), into ``surface`` (N,) float32.

    coefficients : (T, T) float64; row_basis : (T, M), column_basis : (T, N) float32
    """
    terms = coefficients.shape[0]
    for x in range(surface.shape[0]):
        surface[x] = 0.0
    for b in range(terms):
        factor = 0.0
        for a in range(terms):
            factor += coefficients[a, b] * row_basis[a, row]
        single = np.float32(factor)
        line = column_basis[b]
        for x in range(surface.shape[0]):
            surface[x] += single * line[x]


@njit(nogil=True, cache=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def line_sums(
    image,
    base,
    coefficients,
    row_basis,
    column_basis,
    relative,
    limit,
    block,
    row_sum,
    row_count,
    column_sum,
    column_count,
    block_sum,
    block_count,
):  # type: ignore[no-untyped-def]
    """Sums of the departures from a surface that are not past ``limit``.

    image, base : (M, N) float32; the departure is image - base - surface, over the surface when
        ``relative``
    row_sum, row_count (M,); column_sum, column_count (N,); block_sum, block_count (By, Bx), blocks
        of ``block`` x ``block`` pixels : float64, zero on entry, written
    """
    rows, columns = image.shape
    surface = np.empty(columns, np.float32)
    value = np.empty(columns, np.float32)
    kept = np.empty(columns, np.float32)
    column_part = np.zeros(columns, np.float32)
    column_kept = np.zeros(columns, np.float32)
    limit = np.float32(limit)
    zero = np.float32(0.0)
    one = np.float32(1.0)
    for y in range(rows):
        surface_row(coefficients, row_basis, column_basis, y, surface)
        for x in range(columns):
            departure = image[y, x] - base[y, x] - surface[x]
            if relative:
                departure /= surface[x]
            inside = abs(departure) <= limit
            value[x] = departure if inside else zero
            kept[x] = one if inside else zero
            column_part[x] += value[x]
            column_kept[x] += kept[x]
        for index in range(block_sum.shape[1]):
            found = zero
            count = zero
            for x in range(index * block, min(columns, (index + 1) * block)):
                found += value[x]
                count += kept[x]
            block_sum[y // block, index] += found
            block_count[y // block, index] += count
            row_sum[y] += found
            row_count[y] += count
        if y % 64 == 63 or y == rows - 1:  # single precision holds a short run of rows only
            for x in range(columns):
                column_sum[x] += column_part[x]
                column_count[x] += column_kept[x]
                column_part[x] = zero
                column_kept[x] = zero


@njit(nogil=True, cache=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def scatter_sums(
    image,
    base,
    coefficients,
    row_basis,
    column_basis,
    relative,
    limit,
    row_offset,
    column_offset,
    image_variance,
    image_count,
    base_variance,
    base_count,
):  # type: ignore[no-untyped-def]
    """Scatter about surface, row offsets and column offsets, and the temporal noise in it.

    Arguments as in `line_sums`; row_offset (M,), column_offset (N,) float32 in the departure's
    unit; image_variance, base_variance (M, N) float32 of one sample, image_count, base_count
    (M, N) uint16 samples joined

    Returns (7,) float64: number kept, their sums of squares and of fourth powers and of temporal
    variance; the same three sums of all.
    """
    rows, columns = image.shape
    surface = np.empty(columns, np.float32)
    limit2 = np.float32(limit * limit)
    zero = np.float32(0.0)
    one = np.float32(1.0)
    sums = np.zeros(7)
    for y in range(rows):
        surface_row(coefficients, row_basis, column_basis, y, surface)
        offset = row_offset[y]
        n = zero
        s2 = zero
        s4 = zero
        t = zero
        a2 = zero
        a4 = zero
        at = zero
        for x in range(columns):
            departure = image[y, x] - base[y, x] - surface[x]
            temporal = image_variance[y, x] / np.float32(max(image_count[y, x], 1))
            temporal += base_variance[y, x] / np.float32(max(base_count[y, x], 1))
            if relative:
                inverse = one / surface[x]
                departure *= inverse
                temporal *= inverse * inverse
            departure -= offset + column_offset[x]
            squared = departure * departure
            a2 += squared
            a4 += squared * squared
            at += temporal
            inside = one if squared <= limit2 else zero
            n += inside
            s2 += inside * squared
            s4 += inside * squared * squared
            t += inside * temporal
        for index, part in enumerate((n, s2, s4, t, a2, a4, at)):
            sums[index] += part
    return sums
