"""One pass over a band of a stack: byte order, offset, scale, mean, variance, outlier test.

The common pixel is reduced by vectorised loops over columns. Only pixels whose extremes or whose
scatter the noise model does not explain are looked at sample by sample.
"""

import numpy as np
from numba import njit, types
from numba.extending import overload

from sensorgrade.kernels.extremes import larger, smaller

CHUNK = 512  # columns whose running sums stay in the first-level cache


def native(stored, swap, flip):
    """A stored sample as its value, in compiled code only.

    16-bit integers: ``swap`` is 0 or 0xFFFF, ``flip`` 0 or 0x8000; selecting by mask keeps the
    loop free of branches and in 16-bit lanes. Floats are native already.
    """


@overload(native, inline="always")
def _native(stored, swap, flip):
    if isinstance(stored, types.Float):
        return lambda stored, swap, flip: stored

    def integer(stored, swap, flip):
        turned = np.uint16((stored << 8) | (stored >> 8))
        return np.uint16(stored ^ ((stored ^ turned) & swap) ^ flip)

    return integer


@njit(nogil=True, cache=True, inline="always")
def sample_value(stored, swap, flip, offset, scale, pivot):
    """One corrected sample [DN]: less its row's offset, scaled about the pivot."""
    gain = np.float32(scale)
    shift = np.float32(pivot - (pivot + offset) * gain)
    return np.float32(native(stored, swap, flip)) * gain + shift


@njit(nogil=True, cache=True)
def reduce_band(
    raw,
    swap,
    flip,
    column,
    offset,
    scale,
    pivot,
    read,
    slope,
    bias_level,
    sigmas,
    scatter,
    mean,
    variance,
    flagged,
):
    """Mean and variance of each pixel of a band over the frames of a stack.

    raw : (L, R, W) uint16, as stored; ``swap``, ``flip`` (L,) uint16 masks for `native`
    column : first raw column of the image section
    offset : (L, R) float32 [DN], subtracted; ``scale`` (L,) float32, applied about ``pivot`` [DN]
    read [DN²], slope [DN], bias_level [DN] : expected variance read + slope * (mean - bias_level)
    sigmas, scatter : a pixel is flagged when a sample lies farther than ``sigmas`` expected
        deviations from the mean, or its variance exceeds ``scatter`` times the expected one
    mean, variance : (R, N) float32, written; flagged : (R, N) uint8, written

    Returns the number of flagged pixels. Sums are taken from the first frame's value, frame after
    frame for each pixel, so the result depends neither on the band nor on the thread.
    """
    frames, rows, _ = raw.shape
    columns = mean.shape[1]
    one = np.float32(1.0)
    share = one / np.float32(frames)
    freedom = one / np.float32(max(frames - 1, 1))
    reach = np.float32(sigmas * sigmas)
    scatter = np.float32(scatter)
    read = np.float32(read)
    slope = np.float32(slope)
    bias_level = np.float32(bias_level)
    # First value, sum, sum of squares, highest and lowest of a chunk of columns. One array, since
    # the compiler gives up on vectorising when it must prove that many arrays are apart.
    work = np.empty(5 * CHUNK, np.float32)
    count = 0
    for row in range(rows):
        for start in range(0, columns, CHUNK):
            width = min(CHUNK, columns - start)
            base = column + start
            gain = np.float32(scale[0])
            shift = np.float32(pivot - (pivot + offset[0, row]) * gain)
            samples = raw[0, row, base : base + width]
            for x in range(width):
                work[x] = np.float32(native(samples[x], swap[0], flip[0])) * gain + shift
                work[CHUNK + x] = 0.0
                work[2 * CHUNK + x] = 0.0
                work[3 * CHUNK + x] = 0.0
                work[4 * CHUNK + x] = 0.0
            for k in range(1, frames):
                gain = np.float32(scale[k])
                shift = np.float32(pivot - (pivot + offset[k, row]) * gain)
                samples = raw[k, row, base : base + width]
                turn = swap[k]
                top = flip[k]
                for x in range(width):
                    value = np.float32(native(samples[x], turn, top)) * gain + shift - work[x]
                    work[CHUNK + x] += value
                    work[2 * CHUNK + x] += value * value
                    work[3 * CHUNK + x] = larger(work[3 * CHUNK + x], value)
                    work[4 * CHUNK + x] = smaller(work[4 * CHUNK + x], value)
            for x in range(width):
                middle = work[CHUNK + x] * share
                level = work[x] + middle
                spread = max(work[3 * CHUNK + x] - middle, middle - work[4 * CHUNK + x])
                expected = read + slope * max(level - bias_level, np.float32(0.0))
                scattered = max(
                    (work[2 * CHUNK + x] - work[CHUNK + x] * middle) * freedom, np.float32(0.0)
                )
                mean[row, start + x] = level
                variance[row, start + x] = scattered
                flag = (spread * spread > reach * expected) | (scattered > scatter * expected)
                flagged[row, start + x] = flag
                count += flag
    return count
