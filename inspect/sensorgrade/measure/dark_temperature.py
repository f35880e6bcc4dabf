"""Dark current against temperature: activation energy and doubling step."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import log, sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade import silicon
from sensorgrade.measurement import Measurement


@dataclass(frozen=True, slots=True)
class TemperatureLaw:
    """ln D = c + 3/2 ln T - f Eg(T)/kT, fitted; D relative to its value at ``at`` [degC].

    ``fraction`` f is 1/2 for generation in the depleted silicon, near 1 for diffusion.
    ``temperature`` [degC] and ``logarithm`` are the points (ln of DN/s), ``fitted`` the law there.
    ``energy`` [eV] is -d ln D / d(1/kT) at ``at``, ``doubling`` [K] ln 2 over d ln D / dT there.
    """

    at: float
    temperature: NDArray[np.float64]
    logarithm: NDArray[np.float64]
    fitted: NDArray[np.float64]
    fraction: float
    fraction_error: float
    energy: float
    energy_error: float
    doubling: float
    doubling_error: float

    def measurements(self, scope: str) -> tuple[Measurement, ...]:
        """Activation energy [eV] and doubling step [K] as measurements."""
        n = len(self.temperature)
        return (
            Measurement("activation_energy", scope, self.energy, self.energy_error, "eV", n),
            Measurement("doubling_step", scope, self.doubling, self.doubling_error, "K", n),
        )


def temperature_law(
    celsius: Sequence[float],
    current: Sequence[float],
    error: Sequence[float],
    *,
    at: float,
) -> TemperatureLaw:
    """The law of dark current through three or more temperatures.

    Parameters
    ----------
    celsius : sequence of float [degC]
    current, error : sequences of float, any one unit
    at : float [degC]
        Where slope and doubling step are stated.

    Notes
    -----
    T^1.5 and the narrowing of the gap are in the model: a straight line of ln D against 1/kT
    through data that follow half the gap returns 0.63 eV at room temperature, not 0.56 eV, and
    cannot be continued. The errors are those of the currents, widened by the misfit.

    References
    ----------
    J. R. Janesick, Scientific Charge-Coupled Devices, SPIE Press 2001, chapter 7.
    R. Widenhorn et al., Proc. SPIE 4669 (2002) 193 (diffusion and depletion currents).
    """
    kelvin = np.asarray(celsius, dtype=np.float64) + silicon.ZERO_CELSIUS
    value = np.log(np.asarray(current, dtype=np.float64))
    relative = np.asarray(error, dtype=np.float64) / np.asarray(current, dtype=np.float64)
    y = value - 1.5 * np.log(kelvin)
    x = -silicon.dark_current_band_gap(kelvin) / (silicon.BOLTZMANN.value * kelvin)
    weight = 1 / np.maximum(relative, 1e-12) ** 2
    centre = float(weight @ x / weight.sum())
    lever = float(weight @ (x - centre) ** 2)
    fraction = float(weight @ ((x - centre) * y)) / lever
    intercept = float(weight @ y / weight.sum()) - fraction * centre
    misfit = float(weight @ (y - intercept - fraction * x) ** 2) / (len(y) - 2)
    fraction_error = sqrt(max(misfit, 1.0) / lever)
    here = at + silicon.ZERO_CELSIUS
    thermal = 1.5 * silicon.BOLTZMANN.value * here
    # The generation law's slope is half of Eg - T dEg/dT, plus 3/2 kT.
    bracket = 2 * (silicon.generation_slope(here) - thermal)
    energy = fraction * bracket + thermal
    energy_error = fraction_error * bracket
    doubling = log(2) * silicon.BOLTZMANN.value * here**2 / energy
    return TemperatureLaw(
        at=at,
        temperature=np.asarray(celsius, dtype=np.float64),
        logarithm=value,
        fitted=intercept + fraction * x + 1.5 * np.log(kelvin),
        fraction=fraction,
        fraction_error=fraction_error,
        energy=energy,
        energy_error=energy_error,
        doubling=doubling,
        doubling_error=doubling * energy_error / energy,
    )
