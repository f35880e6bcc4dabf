"""Pixels that lie outside smoothly varying limits, and sums along lines."""

import numpy as np
from numba import njit

BIN = 8  # pixels of a line that are summed together


@njit(nogil=True, cache=True)
def stretch(grid_row, columns, out):
    """Interpolate one row of block values (Bx,) linearly to ``columns`` pixels, into ``out``.

    Values hold at block centres; beyond the outer centres the last slope goes on.
    """
    blocks = grid_row.shape[0]
    if blocks == 1:
        out[:columns] = grid_row[0]
        return
    for j in range(columns):
        at = (j + 0.5) * blocks / columns - 0.5
        k = min(max(int(np.floor(at)), 0), blocks - 2)
        out[j] = grid_row[k] + np.float32(at - k) * (grid_row[k + 1] - grid_row[k])


@njit(nogil=True, cache=True)
def grid_rows(row, rows, blocks):
    """(Index of the grid row above, weight of the one below) for a pixel row."""
    if blocks == 1:
        return 0, np.float32(0.0)
    at = (row + 0.5) * blocks / rows - 0.5
    k = min(max(int(np.floor(at)), 0), blocks - 2)
    return k, np.float32(at - k)


@njit(nogil=True, cache=True)
def outside_limits(
    image, top, left, row_step, column_step, rows, columns, lower, upper, found_rows, found_columns
):
    """List the pixels of a region that are below ``lower`` or above ``upper``.

    image : (M, N) float32, C order; the region as in `block_quantiles`. lower, upper : (By, Bx)
    float32 block values, interpolated linearly. Positions are written to ``found_rows`` and
    ``found_columns`` (int32) as far as they have room. Returns how many there are.
    """
    blocks = lower.shape[0]
    lows = np.empty((2, columns), np.float32)
    highs = np.empty((2, columns), np.float32)
    held = -1
    count = 0
    room = found_rows.shape[0]
    for i in range(rows):
        k, weight = grid_rows(i, rows, blocks)
        if k != held:
            below = min(k + 1, blocks - 1)
            stretch(lower[k], columns, lows[0])
            stretch(lower[below], columns, lows[1])
            stretch(upper[k], columns, highs[0])
            stretch(upper[below], columns, highs[1])
            held = k
        line = image[top + i * row_step]
        hit = 0
        for j in range(columns):
            value = line[left + j * column_step]
            low = lows[0, j] + weight * (lows[1, j] - lows[0, j])
            high = highs[0, j] + weight * (highs[1, j] - highs[0, j])
            hit += (value < low) | (value > high)
        if hit == 0:
            continue
        for j in range(columns):
            value = line[left + j * column_step]
            low = lows[0, j] + weight * (lows[1, j] - lows[0, j])
            high = highs[0, j] + weight * (highs[1, j] - highs[0, j])
            if (value < low) | (value > high):
                if count < room:
                    found_rows[count] = top + i * row_step
                    found_columns[count] = left + j * column_step
                count += 1
    return count


@njit(nogil=True, cache=True)
def line_sums(
    image, top, left, row_step, column_step, rows, columns, middle, scale, clip, down, across
):
    """Sum the clipped, scaled departures over runs of `BIN` pixels, along columns and rows.

    A departure is (value - middle) * scale, held to ±``clip``; a pixel that is not finite counts
    as zero. middle, scale : (By, Bx) float32 block values, interpolated linearly.
    down : (ceil(rows / BIN), columns) float32 and across : (rows, ceil(columns / BIN)), added to.
    """
    blocks = middle.shape[0]
    middles = np.empty((2, columns), np.float32)
    scales = np.empty((2, columns), np.float32)
    departures = np.empty(columns, np.float32)
    held = -1
    clip = np.float32(clip)
    for i in range(rows):
        k, weight = grid_rows(i, rows, blocks)
        if k != held:
            below = min(k + 1, blocks - 1)
            stretch(middle[k], columns, middles[0])
            stretch(middle[below], columns, middles[1])
            stretch(scale[k], columns, scales[0])
            stretch(scale[below], columns, scales[1])
            held = k
        line = image[top + i * row_step]
        total = down[i // BIN]
        for j in range(columns):
            centre = middles[0, j] + weight * (middles[1, j] - middles[0, j])
            factor = scales[0, j] + weight * (scales[1, j] - scales[0, j])
            departure = (line[left + j * column_step] - centre) * factor
            departure = min(max(departure, -clip), clip)
            departure = departure if departure == departure else np.float32(0.0)
            departures[j] = departure
            total[j] += departure
        sums = across[i]
        for b in range(across.shape[1]):
            part = np.float32(0.0)
            for j in range(b * BIN, min((b + 1) * BIN, columns)):
                part += departures[j]
            sums[b] += part
