"""Risks of a decision rule over a whole process: who is wronged, and how often."""

from dataclasses import dataclass
from math import inf

import numpy as np
from scipy.special import ndtr


@dataclass(frozen=True, slots=True)
class Risks:
    """Shares of all devices.

    ``conforming`` are truly within the limits; ``consumer`` are accepted though they are not;
    ``producer`` are rejected though they are.
    """

    conforming: float
    consumer: float
    producer: float


def global_risks(
    mean: float,
    spread: float,
    standard_uncertainty: float,
    *,
    lower: float = -inf,
    upper: float = inf,
    accept_above: float = -inf,
    accept_below: float = inf,
) -> Risks:
    """Risks when devices are normal about ``mean`` and readings normal about the true value.

    Parameters
    ----------
    mean, spread : float
        Mean and standard deviation of the true values of the process.
    standard_uncertainty : float
        Of a reading, in the same unit; 0 for a perfect one.
    lower, upper : float
        The limits.
    accept_above, accept_below : float
        A device is accepted when its reading lies between them.

    Notes
    -----
    Integral over the true value t of the process density times the probability that its reading
    falls in the acceptance interval, by Gauss-Legendre rules between the limits and beyond them,
    cut at 9 standard deviations of the process.

    References
    ----------
    .. [1] JCGM 106:2012, clause 9.
    """

    def accepted(low: float, high: float) -> tuple[float, float]:
        """Share of all devices with true value in (low, high), and of those accepted."""
        low, high = max(low, mean - 9 * spread), min(high, mean + 9 * spread)
        if low >= high:
            return 0.0, 0.0
        share = float(ndtr((high - mean) / spread) - ndtr((low - mean) / spread))
        if standard_uncertainty == 0.0:
            low, high = max(low, accept_above), min(high, accept_below)
            inside = float(ndtr((high - mean) / spread) - ndtr((low - mean) / spread))
            return share, max(0.0, inside)
        # Pieces no longer than the narrower of the two distributions, so that each is smooth.
        pieces = int(np.ceil((high - low) / min(spread, standard_uncertainty)))
        edges = np.linspace(low, high, min(pieces, 100_000) + 1)
        half = np.diff(edges)[:, None] / 2
        true = edges[:-1, None] + half * (1 + NODES)
        density = np.exp(-(((true - mean) / spread) ** 2) / 2) / (spread * np.sqrt(2 * np.pi))
        inside = ndtr((accept_below - true) / standard_uncertainty) - ndtr(
            (accept_above - true) / standard_uncertainty
        )
        return share, float(np.sum(half * WEIGHTS * density * inside))

    within, within_accepted = accepted(lower, upper)
    _below, below_accepted = accepted(-inf, lower)
    _above, above_accepted = accepted(upper, inf)
    return Risks(
        conforming=within,
        consumer=below_accepted + above_accepted,
        producer=within - within_accepted,
    )


NODES, WEIGHTS = np.polynomial.legendre.leggauss(8)
