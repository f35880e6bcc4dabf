"""Dark current of each region: mean and variance against exposure, and over the pixels."""

from dataclasses import dataclass
from math import hypot, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.dark_temperature import TemperatureLaw, temperature_law
from sensorgrade.measure.frame_levels import offset_scatter
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import quantity

ALIKE = 2.0  # K, stacks whose temperatures differ by less are joined
SAMPLES = 1 << 18  # pixels whose order statistics are taken
BULK_BINS = 100  # of the histogram; its tail has as many
BULK_REACH = 7.0  # standard deviations to each side
UNLIKELY = 0.01

QUANTITIES = (
    Quantity(
        "dark_current",
        "electron / s",
        "Mean over all pixels, from the rise of the dark level with exposure",
    ),
    Quantity(
        "dark_current_from_variance",
        "electron / s",
        "The same from the rise of the temporal variance with exposure; holds where the camera"
        " clamps its black level",
    ),
    Quantity("dark_current_median", "electron / s", "Median over pixels"),
    Quantity("dark_current_99", "electron / s", "What 99 % of the pixels do not exceed"),
    Quantity("dark_temperature", "deg_C", "Sensor temperature that the dark current holds for"),
    Quantity(
        "activation_energy",
        "eV",
        "-d ln D / d(1/kT) of the dark current at that temperature, from darks at three or more"
        " temperatures",
    ),
    Quantity("doubling_step", "K", "Rise of temperature that doubles the dark current, there"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkCurrentOptions:
    """Recipe keys under ``stages: dark_current``."""

    temperature: float | None = quantity(
        "deg_C",
        "Which darks to state the current of, when there are several temperatures; omit for those"
        " with the most frames",
        default=None,
        minimum=-273.0,
    )


@dataclass(frozen=True, slots=True)
class Rise:
    """A straight line through values at several exposures: y = offset + slope t."""

    exposure: NDArray[np.float64]
    value: NDArray[np.float64]
    standard_error: NDArray[np.float64]
    offset: float
    slope: float
    slope_error: float


@dataclass(frozen=True, slots=True)
class DarkGroup:
    """Darks of one temperature [degC] (None when unknown): rises of mean [DN], variance [DN²]."""

    temperature: float | None
    temperature_error: float
    mean: Rise
    variance: Rise | None
    frames: int


@dataclass(frozen=True, slots=True)
class RegionDarkCurrent:
    """Dark current of one region.

    ``groups`` by temperature, ``stated`` the index of the one that measurements speak of.
    ``edges`` (B + 1,) [electron/s] and ``counts`` (B,) are the histogram over pixels: BULK_BINS
    of equal width over the bulk, then wider and wider ones up to the hottest pixel.
    """

    scope: str
    groups: tuple[DarkGroup, ...]
    stated: int
    law: TemperatureLaw | None
    edges: NDArray[np.float64]
    counts: NDArray[np.int64]
    measurements: tuple[Measurement, ...]


@dataclass(frozen=True, slots=True)
class DarkCurrentResult:
    """Dark current of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionDarkCurrent, ...]


def dark_current(inputs: Inputs, options: DarkCurrentOptions) -> DarkCurrentResult:
    """Dark current [electron/s] of every region.

    Raises
    ------
    NotMeasured
        There are no darks, or only one exposure and no bias, or no gain.

    Notes
    -----
    mean = offset + (D/g) t [DN] and variance = offset + (D/g²) t [DN²] for a dark current D and a
    gain g [electron/DN]. The mean is the sharper; its uncertainty counts the scatter of the level
    from frame to frame, which pixel noise over a whole image would leave far too small.

    References
    ----------
    EMVA Standard 1288, release 4.0 Linear, 2021, dark current (from memory).
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_dark_current(inputs, region, options),
        stage="dark_current",
        undecides=[q.name for q in QUANTITIES],
    )
    return DarkCurrentResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing,
        regions=regions,
    )


def straight_rise(
    exposure: NDArray[np.float64], value: NDArray[np.float64], error: NDArray[np.float64]
) -> Rise:
    """Weighted least squares of a line; a misfit that chance does not explain widens the error."""
    weight = 1 / error**2
    total = weight.sum()
    centre = (weight * exposure).sum() / total
    lever = weight @ (exposure - centre) ** 2
    slope = float(weight @ ((exposure - centre) * value) / lever)
    offset = float(weight @ value / total - slope * centre)
    slope_error = 1 / sqrt(lever)
    degrees = len(exposure) - 2
    misfit = float((((value - offset - slope * exposure) / error) ** 2).sum())
    if degrees > 0 and chi2.sf(misfit, degrees) < UNLIKELY:
        slope_error *= sqrt(misfit / degrees)
    return Rise(exposure, value, error, offset, slope, slope_error)


def dark_groups(inputs: Inputs) -> list[tuple[StackImage, ...]]:
    """Dark stacks of like temperature, the coldest first; unknown temperatures in one group."""
    darks = sorted(
        inputs.reduced.darks,
        key=lambda d: (d.stack.temperature or 0.0, d.stack.exposure or 0.0),
    )
    groups: list[list[StackImage]] = []
    for image in darks:
        known = image.stack.temperature
        last = groups[-1][0].stack.temperature if groups else None
        alike = bool(groups) and (
            (known is None and last is None)
            or (known is not None and last is not None and abs(known - last) < ALIKE)
        )
        if alike:
            groups[-1].append(image)
        else:
            groups.append([image])
    return [tuple(group) for group in groups]


def stated_group(groups: list[tuple[StackImage, ...]], wanted: float | None) -> int:
    """Index of the group nearest ``wanted`` [degC], or of that with the most frames."""
    if wanted is not None:
        known = [g[0].stack.temperature for g in groups]
        if all(t is None for t in known):
            raise NotMeasured("the darks' temperature is not known, so none can be chosen by it")
        return min(
            range(len(groups)),
            key=lambda i: abs((known[i] if known[i] is not None else 1e9) - wanted),  # type: ignore[operator]
        )
    return max(range(len(groups)), key=lambda i: sum(image.frames for image in groups[i]))


def _region_dark_current(
    inputs: Inputs, region: Region, options: DarkCurrentOptions
) -> RegionDarkCurrent:
    if not inputs.reduced.darks:
        raise NotMeasured("needs dark frames, which the set does not have")
    gain = inputs.measured("conversion_gain", region.scope)
    images = dark_groups(inputs)
    chosen = stated_group(images, options.temperature)
    groups: list[DarkGroup] = []
    stated = 0
    for index, group in enumerate(images):
        try:
            made = _group(inputs, region, group)
        except NotMeasured:
            if index == chosen:
                raise
            continue
        if index == chosen:
            stated = len(groups)
        groups.append(made)
    main = groups[stated]
    n = main.frames
    found = [_current("dark_current", region, main.mean, gain.value, gain, n)]
    if main.variance is not None:
        found.append(
            _current(
                "dark_current_from_variance", region, main.variance, gain.value**2, gain, n, power=2
            )
        )
    if main.temperature is not None:
        found.append(
            Measurement(
                "dark_temperature",
                region.scope,
                main.temperature,
                main.temperature_error,
                "deg_C",
                n,
            )
        )
    law = None
    known = [g for g in groups if g.temperature is not None and g.mean.slope > 0]
    if len(known) >= 3 and main.temperature is not None:
        law = temperature_law(
            [g.temperature for g in known if g.temperature is not None],
            [g.mean.slope for g in known],
            [g.mean.slope_error for g in known],
            at=main.temperature,
        )
        found.extend(law.measurements(region.scope))
    edges, counts, spread = _over_pixels(inputs, region, images[chosen], gain)
    return RegionDarkCurrent(
        region.scope, tuple(groups), stated, law, edges, counts, (*found, *spread)
    )


def _current(
    name: str,
    region: Region,
    rise: Rise,
    factor: float,
    gain: Measurement,
    n: int,
    *,
    power: int = 1,
) -> Measurement:
    """A slope as dark current [electron/s]."""
    value = rise.slope * factor
    doubt = hypot(rise.slope_error * factor, power * value * gain.standard_uncertainty / gain.value)
    return Measurement(name, region.scope, value, doubt, "electron / s", n)


def joined_bias(inputs: Inputs, region: Region, group: tuple[StackImage, ...]) -> StackImage | None:
    """The bias stack, where it may stand for a dark of no exposure beside this group.

    It may not when it was taken at another temperature and no overscan follows the level.
    """
    bias = inputs.reduced.bias
    if bias is None:
        return None
    output = next(o for o in inputs.reduced.geometry.outputs if o.name == region.output)
    here, there = group[0].stack.temperature, bias.stack.temperature
    if output.overscan is None and here is not None and there is not None:
        return bias if abs(here - there) < ALIKE else None
    return bias


def _group(inputs: Inputs, region: Region, group: tuple[StackImage, ...]) -> DarkGroup:
    """Rises of mean and variance with exposure in one group of darks."""
    bias = joined_bias(inputs, region, group)
    stacks = [(0.0, bias)] if bias is not None else []
    for image in group:
        if image.stack.exposure is None:
            raise NotMeasured("needs darks whose exposure is known")
        stacks.append((image.stack.exposure, image))
    exposure = np.array([time for time, _ in stacks])
    if np.ptp(exposure) <= 0:
        raise NotMeasured("needs darks at two or more exposures, or bias frames beside one")
    scatter, _ = offset_scatter(inputs, region)
    frames = np.array([image.frames for _, image in stacks])
    cut = region.rows, region.columns
    means = np.array([image.mean[cut].mean(dtype=np.float64) for _, image in stacks])
    temperatures = [
        frame.temperature
        for image in group
        for frame in image.stack.frames
        if frame.temperature is not None
    ]
    if not temperatures:
        temperatures = [
            image.stack.temperature for image in group if image.stack.temperature is not None
        ]
    return DarkGroup(
        temperature=float(np.mean(temperatures)) if temperatures else None,
        temperature_error=float(np.std(temperatures)) / sqrt(len(temperatures))
        if temperatures
        else 0.0,
        mean=straight_rise(exposure, means, scatter / np.sqrt(frames)),
        variance=_variance_rise(region, stacks),
        frames=int(frames.sum()),
    )


def _variance_rise(region: Region, stacks: list[tuple[float, StackImage]]) -> Rise | None:
    """Rise of the mean temporal variance with exposure, where stacks have several frames."""
    known = [(time, image) for time, image in stacks if image.frames > 1]
    if np.ptp([time for time, _ in known] or [0.0]) <= 0:
        return None
    cut = region.rows, region.columns
    mean, error = [], []
    for _, image in known:
        variance = image.variance[cut]
        mean.append(variance.mean(dtype=np.float64))
        # A sample variance s² of v degrees scatters by 2 V²/v, and the mean of s⁴ is V² (v + 2)/v.
        flat = variance.ravel()
        fourth = float(flat @ flat) / flat.size
        error.append(sqrt(2 * fourth / ((image.frames + 1) * variance.size)))
    return straight_rise(np.array([t for t, _ in known]), np.array(mean), np.array(error))


def _over_pixels(
    inputs: Inputs, region: Region, group: tuple[StackImage, ...], gain: Measurement
) -> tuple[NDArray[np.float64], NDArray[np.int64], tuple[Measurement, ...]]:
    """Histogram, median and 99 % point of the pixels' dark current [electron/s]."""
    longest = max(group, key=lambda image: image.stack.exposure or 0.0)
    base = joined_bias(inputs, region, group)
    start = 0.0
    if base is None:
        base = min(group, key=lambda image: image.stack.exposure or 0.0)
        start = base.stack.exposure or 0.0
    time = (longest.stack.exposure or 0.0) - start
    size = longest.mean[region.rows, region.columns].size
    step = max(1, int(sqrt(size / SAMPLES)))
    cut = (region.rows, region.columns)
    current = (
        longest.mean[cut][::step, ::step].astype(np.float64) - base.mean[cut][::step, ::step]
    ).ravel() * (gain.value / time)
    first, median, third, lower, high, upper = np.quantile(
        current, [0.1587, 0.5, 0.8413, 0.985, 0.99, 0.995]
    )
    below, above = np.quantile(current, [0.49, 0.51])
    edges = _edges(float(median), float(third - first) / 2, float(current.max()))
    counts, _ = np.histogram(current, bins=edges)
    scatter, _ = offset_scatter(inputs, region)
    common = scatter * sqrt(1 / longest.frames + 1 / base.frames) * gain.value / time
    measurements = []
    for name, value, share, slope in (
        ("dark_current_median", median, 0.5, (above - below) / 0.02),
        ("dark_current_99", high, 0.99, (upper - lower) / 0.01),
    ):
        own = sqrt(share * (1 - share) / current.size) * slope
        doubt = sqrt(own**2 + common**2 + (value * gain.standard_uncertainty / gain.value) ** 2)
        measurements.append(
            Measurement(
                name, region.scope, float(value), float(doubt), "electron / s", current.size
            )
        )
    return edges, counts.astype(np.int64), tuple(measurements)


def _edges(median: float, deviation: float, highest: float) -> NDArray[np.float64]:
    """Edges of bins of equal width over the bulk, then wider and wider ones to the highest."""
    deviation = deviation or abs(median) * 1e-3 or 1e-6
    reach = BULK_REACH * deviation
    bulk = np.linspace(median - reach, median + reach, BULK_BINS + 1)
    beyond = highest - bulk[-1]
    if beyond <= 0:
        return bulk
    return np.concatenate((bulk, bulk[-1] + np.geomspace(deviation / 2, beyond * 2, BULK_BINS)))


STAGE = Stage("dark_current", DarkCurrentOptions, dark_current, QUANTITIES)
