"""Least squares of variance against signal, weighted by what the model says of its own scatter."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

ITERATIONS = 8
REJECT = 6.0  # tiles whose variance is farther off, in standard errors, are left out


@dataclass(frozen=True, slots=True)
class VarianceFit:
    """V(s) = c0 + c1 s (+ c2 s²), with covariance of the coefficients.

    ``kept`` marks the points used, ``chi_square`` is over those, ``degrees`` their number less
    that of coefficients.
    """

    coefficients: NDArray[np.float64]
    covariance: NDArray[np.float64]
    kept: NDArray[np.bool_]
    chi_square: float
    degrees: int

    def at(self, signal: NDArray[np.float64]) -> NDArray[np.float64]:
        """The model's variance [DN²] at ``signal`` [DN]."""
        powers = np.arange(len(self.coefficients))
        variance: NDArray[np.float64] = signal[..., None] ** powers @ self.coefficients
        return variance


def variance_fit(
    signal: NDArray[np.float64],
    variance: NDArray[np.float64],
    degrees: NDArray[np.float64],
    *,
    order: int,
) -> VarianceFit:
    """Fit a polynomial of ``order`` 1 or 2 (0: a constant) to sample variances.

    Parameters
    ----------
    signal : ndarray of shape (n,) [DN]
    variance : ndarray of shape (n,) [DN²]
        Sample variances of Gaussian samples.
    degrees : ndarray of shape (n,)
        Their degrees of freedom.

    Notes
    -----
    A sample variance with v degrees of freedom scatters by 2 V²/v. V is taken from the fitted
    model, never from the noisy point itself, which would favour points that fell low; the fit is
    repeated until the weights settle. This is the maximum-likelihood estimate for variances, so
    its covariance reaches the Cramér-Rao bound.
    """
    scale = max(float(np.max(np.abs(signal), initial=0.0)), 1.0)
    x = signal / scale
    basis = np.stack([x**power for power in range(order + 1)])
    floor = 1e-6 * float(np.median(variance)) + 1e-12
    model = np.maximum(variance.mean() * (0.02 + x) / (0.02 + x.mean()), floor)
    kept = np.ones(len(signal), dtype=bool)
    for iteration in range(ITERATIONS):
        weight = np.where(kept, degrees / (2 * model**2), 0.0)
        weighted = basis * weight
        normal = weighted @ basis.T
        scaled = np.linalg.solve(normal, weighted @ variance)
        fitted = np.maximum(scaled @ basis, floor)
        settled = bool(np.all(np.abs(fitted - model) <= 1e-10 * model))
        model = fitted
        if settled:
            break
        if iteration >= 2:
            kept = np.abs(variance - model) <= REJECT * model * np.sqrt(2 / degrees)
    deviation = (variance - model)[kept] / (model * np.sqrt(2 / degrees))[kept]
    powers = scale ** np.arange(order + 1)
    return VarianceFit(
        coefficients=scaled / powers,
        covariance=np.linalg.inv(normal) / np.outer(powers, powers),
        kept=kept,
        chi_square=float(deviation @ deviation),
        degrees=int(kept.sum()) - order - 1,
    )
