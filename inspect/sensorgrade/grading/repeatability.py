"""The same devices inspected several times, on one bench or several: what the bench adds."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import floor, inf, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtri, fdtrc

from sensorgrade.errors import NotMeasured

POOLING_RISK = 0.25  # an interaction less significant than this is pooled with repeatability [1]


@dataclass(frozen=True, slots=True)
class Effect:
    """One line of the analysis of variance. ``ratio`` and ``probability`` are those of its F."""

    name: str
    sum_of_squares: float
    degrees: int
    ratio: float | None
    probability: float | None


@dataclass(frozen=True, slots=True)
class Repeatability:
    """Standard deviations by cause, in the measurement's unit, and what they mean for a limit.

    ``repeatability`` is that of the same bench again; ``reproducibility`` between benches, the
    interaction of bench and device included; ``together`` both in quadrature; ``devices`` that of
    the true values. ``share_of_variation`` [%] is together over the total. ``categories`` is how
    many groups of devices can be told apart. ``stated_ratio`` is the scatter found, over the
    standard uncertainty stated by the measurements (root mean square); ``stated_ratio_low`` and
    ``stated_ratio_high`` enclose it with 95 % confidence by the chi-square of repeatability.
    """

    effects: tuple[Effect, ...]
    pooled: bool
    repeatability: float
    reproducibility: float
    together: float
    devices: float
    share_of_variation: float
    categories: int
    stated_ratio: float | None
    stated_ratio_low: float | None
    stated_ratio_high: float | None


def repeatability(
    readings: Mapping[str, Mapping[str, Sequence[float]]],
    *,
    stated: float | None = None,
    keep_interaction: bool = False,
) -> Repeatability:
    """Analysis of variance of devices on benches with repeats, all effects random.

    Parameters
    ----------
    readings : mapping of device to mapping of bench to values
        Every device on every bench, equally often: I devices, J benches, K values each. With one
        bench there is no reproducibility; K must then be 2 or more. With several benches and
        K = 1 the interaction stands for repeatability.
    stated : float, optional
        Root mean square of the standard uncertainties that the values came with.
    keep_interaction : bool
        Keep the interaction of device and bench even where it is not significant. Otherwise it is
        pooled with repeatability when its F has a probability above 25 %.

    Raises
    ------
    NotMeasured
        Fewer than two devices, unequal numbers of values, or nothing repeated.

    Notes
    -----
    Variances from mean squares: devices (MSd - MSi) / JK, benches (MSb - MSi) / IK, interaction
    (MSi - MSe) / K, each set to 0 when negative. The number of categories is sqrt(2) times the
    device's standard deviation over `together`, cut to a whole number, at least 1.

    References
    ----------
    .. [1] AIAG, Measurement Systems Analysis, 4th edition, 2010 (pooling at 0.25, from memory).
    .. [2] D. C. Montgomery, Design and Analysis of Experiments, chapter on random effects.
    """
    table = _table(readings)
    devices, benches, repeats = table.shape
    squares = _sums_of_squares(table)
    degrees = {
        "device": devices - 1,
        "bench": benches - 1,
        "interaction": (devices - 1) * (benches - 1),
        "error": devices * benches * (repeats - 1),
    }
    error = "error" if repeats > 1 else "interaction"
    pooled = False
    if repeats > 1 and benches > 1 and not keep_interaction:
        ratio, chance = _f(squares, degrees, "interaction", "error")
        pooled = ratio == 0.0 or chance > POOLING_RISK
    effects = _effects(squares, degrees, error)
    if pooled:
        for amounts in (squares, degrees):
            amounts["error"] += amounts.pop("interaction")
    means = {name: squares[name] / degrees[name] for name in squares if degrees[name] > 0}
    within = means[error]
    crossed = means.get("interaction", within)
    between = max(0.0, (crossed - within) / repeats) if error == "error" else 0.0
    bench = max(0.0, (means["bench"] - crossed) / (devices * repeats)) if benches > 1 else 0.0
    device = max(0.0, (means["device"] - crossed) / (benches * repeats))
    together = within + between + bench
    total = together + device
    covered = _stated(within, degrees[error], stated)
    return Repeatability(
        effects=effects,
        pooled=pooled,
        repeatability=sqrt(within),
        reproducibility=sqrt(between + bench),
        together=sqrt(together),
        devices=sqrt(device),
        share_of_variation=100.0 * sqrt(together / total) if total > 0.0 else 0.0,
        categories=max(1, floor(sqrt(2.0 * device / together))) if together > 0.0 else 1,
        stated_ratio=covered[0],
        stated_ratio_low=covered[1],
        stated_ratio_high=covered[2],
    )


def share_of_tolerance(
    spread: float,
    *,
    mean: float | None = None,
    lower: float | None = None,
    upper: float | None = None,
) -> float:
    """Share [%] of the tolerance that six standard deviations of the bench take up.

    A one-sided limit has no span: its tolerance is twice the distance from the mean to the limit,
    so that the share is 3 sd over that distance (common practice, no source).
    """
    if lower is not None and upper is not None:
        return 100.0 * 6.0 * spread / (upper - lower)
    bound = upper if upper is not None else lower
    if bound is None or mean is None:
        raise ValueError("a share of the tolerance needs a limit, and a mean when it is one-sided")
    return 100.0 * 3.0 * spread / abs(bound - mean) if bound != mean else inf


def _table(readings: Mapping[str, Mapping[str, Sequence[float]]]) -> NDArray[np.float64]:
    """The values as (devices, benches, repeats), after their balance was checked."""
    benches = sorted({bench for of_device in readings.values() for bench in of_device})
    counts = {len(of_device.get(bench, ())) for of_device in readings.values() for bench in benches}
    if len(readings) < 2:
        raise NotMeasured("repeatability needs two devices or more")
    if len(counts) != 1 or 0 in counts:
        raise NotMeasured(
            "repeatability needs every device on every bench equally often; leave out what is"
            " incomplete"
        )
    if counts == {1} and len(benches) == 1:
        raise NotMeasured("repeatability needs the same devices inspected twice or more")
    return np.array(
        [[readings[device][bench] for bench in benches] for device in sorted(readings)], dtype=float
    )


def _sums_of_squares(table: NDArray[np.float64]) -> dict[str, float]:
    devices, benches, repeats = table.shape
    # About the grand mean first: sums of squares of large numbers would lose all digits.
    table = table - table.mean()
    cells = table.mean(axis=2)
    by_device, by_bench = cells.mean(axis=1), cells.mean(axis=0)
    crossed = cells - by_device[:, None] - by_bench[None, :]
    return {
        "device": float(benches * repeats * np.sum(by_device**2)),
        "bench": float(devices * repeats * np.sum(by_bench**2)),
        "interaction": float(repeats * np.sum(crossed**2)),
        "error": float(np.sum((table - cells[:, :, None]) ** 2)),
    }


def _f(
    squares: Mapping[str, float], degrees: Mapping[str, int], name: str, against: str
) -> tuple[float, float]:
    """F of one effect against another, and the chance of a larger one without effect."""
    below = squares[against] / degrees[against]
    above = squares[name] / degrees[name]
    if below == 0.0:
        return (0.0, 1.0) if above == 0.0 else (inf, 0.0)
    return above / below, float(fdtrc(degrees[name], degrees[against], above / below))


def _effects(
    squares: Mapping[str, float], degrees: Mapping[str, int], error: str
) -> tuple[Effect, ...]:
    """The table of the analysis, before pooling."""
    effects = []
    for name in squares:
        if degrees[name] == 0:
            continue
        against = "error" if name == "interaction" or degrees["interaction"] == 0 else "interaction"
        ratio, chance = None, None
        if name not in (error, against) and degrees[against] > 0:
            ratio, chance = _f(squares, degrees, name, against)
        effects.append(Effect(name, squares[name], degrees[name], ratio, chance))
    return tuple(effects)


def _stated(
    variance: float, degrees: int, stated: float | None
) -> tuple[float | None, float | None, float | None]:
    """Scatter found over the uncertainty stated, with its 95 % interval."""
    if stated is None or stated <= 0.0:
        return None, None, None
    ratio = sqrt(variance) / stated
    low = sqrt(degrees / chdtri(degrees, 0.025))
    high = sqrt(degrees / chdtri(degrees, 0.975))
    return ratio, ratio * low, ratio * high
