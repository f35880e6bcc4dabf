"""Overscan level of every row of every frame in a band."""

from numba import njit

from sensorgrade.kernels.stack import native


@njit(nogil=True, cache=True)
def overscan_means(raw, swap, flip, start, stop, out):
    """Mean of raw columns ``start`` to ``stop`` of each row.

    raw : (L, R, W) samples as stored; swap, flip : (L,) uint16 masks for `native`
    out : (L, R) float32 [DN], written
    """
    for k in range(raw.shape[0]):
        for row in range(raw.shape[1]):
            total = 0.0
            for x in range(start, stop):
                total += native(raw[k, row, x], swap[k], flip[k])
            out[k, row] = total / (stop - start)


@njit(nogil=True, cache=True)
def profile_means(raw, swap, flip, columns, offset, out):
    """Mean over frames of chosen raw columns of each row, less the row's overscan.

    columns : (K,) int64 raw columns; offset : (L, R) float32 [DN]
    out : (R, K) float32 [DN], written
    """
    frames = raw.shape[0]
    for row in range(raw.shape[1]):
        for i in range(len(columns)):
            total = 0.0
            for k in range(frames):
                total += native(raw[k, row, columns[i]], swap[k], flip[k]) - offset[k, row]
            out[row, i] = total / frames
