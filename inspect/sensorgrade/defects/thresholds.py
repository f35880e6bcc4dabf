"""What thresholds make of pixels: the kinds of defect each may be, and how likely."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from sensorgrade.defects.candidates import DARK, HIGH, LOW, NEUTRAL, OFFSET, PARTS
from sensorgrade.options import number, quantity

Floats = NDArray[np.float64]

NEAR = 4.0  # typical uncertainties short of a threshold within which a pixel may be past it
SQRT_2_PI = float(np.sqrt(2 * np.pi))
LEAST_CHANCE = 1e-3  # of being past the threshold, below which a pixel adds nothing to a count


@dataclass(frozen=True, slots=True, kw_only=True)
class PixelOptions:
    """Recipe keys under ``stages: pixels``."""

    hot: float | None = quantity(
        "electron / s",
        "Dark current above the local level from which a pixel is hot; else ten times the median",
        default=None,
        minimum=0.0,
    )
    warm: float | None = quantity(
        "electron / s",
        "The same for warm pixels; none are looked for without it",
        default=None,
        minimum=0.0,
    )
    dead: float = quantity(
        "%", "Response over the local one below which a pixel is dead", default=20.0, minimum=0.0
    )
    dim: float = quantity(
        "%", "Response over the local one below which a pixel is dim", default=80.0, minimum=0.0
    )
    bright: float = quantity(
        "%", "Response over the local one above which it is bright", default=120.0, minimum=100.0
    )
    offset: float | None = quantity(
        "electron",
        "Departure of the bias level from the local one; else ten times the read noise",
        default=None,
        minimum=0.0,
    )
    noisy: float = number(
        "Temporal noise over the output's from which a pixel is noisy", default=3.0, minimum=1.0
    )
    significance: float = number(
        "A departure counts only from so many of its standard uncertainties",
        default=5.5,
        minimum=3.0,
    )


# The options that say where a kind begins, and so may move without frames; by part.
MOVABLE = {
    DARK: ("hot", "warm"),
    LOW: ("dead", "dim"),
    HIGH: ("bright",),
    OFFSET: ("offset",),
}


@dataclass(frozen=True, slots=True)
class Judged:
    """Pixels that may be of ``kind``: their ``places`` in the arrays given, and probabilities.

    ``shared`` is how much a probability changes with one standard uncertainty of what all values
    of the region share.
    """

    kind: str
    places: NDArray[np.int64]
    probability: Floats
    shared: Floats


def nearest_threshold(part: int, options: PixelOptions, automatic: float) -> float:
    """The threshold of a part that lies nearest to the usual pixel."""
    if part == DARK:
        hot = automatic if options.hot is None else options.hot
        return hot if options.warm is None else min(options.warm, hot)
    if part == LOW:
        return max(options.dim, options.dead)
    if part == HIGH:
        return options.bright
    return automatic if options.offset is None else options.offset


def significance(part: int, value: Floats, error: Floats) -> Floats:
    """Departure from the usual pixel in standard uncertainties."""
    apart: Floats = np.abs(value - NEUTRAL[part]) / error
    return apart


def judged(
    part: int,
    value: Floats,
    error: Floats,
    options: PixelOptions,
    *,
    automatic: Floats | float,
    typical: Floats | float,
    scale: Floats | float,
) -> list[Judged]:
    """The kinds that pixels of one part may be.

    A pixel is past a threshold with probability Phi((value - threshold) / u), its noise taken as
    normal. Those that are likelier short of it than past it are told too: they add to a count's
    expected number and doubt.

    Parameters
    ----------
    part : int
        Place in `PARTS`.
    value, error : ndarray of shape (K,)
        Values in the part's unit with standard uncertainties.
    automatic, typical, scale : ndarray of shape (K,) or float
        As in REACH, for each pixel.
    """
    every = np.ones(len(value), np.bool_)
    apart = significance(part, value, error) >= options.significance
    match PARTS[part]:
        case "dark":
            hot = automatic if options.hot is None else options.hot
            asked = [("hot", every, value - hot)]
            if options.warm is not None:
                asked.append(("warm", value < hot, value - options.warm))
        case "low response":
            asked = [
                ("dead", every, options.dead - value),
                ("dim", value >= options.dead, options.dim - value),
            ]
        case "high response":
            asked = [("bright", every, value - options.bright)]
        case _:
            limit = automatic if options.offset is None else options.offset
            asked = [("offset", every, np.abs(value) - limit)]
    found = []
    for kind, where, past in asked:
        places = np.flatnonzero(apart & where & (past >= -NEAR * np.asarray(typical)))
        apart_by = past[places] / error[places]
        chance = ndtr(apart_by)
        likely = chance >= LEAST_CHANCE
        density = np.exp(-(apart_by**2) / 2) / (SQRT_2_PI * error[places])
        shared = density * np.abs(value[places]) * np.broadcast_to(scale, value.shape)[places]
        found.append(Judged(kind, places[likely], chance[likely], shared[likely]))
    return found
