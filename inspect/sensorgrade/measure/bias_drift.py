"""Drift of the bias level through the set."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.dark_current import straight_rise
from sensorgrade.measure.frame_levels import region_index
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement

FEWEST = 3

QUANTITIES = (
    Quantity(
        "bias_drift",
        "DN",
        "Largest less smallest level without light through the set: of the overscan in all frames,"
        " or of the bias frames where there is none",
    ),
    Quantity("bias_drift_rate", "DN / h", "Slope of that level with time"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class BiasDriftOptions:
    """Recipe keys under ``stages: bias_drift``; there are none."""


@dataclass(frozen=True, slots=True)
class RegionDrift:
    """Level [DN] of each frame in the order of time; ``time`` [s] since the first, NaN unknown."""

    scope: str
    time: NDArray[np.float64]
    level: NDArray[np.float64]
    source: str
    measurements: tuple[Measurement, ...]


@dataclass(frozen=True, slots=True)
class BiasDriftResult:
    """Drift of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    regions: tuple[RegionDrift, ...]


def bias_drift(inputs: Inputs, options: BiasDriftOptions) -> BiasDriftResult:
    """Range [DN] and rate [DN/h] of the level without light in every region.

    Raises
    ------
    NotMeasured
        There are fewer than three frames whose level without light is seen.

    Notes
    -----
    A range grows with the number of frames when nothing but noise is in it; how far single frames
    scatter is judged from successive ones (J. von Neumann, Ann. Math. Stat. 12 (1941) 367) and
    stated as the uncertainty of both ends.
    """
    regions, missing = by_region(
        inputs,
        lambda region: _region_drift(inputs, region),
        stage="bias_drift",
        undecides=[q.name for q in QUANTITIES],
    )
    return BiasDriftResult(
        measurements=tuple(m for region in regions for m in region.measurements),
        findings=missing,
        regions=regions,
    )


def _region_drift(inputs: Inputs, region: Region) -> RegionDrift:
    index = region_index(inputs, region)
    levels = inputs.reduced.levels
    with_overscan = all(np.isfinite(lv.overscan[:, index]).all() for lv in levels)
    if with_overscan:
        frames = [
            (frame.time, float(value))
            for lv in levels
            for frame, value in zip(lv.stack.frames, lv.overscan[:, index], strict=True)
        ]
    else:
        frames = [
            (frame.time, float(value))
            for lv in levels
            if lv.stack.kind == "bias"
            for frame, value in zip(lv.stack.frames, lv.mean[:, index], strict=True)
        ]
    if len(frames) < FEWEST:
        raise NotMeasured(
            f"needs {FEWEST} frames that show the level without light, the set has {len(frames)}"
        )
    times = [time for time, _ in frames]
    timed = None not in times and len(set(times)) > FEWEST - 1
    if timed:
        frames.sort(key=lambda entry: entry[0] or 0.0)
    level = np.array([value for _, value in frames])
    error = sqrt(float((np.diff(level) ** 2).mean()) / 2)
    n = len(level)
    found = [
        Measurement("bias_drift", region.scope, float(np.ptp(level)), sqrt(2) * error, "DN", n)
    ]
    time = np.full(n, np.nan)
    if timed:
        time = np.array([entry[0] for entry in frames], dtype=np.float64)
        time -= time[0]
        rise = straight_rise(time / 3600, level, np.full(n, max(error, 1e-9)))
        found.append(
            Measurement("bias_drift_rate", region.scope, rise.slope, rise.slope_error, "DN / h", n)
        )
    source = "overscan" if with_overscan else "bias frames"
    return RegionDrift(region.scope, time, level, source, tuple(found))


STAGE = Stage("bias_drift", BiasDriftOptions, bias_drift, QUANTITIES)
