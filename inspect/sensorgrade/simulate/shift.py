"""Charge left behind at each transfer in a fixed proportion: the simplest transfer loss."""

import numpy as np
from numpy.typing import NDArray

NEGLIGIBLE = 1e-9  # of a packet, where its trail is cut off


def deferred(
    packets: NDArray[np.float32], inefficiency: float, *, axis: int
) -> NDArray[np.float32]:
    """Packets as they arrive when each transfer leaves a fraction behind for the next packet.

    Parameters
    ----------
    packets : ndarray of shape (M, N), float32 [electron]
        In the order of reading: the first along ``axis`` makes one transfer, the next two.
    inefficiency : float
        Fraction left behind at each transfer.
    axis : int
        0 for parallel transfers, 1 for serial ones.

    Returns
    -------
    ndarray of shape (M, N), float32 [electron]
        What trails beyond the last packet of the axis is lost.

    Notes
    -----
    After j transfers the share of a packet that arrives d steps late is negative binomial,
    C(j + d - 1, d) (1 - e)^j e^d, so the mean delay is j e / (1 - e).
    """
    lines = np.moveaxis(packets.astype(np.float64), axis, -1)
    transfers = np.arange(1, lines.shape[-1] + 1)
    share = (1 - inefficiency) ** transfers
    arrived = lines * share
    delay = 1
    while True:
        share = share * (transfers + delay - 1) / delay * inefficiency
        if delay >= lines.shape[-1] or share.max() < NEGLIGIBLE:
            break
        arrived[..., delay:] += (lines * share)[..., :-delay]
        delay += 1
    return np.moveaxis(arrived, -1, axis).astype(np.float32)
