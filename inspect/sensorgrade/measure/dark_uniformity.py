"""Dark signal non-uniformity of each region, parted into row, column, pixel and shading."""

from dataclasses import dataclass

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.dark_current import dark_groups, stated_group
from sensorgrade.measure.spatial_noise import SpatialNoise, spatial_noise
from sensorgrade.measure.stage import Inputs, Stage
from sensorgrade.measure.uniformity_parts import part_measurements, part_quantities
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import quantity

QUANTITIES = part_quantities(
    "dsnu",
    "dark_shading",
    "electron",
    "the signal of the longest dark exposure, the fixed offset pattern included (EMVA 1288),",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkUniformityOptions:
    """Recipe keys under ``stages: dark_uniformity``."""

    exposure: float | None = quantity(
        "s", "Dark exposure to take, the nearest there is; omit for the longest", default=None
    )
    temperature: float | None = quantity(
        "deg_C",
        "Which darks to take when there are several temperatures; omit for those with the most"
        " frames",
        default=None,
        minimum=-273.0,
    )


@dataclass(frozen=True, slots=True)
class RegionDarkUniformity:
    """Parts [DN²] of one region, found at ``exposure`` [s]."""

    scope: str
    exposure: float | None
    noise: SpatialNoise
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class DarkUniformityResult:
    """Dark uniformity of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionDarkUniformity, ...]


def dark_uniformity(inputs: Inputs, options: DarkUniformityOptions) -> DarkUniformityResult:
    """DSNU [electron] of every region.

    Raises
    ------
    NotMeasured
        There is no stack of two or more darks, or no gain.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021 (DSNU1288 and its parts; from memory).
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_uniformity(inputs, region, options),
        stage="dark_uniformity",
        undecides=[q.name for q in QUANTITIES],
    )
    return DarkUniformityResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def _region_uniformity(
    inputs: Inputs, region: Region, options: DarkUniformityOptions
) -> RegionDarkUniformity:
    dark = _dark(inputs, options)
    gain = inputs.measured("conversion_gain", region.scope)
    noise = spatial_noise(dark, None, region, relative=False)
    measurements, findings = part_measurements(
        noise,
        QUANTITIES,
        scope=region.scope,
        stage="dark_uniformity",
        factor=gain.value,
        relative_error=gain.standard_uncertainty / gain.value,
    )
    return RegionDarkUniformity(region.scope, dark.stack.exposure, noise, measurements, findings)


def _dark(inputs: Inputs, options: DarkUniformityOptions) -> StackImage:
    """The dark stack to judge by."""
    groups = [
        kept
        for group in dark_groups(inputs)
        if (kept := tuple(image for image in group if image.frames > 1))
    ]
    if not groups:
        raise NotMeasured(
            "needs two or more darks taken alike, to part fixed pattern from noise; the set has"
            " none"
        )
    group = groups[stated_group(groups, options.temperature)]
    if options.exposure is None:
        return max(group, key=lambda image: image.stack.exposure or 0.0)
    wanted = options.exposure
    return min(group, key=lambda image: abs((image.stack.exposure or 0.0) - wanted))


STAGE = Stage("dark_uniformity", DarkUniformityOptions, dark_uniformity, QUANTITIES)
