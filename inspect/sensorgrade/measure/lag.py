"""Lag: signal left in the first frame without light after a bright one."""

from dataclasses import dataclass
from math import sqrt

import numpy as np

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.frame_levels import offset_scatter, region_index
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import number

QUANTITIES = (
    Quantity(
        "lag",
        "%",
        "Level of the first bias or dark frame after a flat over that of its fellows, as a share of"
        " the flat's signal",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class LagOptions:
    """Recipe keys under ``stages: lag``."""

    bright: float = number(
        "Least signal [DN] of a flat that counts as bright", default=1000.0, minimum=1.0
    )


@dataclass(frozen=True, slots=True)
class LagResult:
    """Lag of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


def lag(inputs: Inputs, options: LagOptions) -> LagResult:
    """Lag [%] of every region.

    Raises
    ------
    NotMeasured
        No bias or dark frame comes right after a bright flat while others of its stack do not, or
        the frames' times are not known.
    """
    measurements, missing = by_region(
        inputs,
        lambda region: _region_lag(inputs, region, options),
        stage="lag",
        undecides=["lag"],
    )
    return LagResult(measurements, missing)


def _region_lag(inputs: Inputs, region: Region, options: LagOptions) -> Measurement:
    index = region_index(inputs, region)
    taken = []
    for number_of_stack, lv in enumerate(inputs.reduced.levels):
        for frame, level in zip(lv.stack.frames, lv.mean[:, index], strict=True):
            if frame.time is not None:
                taken.append((frame.time, number_of_stack, lv.stack.kind, float(level)))
    taken.sort()
    dark = {i for i, lv in enumerate(inputs.reduced.levels) if lv.stack.kind in ("bias", "dark")}
    after: dict[int, list[tuple[float, float]]] = {i: [] for i in dark}
    rest: dict[int, list[float]] = {i: [] for i in dark}
    for before, here in zip([None, *taken], taken, strict=False):
        if here[1] not in dark:
            continue
        if before is not None and before[2] == "flat":
            after[here[1]].append((before[3], here[3]))
        else:
            rest[here[1]].append(here[3])
    scatter, _ = offset_scatter(inputs, region)
    shares, weights = [], []
    for i in dark:
        if not rest[i]:
            continue
        base = float(np.mean(rest[i]))
        for flat, level in after[i]:
            signal = flat - base
            if signal >= options.bright:
                shares.append((level - base) / signal)
                weights.append(signal**2 / (scatter**2 * (1 + 1 / len(rest[i]))))
    if not shares:
        raise NotMeasured(
            "needs a bias or dark frame right after a bright flat, others alike that are not, and"
            " the times of all"
        )
    weight = np.array(weights)
    value = float(weight @ np.array(shares) / weight.sum())
    return Measurement(
        "lag", region.scope, 100 * value, 100 / sqrt(float(weight.sum())), "%", len(shares)
    )


STAGE = Stage("lag", LagOptions, lag, QUANTITIES)
