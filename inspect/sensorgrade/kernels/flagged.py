"""The slow path of a stack: pixels whose samples the noise model does not explain, one by one."""

import numpy as np
from numba import njit

from sensorgrade.kernels.stack import sample_value


@njit(nogil=True, cache=True)
def most_events(frames):
    """How many samples of one pixel may be taken for particle events.

    In five minutes at ground level a pixel is hit with a chance of about 1e-4, so a third hit
    among few frames is not a particle but a pixel that changes.
    """
    if frames < 6:
        return 1
    return max(2, frames // 16)


@njit(nogil=True, cache=True)
def settle_flagged(
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
    flagged,
    mean,
    variance,
    count,
    places,
    samples,
):
    """Take particle events out of the flagged pixels and keep the samples of the suspect ones.

    Arguments as in `reduce_band`; in ``flagged`` (R, N) uint8 non-zero says which pixels to do.
    Highest samples are left out when every one of them lies more than ``sigmas`` deviations
    above the mean of the rest, the deviation being the larger of the expected one and the rest's
    own scatter; never more than `most_events`. A pixel is suspect when two or more samples were
    left out or the rest still scatters more than ``scatter`` times the expected variance.

    mean, variance (R, N) float32 and count (R, N) uint16 are corrected in place.
    places (F, 2) int32, samples (F, L) float32 : row in the band, column, and all samples of
    the suspects, in row order; F is the number of flagged pixels

    Returns (number of suspects, number of samples left out).
    """
    frames, rows, _ = raw.shape
    columns = flagged.shape[1]
    values = np.empty(frames, np.float64)
    suspects = 0
    events = 0
    for row in range(rows):
        for x in range(columns):
            if flagged[row, x] == 0:
                continue
            for k in range(frames):
                values[k] = sample_value(
                    raw[k, row, column + x], swap[k], flip[k], offset[k, row], scale[k], pivot
                )
            ordered = np.sort(values)
            dropped = 0
            for trial in range(most_events(frames), 0, -1):
                rest = ordered[: frames - trial]
                if len(rest) == 0:
                    continue
                middle = rest.mean()
                expected = read + slope * max(middle - bias_level, 0.0)
                own = 0.0
                if len(rest) > 2:
                    own = ((rest - middle) ** 2).sum() / (len(rest) - 1)
                reach = sigmas * np.sqrt(max(expected, own) * (1.0 + 1.0 / len(rest)))
                if ordered[frames - trial] - middle > reach:
                    dropped = trial
                    break
            rest = ordered[: frames - dropped]
            kept = len(rest)
            middle = rest.mean()
            scattered = 0.0
            if kept > 1:
                scattered = ((rest - middle) ** 2).sum() / (kept - 1)
            expected = read + slope * max(middle - bias_level, 0.0)
            mean[row, x] = middle
            variance[row, x] = scattered
            count[row, x] = kept
            events += dropped
            if dropped > 1 or scattered > scatter * expected:
                places[suspects, 0] = row
                places[suspects, 1] = x
                for k in range(frames):
                    samples[suspects, k] = values[k]
                suspects += 1
    return suspects, events
