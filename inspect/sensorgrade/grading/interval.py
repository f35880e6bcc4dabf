"""Intervals for a proportion: what a yield of k in n devices says of the process."""

from dataclasses import dataclass
from math import sqrt

from scipy.special import betaincinv

from sensorgrade.grading.conformity import guard_factor


@dataclass(frozen=True, slots=True)
class Interval:
    """Two-sided limits, both ends included."""

    low: float
    high: float


def wilson(successes: int, trials: int, *, confidence: float = 95.0) -> Interval:
    """Wilson's score interval; its coverage is near the confidence asked [%] on average.

    References
    ----------
    .. [1] E. B. Wilson, J. Am. Stat. Assoc. 22 (1927) 209.
    .. [2] L. D. Brown, T. T. Cai, A. DasGupta, Statist. Sci. 16 (2001) 101.
    """
    if trials == 0:
        return Interval(0.0, 1.0)
    z = guard_factor(50.0 + confidence / 2.0)
    share = successes / trials
    centre = share + z**2 / (2 * trials)
    half = z * sqrt(share * (1.0 - share) / trials + z**2 / (4.0 * trials**2))
    scale = 1.0 + z**2 / trials
    low = 0.0 if successes == 0 else (centre - half) / scale
    high = 1.0 if successes == trials else (centre + half) / scale
    return Interval(low, high)


def clopper_pearson(successes: int, trials: int, *, confidence: float = 95.0) -> Interval:
    """Clopper and Pearson's exact interval; its coverage is never below the confidence asked [%].

    References
    ----------
    .. [1] C. J. Clopper, E. S. Pearson, Biometrika 26 (1934) 404.
    """
    tail = (1.0 - confidence / 100.0) / 2.0
    low = 0.0 if successes == 0 else betaincinv(successes, trials - successes + 1, tail)
    high = 1.0 if successes == trials else betaincinv(successes + 1, trials - successes, 1.0 - tail)
    return Interval(float(low), float(high))
