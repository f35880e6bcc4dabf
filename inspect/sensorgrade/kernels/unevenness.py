"""Sums over an image less a smooth surface: rows, columns, blocks, and the scatter that is left.

Each row is taken in short loops over few arrays, which the compiler vectorises; only the pixels
past the limit are looked at one by one.
"""

import numpy as np
from numba import njit

RUN = 64  # rows that a single-precision sum of columns may run over

# Sums may be taken in any order. Such loops are always inlined: a copy of their own, compiled
# otherwise than the one within the caller, would be called by some runs and not by others.
LOOSE = {"reassoc", "contract", "nnan", "nsz"}


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def surface_row(coefficients, row_basis, column_basis, row, surface):  # type: ignore[no-untyped-def]
    """One row of the surface sum C[a, b] p_a(row) q_b(column), into ``surface`` (N,) float32.

    coefficients : (T, T) float64; row_basis : (T, M), column_basis : (T, N) float32
    """
    terms = coefficients.shape[0]
    surface[:] = np.float32(0.0)
    for b in range(terms):
        factor = 0.0
        for a in range(terms):
            factor += coefficients[a, b] * row_basis[a, row]
        single = np.float32(factor)
        line = column_basis[b]
        for x in range(surface.shape[0]):
            surface[x] += single * line[x]


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def departures(image, base, surface, relative, value):  # type: ignore[no-untyped-def]
    """``image - base - surface``, over the surface when ``relative``, into ``value`` (N,)."""
    if relative:
        for x in range(value.shape[0]):
            value[x] = (image[x] - base[x] - surface[x]) / surface[x]
    else:
        for x in range(value.shape[0]):
            value[x] = image[x] - base[x] - surface[x]


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def less_lines(value, offset, column_offset):  # type: ignore[no-untyped-def]
    """Subtract the row's offset and the columns' from ``value``."""
    for x in range(value.shape[0]):
        value[x] -= offset + column_offset[x]


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def temporal_row(variance, count, other_variance, other_count, out):  # type: ignore[no-untyped-def]
    """Temporal variance of the difference of two means, into ``out``; a count of 0 is as 1."""
    for x in range(out.shape[0]):
        first = variance[x] / np.float32(max(count[x], np.uint16(1)))
        out[x] = first + other_variance[x] / np.float32(max(other_count[x], np.uint16(1)))


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def over_squares(out, surface):  # type: ignore[no-untyped-def]
    """Divide ``out`` by the square of ``surface``."""
    for x in range(out.shape[0]):
        out[x] /= surface[x] * surface[x]


@njit(nogil=True, cache=True)
def outside(value, limit):  # type: ignore[no-untyped-def]
    """How many lie past ``limit`` (what is not a number does)."""
    found = 0
    for x in range(value.shape[0]):
        found += not abs(value[x]) <= limit
    return found


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def total(value, start, stop):  # type: ignore[no-untyped-def]
    """Sum of a run."""
    found = np.float32(0.0)
    for x in range(start, stop):
        found += value[x]
    return found


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def powers(value):  # type: ignore[no-untyped-def]
    """Sums of squares and of fourth powers."""
    second = np.float32(0.0)
    fourth = np.float32(0.0)
    for x in range(value.shape[0]):
        square = value[x] * value[x]
        second += square
        fourth += square * square
    return second, fourth


@njit(nogil=True, cache=True, forceinline=True, fastmath=LOOSE)
def add_to(sums, value):  # type: ignore[no-untyped-def]
    """Add ``value`` to ``sums``."""
    for x in range(value.shape[0]):
        sums[x] += value[x]


@njit(nogil=True, cache=True)
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

    image : (M, N) float32; base : likewise, or (0, 0) for none; the departure is
        image - base - surface, over the surface when ``relative``
    row_sum, row_count (M,); column_sum, column_count (N,); block_sum, block_count (By, Bx), blocks
        of ``block`` x ``block`` pixels : float64, zero on entry, written
    """
    rows, columns = image.shape
    surface = np.empty(columns, np.float32)
    value = np.empty(columns, np.float32)
    run = np.zeros(columns, np.float32)
    nothing = np.zeros(columns, np.float32)
    limit = np.float32(limit)
    for y in range(rows):
        surface_row(coefficients, row_basis, column_basis, y, surface)
        departures(image[y], base[y] if base.size > 0 else nothing, surface, relative, value)
        if outside(value, limit) > 0:
            for x in range(columns):
                if not abs(value[x]) <= limit:
                    value[x] = 0.0
                    row_count[y] -= 1
                    column_count[x] -= 1
                    block_count[y // block, x // block] -= 1
        add_to(run, value)
        row_count[y] += columns
        for index in range(block_sum.shape[1]):
            stop = min(columns, (index + 1) * block)
            found = total(value, index * block, stop)
            block_sum[y // block, index] += found
            block_count[y // block, index] += stop - index * block
            row_sum[y] += found
        if y % RUN == RUN - 1 or y == rows - 1:
            for x in range(columns):
                column_sum[x] += run[x]
            run[:] = 0.0
    column_count += rows


@njit(nogil=True, cache=True)
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
    value = np.empty(columns, np.float32)
    noise = np.empty(columns, np.float32)
    nothing = np.zeros(columns, np.float32)
    one = np.ones(columns, np.uint16)
    limit = np.float32(limit)
    kept = np.zeros(4)
    everything = np.zeros(3)
    for y in range(rows):
        surface_row(coefficients, row_basis, column_basis, y, surface)
        departures(image[y], base[y] if base.size > 0 else nothing, surface, relative, value)
        less_lines(value, row_offset[y], column_offset)
        if base.size > 0:
            temporal_row(image_variance[y], image_count[y], base_variance[y], base_count[y], noise)
        else:
            temporal_row(image_variance[y], image_count[y], nothing, one, noise)
        if relative:
            over_squares(noise, surface)
        second, fourth = powers(value)
        everything[0] += second
        everything[1] += fourth
        everything[2] += total(noise, 0, columns)
        if outside(value, limit) > 0:
            for x in range(columns):
                if not abs(value[x]) <= limit:
                    value[x] = 0.0
                    noise[x] = 0.0
                    kept[0] -= 1
            second, fourth = powers(value)
        kept[0] += columns
        kept[1] += second
        kept[2] += fourth
        kept[3] += total(noise, 0, columns)
    return np.concatenate((kept, everything))
