"""The largest values of a device's pixels, kept so that a threshold can move without frames.

A limit on hot pixels allows some hundreds of them, so the pixels that can matter at any threshold
worth asking for are the few that lie highest. Their values with uncertainties are the compact
form: 1024 of them take 8 KiB for a kind and scope, and counts from them are exact down to the
threshold that more pixels than that exceed.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from sensorgrade.defects.defect import DefectCount

KEPT = 1024
FAR = 5.0  # a pixel so many uncertainties below the threshold adds nothing to the count


@dataclass(frozen=True, slots=True)
class LargestValues:
    """Values (K,) float32, largest first, with standard uncertainties (K,), in ``unit``.

    ``floor`` is the largest value that was left out, None when none was. ``kind`` and ``scope``
    are those of the count that the values make.
    """

    kind: str
    scope: str
    unit: str
    values: NDArray[np.float32]
    uncertainties: NDArray[np.float32]
    floor: float | None


def largest_values(
    values: NDArray[np.floating],
    uncertainties: NDArray[np.floating],
    *,
    kind: str,
    scope: str,
    unit: str,
    kept: int = KEPT,
) -> LargestValues:
    """The ``kept`` largest of the pixels' values, of any shape, with their uncertainties."""
    flat, doubt = values.ravel(), uncertainties.ravel()
    floor = None
    if flat.size > kept:
        order = np.argpartition(flat, flat.size - kept - 1)
        floor = float(flat[order[flat.size - kept - 1]])
        chosen = order[flat.size - kept :]
        flat, doubt = flat[chosen], doubt[chosen]
    descending = np.argsort(-flat, kind="stable")
    return LargestValues(
        kind,
        scope,
        unit,
        flat[descending].astype(np.float32),
        doubt[descending].astype(np.float32),
        floor,
    )


def count_at(stored: LargestValues, *, threshold: float) -> DefectCount | None:
    """Pixels past ``threshold`` (in the values' unit), None where too few values were kept.

    Each pixel is past it with probability Phi((value - threshold) / u), its noise taken as
    normal. None means that pixels left out could be past the threshold: the count is then larger
    than the number kept.
    """
    values = stored.values.astype(np.float64)
    doubts = stored.uncertainties.astype(np.float64)
    if stored.floor is not None and stored.floor > threshold - FAR * float(np.median(doubts)):
        return None
    with np.errstate(divide="ignore", invalid="ignore"):
        chances = np.where(
            doubts > 0.0, ndtr((values - threshold) / doubts), (values > threshold).astype(float)
        )
    return DefectCount(
        stored.kind,
        stored.scope,
        int(np.sum(values > threshold)),
        float(chances.sum()),
        float(np.sqrt(np.sum(chances * (1.0 - chances)))),
    )
