"""Weighted sum of images, in one pass over memory."""

import numpy as np
from numba import njit

CHUNK = 4096


@njit(nogil=True, cache=True)
def linear_sum(images, weights, out):
    """Write ``sum_k weights[k] * images[k]`` into ``out``.

    images : tuple of K flat float32 arrays; weights : (K,) float32; out : flat float32. Sums are
    taken image after image for each pixel.
    """
    for start in range(0, out.shape[0], CHUNK):
        stop = min(start + CHUNK, out.shape[0])
        part = out[start:stop]
        first = images[0][start:stop]
        weight = np.float32(weights[0])
        for i in range(stop - start):
            part[i] = weight * first[i]
        for k in range(1, len(images)):
            source = images[k][start:stop]
            weight = np.float32(weights[k])
            for i in range(stop - start):
                part[i] += weight * source[i]
