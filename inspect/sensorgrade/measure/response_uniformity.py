"""Photo response non-uniformity of each region and wavelength, parted like the dark one."""

from dataclasses import dataclass

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.spatial_noise import SpatialNoise, spatial_noise
from sensorgrade.measure.stage import Inputs, Stage
from sensorgrade.measure.uniformity_parts import part_measurements, part_quantities
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import quantity

SAME_EXPOSURE = 0.05  # relative; a dark of such an exposure is subtracted, else the bias
NEAR_SATURATION = 0.95  # of saturation; brighter flats are not used

QUANTITIES = part_quantities(
    "prnu",
    "response_shading",
    "%",
    "the response to light over its local level",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseUniformityOptions:
    """Recipe keys under ``stages: response_uniformity``."""

    level: float = quantity(
        "%", "Signal to judge by, of saturation; the nearest flat is taken", default=50.0
    )


@dataclass(frozen=True, slots=True)
class RegionResponseUniformity:
    """Parts (relative) of one region at one wavelength, found at ``signal`` [DN] above bias."""

    scope: str
    signal: float
    noise: SpatialNoise
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class ResponseUniformityResult:
    """Response uniformity of every region and wavelength."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionResponseUniformity, ...]


def response_uniformity(
    inputs: Inputs, options: ResponseUniformityOptions
) -> ResponseUniformityResult:
    """PRNU [%] of every region, and of every wavelength where the flats have several.

    Raises
    ------
    NotMeasured
        There is no stack of two or more flats below saturation with a level without light.

    Notes
    -----
    Dark (or bias) is subtracted pixel by pixel, and departures are taken over the smooth surface
    of the light, so neither dark pattern nor the lamp's shape is in it. The shading is lamp and
    sensor together: flats cannot part them.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021 (PRNU1288 and its parts; from memory).
    """
    found, missing = by_region(
        inputs,
        lambda region: _region_uniformity(inputs, region, options),
        stage="response_uniformity",
        undecides=[q.name for q in QUANTITIES],
    )
    regions = tuple(one for several in found for one in several)
    return ResponseUniformityResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def _region_uniformity(
    inputs: Inputs, region: Region, options: ResponseUniformityOptions
) -> tuple[RegionResponseUniformity, ...]:
    flats = [image for image in inputs.reduced.flats if image.frames > 1]
    if not flats:
        raise NotMeasured("needs two or more flats taken alike, which the set does not have")
    wavelengths = sorted({image.stack.wavelength for image in flats}, key=str)
    found = []
    for wavelength in wavelengths:
        alike = [image for image in flats if image.stack.wavelength == wavelength]
        chosen = _nearest(inputs, region, alike, options.level / 100)
        if chosen is None:
            continue
        flat, base = chosen
        noise = spatial_noise(flat, base, region, relative=True)
        scope = region.scope
        if len(wavelengths) > 1:
            scope = f"{scope}, {wavelength_label(wavelength)}"
        measurements, findings = part_measurements(
            noise,
            QUANTITIES,
            scope=scope,
            stage="response_uniformity",
            factor=100.0,
            relative_error=0.0,
        )
        found.append(RegionResponseUniformity(scope, noise.mean, noise, measurements, findings))
    if not found:
        raise NotMeasured("every stack of flats is saturated; take one at half of saturation")
    return tuple(found)


def wavelength_label(wavelength: str | None) -> str:
    """How scopes name a wavelength: with nm where it is a number, else as the files have it."""
    if wavelength is None:
        return "no wavelength"
    try:
        return f"{float(wavelength):g} nm"
    except ValueError:
        return wavelength


def _nearest(
    inputs: Inputs, region: Region, flats: list[StackImage], share: float
) -> tuple[StackImage, StackImage | None] | None:
    """The flat nearest the wanted level, and what is subtracted; None when all are saturated."""
    cut = region.rows, region.columns
    levels = []
    for flat in flats:
        base = _base(inputs, region, flat)
        dark = 0.0 if base is None else float(base.mean[cut][::8, ::8].mean())
        levels.append((float(flat.mean[cut][::8, ::8].mean()) - dark, flat, base))
    try:
        top = (
            inputs.measured("saturation_capacity", region.scope).value
            / inputs.measured("conversion_gain", region.scope).value
        )
    except NotMeasured:
        # Saturation was not reached, so half of what was reached is no better than all of it.
        _, flat, base = max(levels, key=lambda entry: entry[0])
        return flat, base
    below = [entry for entry in levels if 0 < entry[0] < NEAR_SATURATION * top]
    if not below:
        return None
    _, flat, base = min(below, key=lambda entry: abs(entry[0] - share * top))
    return flat, base


def _base(inputs: Inputs, region: Region, flat: StackImage) -> StackImage | None:
    """A dark of the flat's exposure, else the bias, else None where an overscan was subtracted."""
    exposure = flat.stack.exposure
    for dark in inputs.reduced.darks:
        time = dark.stack.exposure
        if exposure and time and abs(time / exposure - 1) < SAME_EXPOSURE and dark.frames > 1:
            return dark
    if inputs.reduced.bias is not None:
        return inputs.reduced.bias
    output = next(o for o in inputs.reduced.geometry.outputs if o.name == region.output)
    if output.overscan is None:
        raise NotMeasured(
            "needs bias frames, darks or an overscan, to know the level without light"
        )
    return None


STAGE = Stage("response_uniformity", ResponseUniformityOptions, response_uniformity, QUANTITIES)
