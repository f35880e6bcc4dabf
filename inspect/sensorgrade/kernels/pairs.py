"""Second moments of a frame pair, tile by tile: what photon transfer is fitted to."""

import numpy as np
from numba import njit

from sensorgrade.kernels.extremes import larger
from sensorgrade.kernels.stack import native

MOMENTS = 10  # count, sums of A and B, squares of A and B, product, right, down, their counts
REJECT = 5.0  # differences farther from their tile's mean are events; costs 1.5e-5 of a variance


@njit(nogil=True, cache=True)
def load_tile(band, row, rows, base, width, step, swap, flip, tile):
    """Copy a tile as float32 less its first sample, row after row without gaps.

    Differences from the first sample keep single precision exact. Returns that sample.
    """
    pivot = np.float32(native(band[row, base], swap, flip))
    for y in range(rows):
        line = band[row + y * step, base:]
        at = y * width
        if step == 1:
            for x in range(width):
                tile[at + x] = np.float32(native(line[x], swap, flip)) - pivot
        else:
            for x in range(width):
                tile[at + x] = np.float32(native(line[x * step], swap, flip)) - pivot
    return pivot


@njit(nogil=True, cache=True, forceinline=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def sum_and_largest(values, n):
    """Sum and largest of the first ``n`` samples."""
    found = np.float32(0.0)
    largest = values[0]
    for i in range(n):
        found += values[i]
        largest = larger(largest, values[i])
    return found, largest


@njit(nogil=True, cache=True, forceinline=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def centred_moments(first, second, difference, n, width, mean_a, mean_b, out):
    """Moments of a tile from which nothing is left out.

    first, second : (n,) float32, rows of ``width`` samples; their means mean_a, mean_b
    difference : (n,) float32, written: first - second less its mean
    out : (5,) float64, written: centred sums of A², B², AB, and of the difference with its right
        and lower neighbour

    Returns (sum of difference², largest |difference|).
    """
    square_a = np.float32(0.0)
    square_b = np.float32(0.0)
    product = np.float32(0.0)
    squares = np.float32(0.0)
    largest = np.float32(0.0)
    for i in range(n):
        a = first[i] - mean_a
        b = second[i] - mean_b
        d = a - b
        difference[i] = d
        square_a += a * a
        square_b += b * b
        product += a * b
        squares += d * d
        largest = larger(largest, abs(d))
    right = np.float32(0.0)
    for i in range(n - 1):
        right += difference[i] * difference[i + 1]
    for i in range(width - 1, n - 1, width):  # from the end of one row to the start of the next
        right -= difference[i] * difference[i + 1]
    down = np.float32(0.0)
    for i in range(n - width):
        down += difference[i] * difference[i + width]
    out[0] = square_a
    out[1] = square_b
    out[2] = product
    out[3] = right
    out[4] = down
    return squares, largest


@njit(nogil=True, cache=True)
def at_or_above(values, n, code):
    """Number of samples at or above a code."""
    found = 0
    for i in range(n):
        found += values[i] >= code
    return found


@njit(nogil=True, cache=True)
def without_events(difference, keep, n):
    """Mark in ``keep`` the samples within `REJECT` deviations of the mean of those kept.

    Events inflate the scatter they are judged by, so it is repeated until none is left. Returns
    the mean of the difference over the samples kept.
    """
    keep[:n] = True
    middle = 0.0
    changed = True
    while changed:
        kept = 0
        middle = 0.0
        for i in range(n):
            if keep[i]:
                kept += 1
                middle += difference[i]
        if kept < 3:
            break
        middle /= kept
        spread = 0.0
        for i in range(n):
            if keep[i]:
                spread += (difference[i] - middle) ** 2
        reach = REJECT * np.sqrt(spread / (kept - 1))
        changed = False
        for i in range(n):
            if keep[i] and abs(difference[i] - middle) > reach:
                keep[i] = False
                changed = True
    return middle


@njit(nogil=True, cache=True)
def kept_moments(first, second, keep, n, width, out):
    """Moments of a tile from which some samples are left out, as one row of `pair_tiles`.

    The sums of A and B are of the samples as they stand in first and second.
    """
    out[:] = 0.0
    for i in range(n):
        if keep[i]:
            out[0] += 1
            out[1] += first[i]
            out[2] += second[i]
    mean_a = out[1] / out[0]
    mean_b = out[2] / out[0]
    for i in range(n):
        if not keep[i]:
            continue
        a = first[i] - mean_a
        b = second[i] - mean_b
        out[3] += a * a
        out[4] += b * b
        out[5] += a * b
        right = i + 1
        if right % width != 0 and keep[right]:
            out[6] += (a - b) * ((first[right] - mean_a) - (second[right] - mean_b))
            out[8] += 1
        down = i + width
        if down < n and keep[down]:
            out[7] += (a - b) * ((first[down] - mean_a) - (second[down] - mean_b))
            out[9] += 1


@njit(nogil=True, cache=True)
def pair_tiles(
    raw_a,
    raw_b,
    swap,
    flip,
    row,
    rows,
    column,
    columns,
    step,
    tile_columns,
    last_code,
    moments,
    saturated,
    lines,
):
    """Moments of one row of tiles for the pair A, B.

    raw_a, raw_b : (R, W) uint16 as stored; swap, flip : (2,) uint16 masks for `native`
    row, column : first raw row (of the band) and column of the region; ``rows``, ``columns`` how
        many of its pixels there are, ``step`` apart (2 for a colour plane)
    last_code : samples at or above it are counted as saturated
    moments : (Tx, MOMENTS) float64, written: number kept, sums of A and B (raw DN), centred sums
        of A², B², AB, of the difference with its right and lower neighbour, and the numbers of
        those neighbour pairs
    saturated : (Tx,) float64, written
    lines : (rows, columns) float32, written: A - B less its tile's mean, 0 where left out; or
        (0, 0) when line noise is not wanted
    """
    first = np.empty(rows * tile_columns, np.float32)
    second = np.empty(rows * tile_columns, np.float32)
    difference = np.empty(rows * tile_columns, np.float32)
    keep = np.empty(rows * tile_columns, np.bool_)
    sums = np.empty(5, np.float64)
    for index in range(moments.shape[0]):
        start = index * tile_columns
        width = min(tile_columns, columns - start)
        n = rows * width
        base = column + start * step
        pivot_a = load_tile(raw_a, row, rows, base, width, step, swap[0], flip[0], first)
        pivot_b = load_tile(raw_b, row, rows, base, width, step, swap[1], flip[1], second)
        sum_a, top_a = sum_and_largest(first, n)
        sum_b, top_b = sum_and_largest(second, n)
        saturated[index] = 0.0
        if top_a >= last_code - pivot_a or top_b >= last_code - pivot_b:
            saturated[index] += at_or_above(first, n, last_code - pivot_a)
            saturated[index] += at_or_above(second, n, last_code - pivot_b)
        squares, largest = centred_moments(
            first, second, difference, n, width,
            np.float32(sum_a / n), np.float32(sum_b / n), sums,
        )  # fmt: skip
        out = moments[index]
        if largest * largest <= REJECT * REJECT * squares / n:
            out[0] = n
            out[1] = sum_a
            out[2] = sum_b
            out[3:8] = sums
            out[8] = rows * (width - 1)
            out[9] = (rows - 1) * width
        else:
            middle = without_events(difference, keep, n)
            kept_moments(first, second, keep, n, width, out)
            for i in range(n):
                difference[i] = difference[i] - middle if keep[i] else 0.0
        out[1] += out[0] * pivot_a
        out[2] += out[0] * pivot_b
        if lines.size > 0:
            for y in range(rows):
                for x in range(width):
                    lines[y, start + x] = difference[y * width + x]


@njit(nogil=True, cache=True, fastmath={"reassoc", "contract", "nnan", "nsz"})
def line_sums(lines, row_sum, column_sum):
    """Sums of ``lines`` (R, N) along rows and columns, into (R,) and (N,); all float32."""
    rows, columns = lines.shape
    column_sum[:] = np.float32(0.0)
    for y in range(rows):
        found = np.float32(0.0)
        for x in range(columns):
            found += lines[y, x]
            column_sum[x] += lines[y, x]
        row_sum[y] = found
