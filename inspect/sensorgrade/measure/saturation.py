"""Saturation capacity, what ends it, and the figures that follow: dynamic range, best SNR."""

from dataclasses import dataclass
from math import hypot, log, log10, sqrt

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.pair_points import points_of
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measure.variance_curve import VarianceCurve, variance_curve, variance_peak
from sensorgrade.measurement import Finding, Measurement

DECIBEL = 20 / log(10)  # dB for a relative change of 1

QUANTITIES = (
    Quantity(
        "saturation_capacity",
        "electron",
        "Signal at which the temporal variance of flats is greatest: full well, or the converter's"
        " end where that comes first",
    ),
    Quantity(
        "dynamic_range",
        "dB",
        "Saturation capacity over the signal whose signal-to-noise ratio is 1",
    ),
    Quantity(
        "maximum_snr", "dB", "Signal-to-noise ratio of one pixel at saturation, shot noise alone"
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class SaturationOptions:
    """Recipe keys under ``stages: saturation``; there are none."""


@dataclass(frozen=True, slots=True)
class RegionSaturation:
    """``level`` [DN] above bias where the variance peaks; ``limit`` "full well" or "converter"."""

    scope: str
    curve: VarianceCurve
    level: float
    limit: str
    measurements: tuple[Measurement, ...]


@dataclass(frozen=True, slots=True)
class SaturationResult:
    """Saturation of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionSaturation, ...]


def saturation(inputs: Inputs, options: SaturationOptions) -> SaturationResult:
    """Saturation capacity [electron], dynamic range and maximum SNR [dB] of every region.

    Raises
    ------
    NotMeasured
        There are no flat pairs, no gain, or no flat is bright enough.

    Notes
    -----
    The variance rises with signal until pixels hit a limit, then collapses. The peak lies within
    one step of light of the last level on the rise; the middle of where it can lie is stated, with
    the uncertainty of a rectangular distribution (JCGM 100:2008, 4.3.7), so it is the finer the
    closer the levels are. Pixels that are all full show a level some three deviations of their
    noise higher.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021 (saturation at the variance's maximum, dynamic
    range, SNR; from memory).
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_saturation(inputs, region),
        stage="saturation",
        undecides=[q.name for q in QUANTITIES],
    )
    return SaturationResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing,
        regions=regions,
    )


def _region_saturation(inputs: Inputs, region: Region) -> RegionSaturation:
    flats = points_of(inputs, region, kind="flat")
    if not flats:
        raise NotMeasured("needs flat pairs at several levels, the set has none")
    gain = inputs.measured("conversion_gain", region.scope)
    curve = variance_curve(flats)
    peak = variance_peak(curve)
    if peak is None:
        brightest = float(curve.signal.max()) * gain.value
        raise NotMeasured(
            f"the variance still rises at the brightest flat of {brightest:.0f} electron; take"
            " pairs up to light that saturates"
        )
    level = (peak.lower + peak.upper) / 2
    spread = (peak.upper - peak.lower) / sqrt(12)
    capacity = level * gain.value
    doubt = hypot(spread * gain.value, level * gain.standard_uncertainty)
    found = [
        Measurement(
            "saturation_capacity", region.scope, capacity, doubt, "electron", len(curve.signal)
        ),
        Measurement(
            "maximum_snr",
            region.scope,
            10 * log10(capacity),
            DECIBEL / 2 * doubt / capacity,
            "dB",
            len(curve.signal),
        ),
    ]
    try:
        noise = inputs.measured("read_noise", region.scope)
    except NotMeasured:
        pass  # no read noise, no dynamic range; its own stage has said why
    else:
        least, least_doubt = least_signal(noise, gain)
        found.append(
            Measurement(
                "dynamic_range",
                region.scope,
                20 * log10(capacity / least),
                DECIBEL * hypot(doubt / capacity, least_doubt / least),
                "dB",
                len(curve.signal),
            )
        )
    return RegionSaturation(region.scope, curve, level, peak.limit, tuple(found))


def least_signal(noise: Measurement, gain: Measurement) -> tuple[float, float]:
    """Signal [electron] whose signal-to-noise ratio is 1, and its standard uncertainty.

    Parameters
    ----------
    noise : Measurement [electron], without rounding
    gain : Measurement [electron/DN]

    Notes
    -----
    sqrt(noise² + gain²/12 + 1/4) + 1/2 (EMVA 1288: absolute sensitivity threshold).
    """
    root = sqrt(noise.value**2 + gain.value**2 / 12 + 0.25)
    return root + 0.5, noise.value / root * noise.standard_uncertainty


STAGE = Stage("saturation", SaturationOptions, saturation, QUANTITIES)
