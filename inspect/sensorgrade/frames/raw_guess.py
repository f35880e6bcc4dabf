"""A first guess at the layout of headerless binary frames, from their samples.

Neighbouring samples of an image are alike: the right byte order makes their differences small, and
the right row length makes every sample like the one a row later, through shading and columns that
differ. Without any structure in the frames there is nothing to guess from.
"""

from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.contents import MAX_SAMPLES
from sensorgrade.recipe.model import RawBinary

LOOKED_AT = 4  # frames
NARROWEST, WIDEST = 0.2, 5.0  # rows over columns
SHORTER_NEAR = 0.02  # how much less correlation a fraction of the best length may have
LEAST_CORRELATION = 0.2  # between a sample and the one a row later


def guessed_raw(paths: Sequence[Path]) -> RawBinary | None:
    """Layout of 16-bit frames without a header, all of one size; None where nothing fits."""
    sizes = Counter(path.stat().st_size for path in paths)
    if not sizes:
        return None
    size = sizes.most_common(1)[0][0]
    if size < 2 * 64 or size % 2 or size // 2 > MAX_SAMPLES:
        return None
    alike = [path for path in paths if path.stat().st_size == size]
    chosen = alike[:: max(1, len(alike) // LOOKED_AT)][:LOOKED_AT]
    best: tuple[float, int, str] | None = None
    for path in chosen:
        stored = path.read_bytes()[:size]
        order = min(("little", "big"), key=lambda name: _roughness(stored, name))
        samples = _samples(stored, order)
        found = _row_length(samples)
        if found is not None and (best is None or found[0] > best[0]):
            best = (*found, order)
    if best is None:
        return None
    _, columns, order = best
    return RawBinary(
        dtype="uint16", rows=size // 2 // columns, columns=columns, byte_order=order, skip=0
    )


def _samples(stored: bytes, order: str) -> NDArray[np.float32]:
    return np.frombuffer(stored, "<u2" if order == "little" else ">u2").astype(np.float32)


def _roughness(stored: bytes, order: str) -> float:
    """Mean step from sample to sample."""
    return float(np.abs(np.diff(_samples(stored, order))).mean())


def _row_length(samples: NDArray[np.float32]) -> tuple[float, int] | None:
    """Correlation and length of the row that makes samples most like those a row later.

    Multiples of the row length are nearly as good, so a fraction of the best length that comes
    near it is preferred. Extreme samples are clipped: a hot pixel says nothing of rows.
    """
    low, high = np.percentile(samples, (1, 99))
    clipped = np.clip(samples, low, high) - samples.mean()
    power = float((clipped**2).mean())
    if power == 0:
        return None
    count = len(samples)
    columns = [
        length
        for length in range(8, count // 8 + 1)
        if count % length == 0 and NARROWEST <= count // length / length <= WIDEST
    ]
    scores = {
        length: float((clipped[:-length] * clipped[length:]).mean()) / power for length in columns
    }
    if not scores or max(scores.values()) < LEAST_CORRELATION:
        return None
    best = max(columns, key=lambda length: scores[length])
    near = scores[best] - SHORTER_NEAR
    length = min(length for length in columns if best % length == 0 and scores[length] >= near)
    return scores[length], length
