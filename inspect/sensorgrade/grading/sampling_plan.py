"""Lot acceptance by attributes: how many devices to inspect, how many may fail.

References
----------
.. [1] ISO 2859-1:1999, tables 1 and 2-A: single sampling plans for normal inspection, level II.
"""

from bisect import bisect_left
from dataclasses import dataclass
from hashlib import sha256

import numpy as np
from numpy.typing import NDArray
from scipy.special import bdtr, gammaln

from sensorgrade.errors import RequestError

# Code letters A to R (no I, no O) by their sample sizes.
SIZES = (2, 3, 5, 8, 13, 20, 32, 50, 80, 125, 200, 315, 500, 800, 1250, 2000)
# Largest lot of each code letter from A on, general inspection level II.
LOTS = (8, 15, 25, 50, 90, 150, 280, 500, 1200, 3200, 10_000, 35_000, 150_000, 500_000)
# Acceptance quality limits [% nonconforming], widest first: the column of QUALITY_LIMITS[i] has
# its acceptance number 0 at code letter i, one letter further down for each tighter limit.
QUALITY_LIMITS = (6.5, 4.0, 2.5, 1.5, 1.0, 0.65, 0.40, 0.25, 0.15, 0.10, 0.065, 0.040, 0.025)
# Acceptance numbers down a column from its 0 on. Places 1 and 2 hold an arrow up and an arrow
# down in the standard's table; LED_TO says at which place each arrow ends.
ACCEPT = (0, 0, 1, 1, 2, 3, 5, 7, 10, 14, 21)
LED_TO = (0, 0, 3, 3, 4, 5, 6, 7, 8, 9, 10)


@dataclass(frozen=True, slots=True)
class SamplingPlan:
    """Inspect ``size`` devices drawn at random; accept the lot on ``accept`` failures or fewer."""

    size: int
    accept: int

    def acceptance_probability(self, share: float, *, lot: int | None = None) -> float:
        """Chance that a lot is accepted of which ``share`` (0 to 1) does not conform.

        Binomial for a large lot or a process; hypergeometric for a lot of ``lot`` devices.
        """
        if lot is None:
            return float(bdtr(self.accept, self.size, share))
        bad = round(share * lot)
        found = np.arange(max(0, self.size - (lot - bad)), min(self.accept, bad, self.size) + 1)
        logarithms = (
            _log_choose(bad, found)
            + _log_choose(lot - bad, self.size - found)
            - _log_choose(lot, np.full_like(found, self.size))
        )
        return float(np.exp(logarithms).sum())


def standard_plan(lot: int, quality_limit: float) -> SamplingPlan:
    """The plan of ISO 2859-1 for a lot of ``lot`` devices and an AQL [% nonconforming].

    A cell with an arrow stands for the plan the arrow leads to, with that plan's sample size.
    A sample as large as the lot means that every device is inspected.

    Raises
    ------
    RequestError
        The limit is none of the standard's from 0.025 to 6.5, or the lot has fewer than 2 devices.
    """
    if quality_limit not in QUALITY_LIMITS:
        known = ", ".join(f"{one:g}" for one in QUALITY_LIMITS)
        raise RequestError(
            f"lot.quality_limit: ISO 2859-1 has no plan for {quality_limit:g} %; take one of"
            f" {known} %"
        )
    if lot < 2:
        raise RequestError("lot: a sampling plan needs a lot of 2 devices or more")
    zero = QUALITY_LIMITS.index(quality_limit)
    letter = bisect_left(LOTS, lot)
    place = LED_TO[min(max(letter - zero, 0), len(LED_TO) - 1)]
    return SamplingPlan(min(SIZES[zero + place], lot), ACCEPT[place])


def drawn(serials: list[str], size: int) -> list[str]:
    """``size`` of the serials, at random as far as quality goes, and always the same ones.

    They are taken in the order of the digest of the serial, which nobody chose for its result.
    """
    return sorted(sorted(serials, key=lambda serial: sha256(serial.encode()).digest())[:size])


def _log_choose(many: int, few: NDArray[np.int64]) -> NDArray[np.float64]:
    """Logarithm of the binomial coefficient."""
    result: NDArray[np.float64] = gammaln(many + 1) - gammaln(few + 1) - gammaln(many - few + 1)
    return result
