"""Pixel-by-pixel arithmetic of master frames, in one pass instead of one for each operation."""

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def standard_errors(variance, count, out):
    """sqrt(variance / count) of flat arrays: float32, uint16, into float32."""
    for i in range(out.size):
        out[i] = np.sqrt(variance[i] / np.float32(count[i]))


@njit(nogil=True, cache=True)
def differences(mean, variance, count, base, base_variance, base_count, values, error):
    """``mean - base`` and its standard error; all flat, counts uint16, the rest float32."""
    for i in range(values.size):
        values[i] = mean[i] - base[i]
        error[i] = np.sqrt(
            variance[i] / np.float32(count[i]) + base_variance[i] / np.float32(base_count[i])
        )


@njit(nogil=True, cache=True)
def less_light_free(mean, base, dark, share, out):
    """``mean - base - share * dark``, all flat float32."""
    share = np.float32(share)
    for i in range(out.size):
        out[i] = mean[i] - base[i] - share * dark[i]


@njit(nogil=True, cache=True)
def divided(values, error, divisor):
    """Both over the divisor, in place; flat float32."""
    factor = np.float32(1.0 / divisor)
    for i in range(values.size):
        values[i] *= factor
        error[i] *= factor
