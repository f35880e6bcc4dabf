"""Laws of charge traps fitted: pumped charge against dwell time, emission time against warmth."""

from dataclasses import dataclass
from math import exp, log, sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.silicon import BOLTZMANN, SPECIES, emission_rate_factor

Floats = NDArray[np.float64]
ROUNDS = 40
LARGEST_STEP = 0.4  # of ln tau in one round
FARTHEST = 10.0  # that tau goes below the shortest or above the longest time
LEAST = 1e-100  # determinant of a trap whose times say nothing of its tau


def pumped_share(time: Floats | float, window: float) -> Floats:
    """Share of cycles that carry an electron, exp(-x) - exp(-window x) with x = t / tau.

    The trap's electron joins the neighbouring packet when it is emitted between one dwell time
    and ``window`` dwell times after it was captured; three phases give a window of 2.
    """
    x = np.asarray(time, dtype=np.float64)
    share: Floats = np.exp(-x) - np.exp(-window * x)
    return share


def pumped_share_slope(time: Floats, window: float) -> Floats:
    """Derivative of `pumped_share` with ln tau."""
    slope: Floats = time * np.exp(-time) - window * time * np.exp(-window * time)
    return slope


@dataclass(frozen=True, slots=True)
class EmissionFits:
    """Of K traps: ``tau`` (K,) in the unit of the times, ``capture`` (K,) probability.

    ``tau_relative`` and ``capture_uncertainty`` (K,) are standard uncertainties, the first as a
    share of tau.
    """

    tau: Floats
    tau_relative: Floats
    capture: Floats
    capture_uncertainty: Floats


def emission_fits(
    amplitude: Floats,
    times: Floats,
    cycles: Floats,
    precision: Floats,
    *,
    tau: Floats,
    window: float,
) -> EmissionFits:
    """Fit I = N Pc (exp(-t/tau) - exp(-window t/tau)) to each trap, from guesses of tau.

    Parameters
    ----------
    amplitude : ndarray of shape (K, S) [electron]
    times : ndarray of shape (S,)
    cycles : ndarray of shape (S,)
    precision : ndarray of shape (S, S) [1/electron²]
        Inverse of the amplitudes' covariance, the same for all traps.
    tau : ndarray of shape (K,)
        Where to start.

    Notes
    -----
    Gauss-Newton on (Pc, ln tau), steps of ln tau held to 0.4. The covariance is the inverse of
    Fisher's matrix at the solution.
    """
    log_tau = np.log(tau)
    bounds = np.log(times.min() / FARTHEST), np.log(times.max() * FARTHEST)
    for _ in range(ROUNDS):
        x = times / np.exp(log_tau)[:, None]
        f = cycles * pumped_share(x, window)
        slope = cycles * pumped_share_slope(x, window)
        weighted = f @ precision
        norm = (weighted * f).sum(axis=1)
        capture = (weighted * amplitude).sum(axis=1) / norm
        fisher, force = _fisher(
            f, capture[:, None] * slope, amplitude - capture[:, None] * f, precision
        )
        determinant = np.maximum(fisher[0] * fisher[2] - fisher[1] ** 2, LEAST)
        step = (fisher[0] * force[1] - fisher[1] * force[0]) / determinant
        log_tau = np.clip(log_tau + np.clip(step, -LARGEST_STEP, LARGEST_STEP), *bounds)
        if np.abs(step).max(initial=0.0) < 1e-10:
            break
    return EmissionFits(
        tau=np.exp(log_tau),
        tau_relative=np.sqrt(fisher[0] / determinant),
        capture=capture,
        capture_uncertainty=np.sqrt(fisher[2] / determinant),
    )


def _fisher(
    first: Floats, second: Floats, residual: Floats, precision: Floats
) -> tuple[tuple[Floats, Floats, Floats], tuple[Floats, Floats]]:
    """Elements (11, 12, 22) of Fisher's matrix of each trap, and the two scores."""
    a, b = first @ precision, second @ precision
    return (
        ((a * first).sum(axis=1), (a * second).sum(axis=1), (b * second).sum(axis=1)),
        ((a * residual).sum(axis=1), (b * residual).sum(axis=1)),
    )


@dataclass(frozen=True, slots=True)
class Energy:
    """``energy`` [eV] below the conduction band, ``cross_section`` [cm²], and their doubt."""

    energy: float
    standard_uncertainty: float
    cross_section: float
    cross_section_relative: float


def trap_energy(temperature: Floats, tau: Floats, tau_relative: Floats) -> Energy:
    """Energy and cross-section from emission times at two or more temperatures.

    Parameters
    ----------
    temperature : ndarray of shape (T,) [K]
    tau : ndarray of shape (T,) [s]
    tau_relative : ndarray of shape (T,)
        Relative standard uncertainties.

    Notes
    -----
    tau T² = exp(E / kT) / (gamma sigma) (Shockley, Read, Hall), so ln(tau T²) against 1 / kT is a
    line of slope E; leaving T² out would make E too large by about 2 kT. The cross-section stands
    for the electron masses of `silicon.emission_rate_factor`; others move it by up to 7 times.
    """
    x = 1 / (BOLTZMANN.value * temperature)
    y = np.log(tau * temperature**2)
    weight = 1 / tau_relative**2
    centre = float(weight @ x / weight.sum())
    spread = float(weight @ (x - centre) ** 2)
    slope = float(weight @ ((x - centre) * y)) / spread
    intercept = float(weight @ y / weight.sum()) - slope * centre
    return Energy(
        energy=slope,
        standard_uncertainty=1 / sqrt(spread),
        cross_section=exp(-intercept - log(emission_rate_factor())),
        cross_section_relative=sqrt(1 / float(weight.sum()) + centre**2 / spread),
    )


def candidates(energy: float, standard_uncertainty: float) -> tuple[tuple[str, float], ...]:
    """Known species by distance from ``energy`` in standard deviations, nearest first.

    A species' own doubt is that of a rectangular distribution over its published range.
    """
    found = []
    for species in SPECIES:
        low, high = species.energy_range
        doubt = sqrt(standard_uncertainty**2 + (high - low) ** 2 / 12)
        found.append((species.name, abs(energy - (low + high) / 2) / doubt))
    return tuple(sorted(found, key=lambda one: one[1]))
