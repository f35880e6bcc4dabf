"""Pixels that scatter more, or less, than the noise model says."""

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def excess_scatter(
    means,
    variances,
    counts,
    read,
    slope,
    pivot,
    top,
    left,
    row_step,
    column_step,
    rows,
    columns,
    low,
    high,
    found_rows,
    found_columns,
):
    """List the pixels whose pooled variance ratio is below ``low`` or above ``high``.

    means, variances : tuples of K (M, N) float32 images [DN, DN²]; counts : tuple of (M, N) uint16.
    The ratio is the sum over images of (count - 1) variance / (read + slope * (mean - pivot[k])),
    over the sum of (count - 1); pivot (K,) float32. The region as in `block_quantiles`.
    Returns how many there are; positions are written as far as there is room.
    """
    found = 0
    room = found_rows.shape[0]
    total = np.empty(columns, np.float32)
    freedom = np.empty(columns, np.float32)
    read = np.float32(read)
    slope = np.float32(slope)
    low = np.float32(low)
    high = np.float32(high)
    one = np.float32(1.0)
    zero = np.float32(0.0)
    for i in range(rows):
        y = top + i * row_step
        total[:] = zero
        freedom[:] = zero
        for k in range(len(means)):
            mean = means[k][y]
            variance = variances[k][y]
            count = counts[k][y]
            level = np.float32(pivot[k])
            for j in range(columns):
                x = left + j * column_step
                degrees = np.float32(count[x]) - one
                degrees = degrees if degrees > zero else zero
                signal = mean[x] - level
                signal = signal if signal > zero else zero
                total[j] += degrees * variance[x] / (read + slope * signal)
                freedom[j] += degrees
        for j in range(columns):
            if freedom[j] > zero and (total[j] > high * freedom[j] or total[j] < low * freedom[j]):
                if found < room:
                    found_rows[found] = y
                    found_columns[found] = left + j * column_step
                found += 1
    return found
