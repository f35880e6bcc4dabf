"""How far a process keeps from its limits, in its own standard deviations."""

from dataclasses import dataclass
from math import sqrt

from sensorgrade.grading.conformity import guard_factor


@dataclass(frozen=True, slots=True)
class Capability:
    """``index`` is Cpk; ``standard_uncertainty`` its own, from the number of devices.

    ``both_sides`` is Cp, None for a one-sided limit.
    """

    index: float
    standard_uncertainty: float
    both_sides: float | None


def capability(
    mean: float,
    spread: float,
    devices: int,
    *,
    lower: float | None = None,
    upper: float | None = None,
) -> Capability:
    """Cpk = min(upper - mean, mean - lower) / (3 sd), Cp = (upper - lower) / (6 sd).

    The uncertainty of Cpk is sqrt(1 / 9n + Cpk² / 2(n - 1)), for normal values.

    Raises
    ------
    ValueError
        ``spread`` is not above 0, or no limit is given.

    References
    ----------
    .. [1] A. F. Bissell, Appl. Stat. 39 (1990) 331 (standard error of Cpk; from memory).
    """
    sides = [upper - mean] if upper is not None else []
    sides += [mean - lower] if lower is not None else []
    if not sides or spread <= 0.0:
        raise ValueError("a capability index needs a limit and values that differ")
    index = min(sides) / (3.0 * spread)
    doubt = sqrt(1.0 / (9.0 * devices) + index**2 / (2.0 * (devices - 1)))
    both = None if lower is None or upper is None else (upper - lower) / (6.0 * spread)
    return Capability(index, doubt, both)


def robust_outlier_factor(devices: int, *, false_alarm: float = 5.0) -> float:
    """How many standard deviations mark an outlier among so many devices.

    Chosen so that a lot of normal values shows any outlier with probability ``false_alarm`` [%]:
    z of (1 - (1 - a)^(1/n)) / 2 in each tail.
    """
    each = 1.0 - (1.0 - false_alarm / 100.0) ** (1.0 / devices)
    return guard_factor(100.0 * (1.0 - each / 2.0))
