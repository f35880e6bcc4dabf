"""The stretch of a line that departs most, at every length."""

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def strongest_stretch(sums, lengths, best, start, stop):
    """For each line, the run of bins whose summed departure is largest over its noise.

    sums : (B, N) float32, departures summed over bins, in units where one bin has variance 1
    lengths : (K,) int64, lengths in bins that are tried
    best (N,) float32, start, stop (N,) int64 : written; ``best`` keeps the sign
    """
    bins, lines = sums.shape
    run = np.empty((bins + 1, lines), np.float64)
    run[0] = 0.0
    for b in range(bins):
        for line in range(lines):
            run[b + 1, line] = run[b, line] + sums[b, line]
    best[:] = 0.0
    start[:] = 0
    stop[:] = 0
    for length in lengths:
        scale = 1.0 / np.sqrt(length)
        for first in range(bins - length + 1):
            for line in range(lines):
                found = (run[first + length, line] - run[first, line]) * scale
                if abs(found) > abs(best[line]):
                    best[line] = found
                    start[line] = first
                    stop[line] = first + length
