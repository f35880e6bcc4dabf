"""Bias level of each region."""

from dataclasses import dataclass
from math import sqrt

import numpy as np

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.by_region import by_region
from sensorgrade.measure.frame_levels import region_index
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement

QUANTITIES = (
    Quantity("bias_level", "DN", "Mean raw level of bias frames, overscan not subtracted"),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class BiasLevelOptions:
    """Recipe keys under ``stages: bias_level``; there are none."""


@dataclass(frozen=True, slots=True)
class BiasLevelResult:
    """Bias level of every region."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


def bias_level(inputs: Inputs, options: BiasLevelOptions) -> BiasLevelResult:
    """Mean level [DN] of the bias frames; its uncertainty is that of the mean over frames.

    Raises
    ------
    NotMeasured
        There are fewer than two bias frames.
    """
    measurements, missing = by_region(
        inputs,
        lambda region: _region_level(inputs, region),
        stage="bias_level",
        undecides=["bias_level"],
    )
    return BiasLevelResult(measurements, missing)


def _region_level(inputs: Inputs, region: Region) -> Measurement:
    index = region_index(inputs, region)
    levels = [
        levels.mean[:, index] + np.nan_to_num(levels.overscan[:, index])
        for levels in inputs.reduced.levels
        if levels.stack.kind == "bias"
    ]
    frames = np.concatenate(levels) if levels else np.empty(0)
    if len(frames) < 2:
        raise NotMeasured(f"needs two or more bias frames, the set has {len(frames)}")
    error = float(frames.std(ddof=1)) / sqrt(len(frames))
    return Measurement("bias_level", region.scope, float(frames.mean()), error, "DN", len(frames))


STAGE = Stage("bias_level", BiasLevelOptions, bias_level, QUANTITIES)
