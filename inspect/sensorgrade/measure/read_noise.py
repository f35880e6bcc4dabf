"""Read noise of each region, from pairs of bias frames."""

from dataclasses import dataclass
from math import hypot, sqrt

import numpy as np

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import PairTiles
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.pair_points import points_of
from sensorgrade.measure.photon_transfer import RESOLVABLE_VARIANCE, ROUNDING_VARIANCE
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement

QUANTITIES = (
    Quantity(
        "read_noise",
        "electron",
        "Noise of one sample without light, from differences of bias pairs over tiles of 32 x 32"
        " pixels: pixel, row and column noise and pickup within a tile included; fixed pattern,"
        " drift of the level and rounding to whole DN taken out",
    ),
    Quantity("read_noise_dn", "DN", "The same before it is turned into electrons"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class ReadNoiseOptions:
    """Recipe keys under ``stages: read_noise``; there are none."""


@dataclass(frozen=True, slots=True)
class RegionReadNoise:
    """Variance of one sample [DN²] with standard error, rounding included."""

    scope: str
    variance: float
    standard_error: float
    degrees: int
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class ReadNoiseResult:
    """Read noise of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionReadNoise, ...]


def read_noise(inputs: Inputs, options: ReadNoiseOptions) -> ReadNoiseResult:
    """Read noise [electron] of every region.

    Raises
    ------
    NotMeasured
        There are no bias pairs, no gain, or rounding hides the noise.

    Notes
    -----
    variance = mean over tiles of var(A - B) / 2, less 1/12 DN² for rounding. Line noise is shared
    by the samples of a row, so its part of the uncertainty counts rows, not pixels.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021 (0.24 DN² as the least resolvable variance).
    """
    regions, missing = by_region(
        inputs,
        lambda region: region_read_noise(inputs, region),
        stage="read_noise",
        undecides=[q.name for q in QUANTITIES],
    )
    return ReadNoiseResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing + tuple(f for region in regions for f in region.findings),
        regions=regions,
    )


def region_read_noise(inputs: Inputs, region: Region) -> RegionReadNoise:
    """Read noise of one region; raises NotMeasured as `read_noise` does."""
    points = points_of(inputs, region, kind="bias")
    if not points:
        raise NotMeasured("needs two or more bias frames, which the set does not have")
    variances = np.concatenate([p.variance for p in points])
    weights = np.concatenate([p.degrees for p in points])
    variance = float(np.average(variances, weights=weights))
    degrees = int(weights.sum())
    error = hypot(variance * sqrt(2 / degrees), _line_error(inputs, region, variance))
    gain = inputs.measured("conversion_gain", region.scope)
    if variance < RESOLVABLE_VARIANCE:
        limit = 0.4 * gain.value
        raise NotMeasured(
            f"read noise is below {limit:.2g} electron: its variance of {variance:.3g} DN² is less"
            f" than the {RESOLVABLE_VARIANCE} DN² that whole-DN steps can show"
        )
    noise_dn = sqrt(variance - ROUNDING_VARIANCE)
    error_dn = error / (2 * noise_dn)
    value = noise_dn * gain.value
    doubt = hypot(error_dn * gain.value, noise_dn * gain.standard_uncertainty)
    found = Measurement("read_noise", region.scope, value, doubt, "electron", degrees)
    return RegionReadNoise(
        scope=region.scope,
        variance=variance,
        standard_error=error,
        degrees=degrees,
        measurements=(
            found,
            Measurement("read_noise_dn", region.scope, noise_dn, error_dn, "DN", degrees),
        ),
        findings=_against_intercept(inputs, found),
    )


def bias_pairs(inputs: Inputs, region: Region) -> tuple[PairTiles, ...]:
    """The bias pairs of a region."""
    return tuple(
        pairs
        for pairs in inputs.reduced.pairs
        if pairs.stack.kind == "bias" and pairs.region.scope == region.scope
    )


def _line_error(inputs: Inputs, region: Region, variance: float) -> float:
    """Standard error of the variance [DN²] that row and column noise add."""
    rows = len(range(region.rows.start, region.rows.stop, region.rows.step or 1))
    columns = len(range(region.columns.start, region.columns.stop, region.columns.step or 1))
    squares = 0.0
    pairs = bias_pairs(inputs, region)
    count = sum(len(p.row_variance) for p in pairs)
    for lines, across, along in (
        ([p.row_variance for p in pairs], columns, rows),
        ([p.column_variance for p in pairs], rows, columns),
    ):
        excess = float(np.concatenate(lines).mean()) / 2 - variance / across
        squares += max(excess, 0.0) ** 2 * 2 / (count * max(along - 1, 1))
    return sqrt(squares)


def _against_intercept(inputs: Inputs, found: Measurement) -> tuple[Finding, ...]:
    """A finding when bias pairs and the flats' intercept differ beyond their uncertainty."""
    try:
        intercept = inputs.measured("read_noise_intercept", found.scope)
    except NotMeasured:
        return ()
    doubt = hypot(found.standard_uncertainty, intercept.standard_uncertainty)
    if abs(found.value - intercept.value) <= 4 * doubt:
        return ()
    return (
        Finding(
            severity="warning",
            where=f"read_noise, {found.scope}",
            seen=(
                f"bias pairs give {found.value:.3g} electron, flat pairs continued to zero signal"
                f" {intercept.value:.3g} electron, which differ by more than four times their"
                f" uncertainty of {doubt:.2g}"
            ),
            remedy="look for noise that comes with exposure or light, or a response that bends",
        ),
    )


STAGE = Stage("read_noise", ReadNoiseOptions, read_noise, QUANTITIES)
