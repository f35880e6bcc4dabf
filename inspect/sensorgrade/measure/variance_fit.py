"""Least squares of variance against signal, weighted by what the model says of its own scatter."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured

ITERATIONS = 8
REJECT = 6.0  # tiles whose variance is farther off, in standard errors, are left out
CELLS = 4096  # cells of signal in which tiles are joined before they are fitted


@dataclass(frozen=True, slots=True)
class VarianceFit:
    """V(s) = c0 + c1 s (+ c2 s²), with covariance of the coefficients.

    ``kept`` is the number of points used, ``chi_square`` is over those, ``degrees`` their number
    less that of coefficients. ``group_chi_square`` and ``group_degrees`` are the same of the means
    of groups (pairs of frames), which show errors that all tiles of a pair share.
    """

    coefficients: NDArray[np.float64]
    covariance: NDArray[np.float64]
    kept: int
    chi_square: float
    degrees: int
    group_chi_square: float
    group_degrees: int

    def at(self, signal: NDArray[np.float64]) -> NDArray[np.float64]:
        """The model's variance [DN²] at ``signal`` [DN]."""
        return _polynomial(self.coefficients, signal)


def variance_fit(
    signal: NDArray[np.float64],
    variance: NDArray[np.float64],
    degrees: NDArray[np.float64],
    *,
    order: int,
    group: NDArray[np.int64] | None = None,
) -> VarianceFit:
    """Fit a polynomial of ``order`` 1 or 2 (0: a constant) to sample variances.

    Parameters
    ----------
    signal : ndarray of shape (n,) [DN]
    variance : ndarray of shape (n,) [DN²]
        Sample variances of Gaussian samples.
    degrees : ndarray of shape (n,)
        Their degrees of freedom.
    order : int
    group : ndarray of shape (n,), optional
        Which pair of frames each point is from, counted from 0.

    Raises
    ------
    NotMeasured
        The points that agree with a curve lie at too few signals for it.

    Notes
    -----
    A sample variance with v degrees of freedom scatters by 2 V²/v. V is taken from the fitted
    model, never from the noisy point itself, which would favour points that fell low; the fit is
    repeated until the weights settle. This is the maximum-likelihood estimate for variances, so
    its covariance reaches the Cramér-Rao bound. Points of like signal are joined first, which
    changes nothing but the time it takes; then points more than six standard errors off the model
    are left out and the rest is fitted again.
    """
    fit = _fitted(*joined(signal, variance, degrees), order)
    model = _floored(_polynomial(fit[0], signal), variance)
    deviation = (variance - model) / model * np.sqrt(degrees / 2)
    kept = np.abs(deviation) <= REJECT
    if not kept.all():
        signal, variance, degrees = signal[kept], variance[kept], degrees[kept]
        deviation, model = deviation[kept], model[kept]
        group = None if group is None else group[kept]
        fit = _fitted(*joined(signal, variance, degrees), order)
    group_chi_square, group_degrees = 0.0, 0
    if group is not None:
        # The mean of a group in units of its standard error.
        root = np.sqrt(degrees) / model
        total = np.bincount(group, root**2)
        mean = np.bincount(group, root * deviation)[total > 0] / np.sqrt(total[total > 0])
        group_chi_square, group_degrees = float(mean @ mean), len(mean) - order - 1
    return VarianceFit(
        coefficients=fit[0],
        covariance=fit[1],
        kept=len(signal),
        chi_square=float(deviation @ deviation),
        degrees=len(signal) - order - 1,
        group_chi_square=group_chi_square,
        group_degrees=group_degrees,
    )


Points = tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]


def joined(
    signal: NDArray[np.float64], variance: NDArray[np.float64], degrees: NDArray[np.float64]
) -> Points:
    """Mean signal, mean variance and degrees of freedom of the points in each cell of signal."""
    low, high = float(signal.min()), float(signal.max())
    scale = (CELLS - 1) / max(high - low, 1e-300)
    cell = ((signal - low) * scale).astype(np.int64)
    total = np.bincount(cell, degrees).astype(np.float64)
    filled = total > 0
    total = total[filled]
    return (
        np.bincount(cell, degrees * signal)[filled] / total,
        np.bincount(cell, degrees * variance)[filled] / total,
        total,
    )


def _fitted(
    signal: NDArray[np.float64],
    variance: NDArray[np.float64],
    degrees: NDArray[np.float64],
    order: int,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Coefficients and their covariance."""
    if len(signal) <= order:
        raise NotMeasured(
            f"only {len(signal)} different signals are left of the flat pairs that agree with one"
            f" curve, which needs {order + 1}; take pairs at more levels"
        )
    scale = max(float(np.max(np.abs(signal))), 1.0)
    x = signal / scale
    basis = np.stack([x**power for power in range(order + 1)])
    model = _floored(variance.mean() * (0.02 + x) / (0.02 + x.mean()), variance)
    for _ in range(ITERATIONS):
        weighted = basis * (degrees / (2 * model**2))
        normal = weighted @ basis.T
        scaled = np.linalg.solve(normal, weighted @ variance)
        fitted = _floored(scaled @ basis, variance)
        settled = bool(np.all(np.abs(fitted - model) <= 1e-12 * model))
        model = fitted
        if settled:
            break
    powers = scale ** np.arange(order + 1)
    return scaled / powers, np.linalg.inv(normal) / np.outer(powers, powers)


def _floored(model: NDArray[np.float64], variance: NDArray[np.float64]) -> NDArray[np.float64]:
    """A model kept positive, so that it can be a weight."""
    floored: NDArray[np.float64] = np.maximum(model, 1e-6 * float(variance.mean()) + 1e-12)
    return floored


def _polynomial(
    coefficients: NDArray[np.float64], signal: NDArray[np.float64]
) -> NDArray[np.float64]:
    value = np.full(np.shape(signal), coefficients[-1])
    for coefficient in coefficients[-2::-1]:
        value *= signal
        value += coefficient
    return value
