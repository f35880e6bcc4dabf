"""A dark current measured at one temperature, held against a limit stated for another."""

from collections.abc import Mapping
from dataclasses import replace
from math import exp, hypot, log, sqrt

from sensorgrade import silicon
from sensorgrade.grading.selection import Reading
from sensorgrade.measurement import Measurement

# Measured by the dark current stage: the sensor's temperature while darks were taken [deg_C], and
# the slope -d ln D / d(1/kT) [eV] where darks at several temperatures allow it.
TEMPERATURE = "dark_temperature"
ENERGY = "activation_energy"
TRANSLATED = ("dark_current",)


def at_temperature(
    reading: Reading,
    named: Mapping[str, list[Reading]],
    *,
    celsius: float,
    tolerance: float,
) -> Reading | str:
    """``reading`` as it would be at ``celsius`` [degC], or the sentence why that is not known.

    Parameters
    ----------
    reading : Measurement or DefectCount
    named : mapping
        All readings of the device by name; the temperature of the darks and the activation
        energy are looked up there, for the reading's own scope first, else for the device.
    celsius : float [degC]
    tolerance : float [K]
        Temperatures that differ by less are taken alike for what has no law of its own.

    Notes
    -----
    ln D = c + 3/2 ln T - f Eg(T)/kT, with f = 1/2 for generation in the depleted silicon and f = 1
    (3/2 ln T doubled too) for diffusion. An activation energy -d ln D / d(1/kT) measured at T1
    gives f, and its uncertainty goes through to the other temperature, as does that of T1.
    Without one, the change L of ln D lies between generation's and diffusion's, which is exactly
    twice that: the middle is used, with the standard uncertainty of a rectangular distribution
    (JCGM 100:2008, 4.3.7). The uncertainty is that of the logarithm, good to second order.
    """
    measured = _of_same_scope(named.get(TEMPERATURE, []), reading.scope)
    name = reading.name if isinstance(reading, Measurement) else reading.kind
    if measured is None:
        return "the temperature of the frames is not known"
    apart = celsius - measured.value
    if name not in TRANSLATED or not isinstance(reading, Measurement):
        if abs(apart) <= tolerance:
            return reading
        return (
            f"it was measured at {measured.value:.1f} degC and has no law that translates it"
            f" to {celsius:g} degC"
        )
    energy = _of_same_scope(named.get(ENERGY, []), reading.scope)
    change, doubt = _change_of_logarithm(measured, energy, celsius)
    ratio = exp(change)
    return replace(
        reading,
        value=reading.value * ratio,
        standard_uncertainty=ratio * hypot(reading.standard_uncertainty, reading.value * doubt),
    )


def _change_of_logarithm(
    measured: Measurement, energy: Measurement | None, celsius: float
) -> tuple[float, float]:
    """Change of ln D from the measured temperature to ``celsius``, and its uncertainty."""
    first = measured.value + silicon.ZERO_CELSIUS
    second = celsius + silicon.ZERO_CELSIUS
    generation = log(silicon.dark_current_ratio(second, first))
    if energy is not None:
        thermal = 1.5 * silicon.BOLTZMANN.value * first
        powers = 1.5 * log(second / first)
        per_energy = (generation - powers) / (silicon.generation_slope(first) - thermal)
        change = powers + per_energy * (energy.value - thermal)
        slope = energy.value
        doubt = abs(per_energy) * energy.standard_uncertainty
    else:
        change = 1.5 * generation
        slope = 1.5 * silicon.generation_slope(first)
        doubt = abs(generation) / (2.0 * sqrt(3.0))
    by_temperature = slope / (silicon.BOLTZMANN.value * first**2) * measured.standard_uncertainty
    return change, hypot(doubt, by_temperature)


def _of_same_scope(readings: list[Reading], scope: str) -> Measurement | None:
    """The measurement for that scope, else the one for the device."""
    found = {reading.scope: reading for reading in readings if isinstance(reading, Measurement)}
    return found.get(scope) or found.get("device")
