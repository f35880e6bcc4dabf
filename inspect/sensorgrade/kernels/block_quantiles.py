"""Quantiles of an image block by block, from a lattice of its pixels: for smooth backgrounds."""

import numpy as np
from numba import njit

SAMPLED = 128  # pixels looked at in a block of 32 x 32


@njit(nogil=True, cache=True)
def block_quantiles(image, top, left, row_step, column_step, rows, columns, out):
    """Write the 15.87, 50 and 84.13 % quantiles of each block into ``out`` (3, By, Bx) float32.

    image : (M, N) float32, C order. The region is rows ``top``, ``top + row_step``, … (``rows`` of
    them) and columns likewise; it is parted into By x Bx nearly equal blocks. Every second row
    and fourth column is looked at, the column's start moving with the row, or every pixel of
    blocks smaller than 256. Pixels that are not finite are passed over; a block of nothing else
    becomes NaN.
    """
    blocks_down, blocks_across = out.shape[1:]
    buffer = np.empty((rows // blocks_down + 2) * (columns // blocks_across + 2), dtype=image.dtype)
    for by in range(blocks_down):
        first = by * rows // blocks_down
        last = (by + 1) * rows // blocks_down
        for bx in range(blocks_across):
            start = bx * columns // blocks_across
            stop = (bx + 1) * columns // blocks_across
            small = (last - first) * (stop - start) < 256
            down = 1 if small else 2
            across = 1 if small else 4
            n = 0
            for i in range(first, last, down):
                y = top + i * row_step
                for j in range(start + (i // down) % across, stop, across):
                    value = image[y, left + j * column_step]
                    if np.isfinite(value):
                        buffer[n] = value
                        n += 1
            if n == 0:
                out[:, by, bx] = np.nan
                continue
            ordered = np.sort(buffer[:n])
            for k, share in enumerate((0.158655, 0.5, 0.841345)):
                at = share * (n - 1)
                low = int(at)
                high = min(low + 1, n - 1)
                out[k, by, bx] = ordered[low] + (at - low) * (ordered[high] - ordered[low])
