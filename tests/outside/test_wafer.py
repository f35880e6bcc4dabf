"""Join counts of a wafer against an independent library and the published moments."""

from math import sqrt

import numpy as np
from scipy.ndimage import convolve

from sensorgrade.lot.wafer import Die, clustering


def test_neighbouring_failures_against_a_convolution_and_the_published_moments(outside):
    failed = np.random.default_rng(11).random((14, 17)) < 0.2
    placed = [
        Die(f"{row}-{column}", "W1", row, column, not bad, "", None)
        for (row, column), bad in np.ndenumerate(failed)
    ]
    found = clustering(placed)
    ring = np.ones((3, 3), dtype=int)
    ring[1, 1] = 0
    neighbours = convolve(failed.astype(int), ring, mode="constant")
    outside(
        "pairs of neighbouring failed dies",
        source="scipy.ndimage.convolve",
        standing="library",
        expected=int(np.sum(neighbours[failed])) // 2,
        found=found.pairs,
    )
    # Cliff and Ord: J joins, D = sum of L(L - 1) over dies with L neighbours, n1 of n failed.
    rows, columns = failed.shape
    n, n1 = failed.size, int(failed.sum())
    joins = rows * (columns - 1) + columns * (rows - 1) + 2 * (rows - 1) * (columns - 1)
    degree = convolve(np.ones_like(failed, dtype=int), ring, mode="constant")
    shared = int(np.sum(degree * (degree - 1)))
    p2 = n1 * (n1 - 1) / (n * (n - 1))
    p3 = p2 * (n1 - 2) / (n - 2)
    p4 = p3 * (n1 - 3) / (n - 3)
    variance = joins * p2 + shared * p3 + (joins * (joins - 1) - shared) * p4 - (joins * p2) ** 2
    outside(
        "mean and spread of pairs of failed dies under chance",
        source="A. D. Cliff, J. K. Ord, Spatial Processes, 1981, join counts, nonfree sampling",
        standing="from memory",
        expected=[joins * p2, sqrt(variance)],
        found=[found.expected, found.spread],
        rtol=1e-9,
    )
