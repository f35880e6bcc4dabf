"""Which kind a pixel counts as when it stands apart in several ways."""

import numpy as np
from numpy.typing import NDArray

CERTAIN = 0.5  # a candidate is a defect when it is likelier past the threshold than not
# When one pixel stands apart in several ways, it counts as the first of these.
RANK = ("dead", "hot", "telegraph", "dim", "bright", "noisy", "offset", "warm", "trap")


def ranked(
    pixel: NDArray[np.int64], rank: NDArray[np.integer], probability: NDArray[np.float64]
) -> NDArray[np.int64]:
    """Which candidates count: the best sure one of each pixel, and one doubtful that outranks it.

    A pixel that is surely warm may yet be hot: it is one warm pixel found, and its chance of being
    hot belongs to the expected number of hot ones.

    Parameters
    ----------
    pixel : ndarray of shape (K,)
        A number that is the pixel's own.
    rank : ndarray of shape (K,)
        Place of the candidate's kind in `RANK`.
    probability : ndarray of shape (K,)
        Of being past the threshold; sure from `CERTAIN` on.

    Returns
    -------
    ndarray of shape (L,)
        Places of those that count, in the order of pixels.
    """
    doubtful = probability < CERTAIN
    order = np.lexsort((rank, doubtful, pixel))
    pixel, rank, doubtful = pixel[order], rank[order], doubtful[order]
    leads = np.ones(len(order), np.bool_)
    leads[1:] = pixel[1:] != pixel[:-1]
    leader = np.flatnonzero(leads)[np.cumsum(leads) - 1]
    after_sure = np.zeros(len(order), np.bool_)
    after_sure[1:] = ~doubtful[:-1]
    outranks = ~leads & doubtful & after_sure & (rank < rank[leader])
    counting: NDArray[np.int64] = order[leads | outranks]
    return counting
