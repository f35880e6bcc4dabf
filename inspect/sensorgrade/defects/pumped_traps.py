"""Traps that pocket pumping measured, as defects of the pixels they lie under."""

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from sensorgrade.defects.column_traps import COUNTS
from sensorgrade.defects.stage import POINT, DefectStage, Found
from sensorgrade.measure.pocket_pumping import PocketPumpingResult
from sensorgrade.measure.stage import Inputs


@dataclass(frozen=True, slots=True, kw_only=True)
class PumpedTrapOptions:
    """Recipe keys under ``stages: pumped_traps``; there are none."""


def pumped_traps(inputs: Inputs, options: PumpedTrapOptions) -> Found:
    """Every trap of the stage pocket_pumping; its value is the largest charge carried."""
    result = inputs.results.get("pocket_pumping")
    if not isinstance(result, PocketPumpingResult):
        why = "needs the stage pocket_pumping and its frames"
        return Found(np.empty(0, POINT), (), {count.name: why for count in COUNTS})
    points = np.zeros(len(result.traps), POINT)
    for point, trap in zip(points, result.traps, strict=True):
        point["kind"] = "trap"
        point["row"], point["column"] = trap.row, trap.column
        point["value"], point["uncertainty"] = trap.amplitude, trap.amplitude_uncertainty
        point["unit"] = "electron"
        point["significance"] = trap.significance
        point["probability"] = ndtr(trap.significance - result.threshold)
    return Found(points=points, lines=(), lacking={})


STAGE = DefectStage("pumped_traps", PumpedTrapOptions, pumped_traps, COUNTS)
