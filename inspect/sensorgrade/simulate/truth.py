"""What is true of a simulated device, in the quantities that an inspection measures."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Geometry
from sensorgrade.silicon import ZERO_CELSIUS, dark_current_ratio
from sensorgrade.simulate.exposure import amplifier
from sensorgrade.simulate.maps import Image, Maps
from sensorgrade.simulate.model import Amplifier, SensorModel
from sensorgrade.simulate.placing import PlacedDefect
from sensorgrade.simulate.plan import FramePlan
from sensorgrade.simulate.pumping import PlacedTrap


@dataclass(frozen=True, slots=True)
class RegionTruth:
    """True values of one region; spreads and means are over its pixels without defect.

    conversion_gain [electron/DN] at small signal, read_noise [electron], bias_level [DN],
    dark_current and dsnu [electron/s] at the plan's temperature, offset_nonuniformity
    [electron], prnu [%] without the lamp's shading, saturation_capacity [electron], curvature
    [%] lost at full well.
    """

    conversion_gain: float
    read_noise: float
    bias_level: float
    dark_current: float
    dsnu: float
    offset_nonuniformity: float
    prnu: float
    saturation_capacity: float
    curvature: float


@dataclass(frozen=True, slots=True)
class Truth:
    """``regions`` by scope, as measurements carry it; maps (M, N) in the assembled image.

    ``dark_current`` [electron/s] at ``temperature`` [degC], ``response`` over nominal, ``sound``
    True where no defect was put.
    """

    regions: dict[str, RegionTruth]
    temperature: float
    cti_parallel: float
    cti_serial: float
    defects: tuple[PlacedDefect, ...]
    traps: tuple[PlacedTrap, ...]
    response: Image
    dark_current: Image
    offset: Image
    full_well: Image
    sound: NDArray[np.bool_]


def device_truth(model: SensorModel, plan: FramePlan, layout: Geometry, maps: Maps) -> Truth:
    """Gather the truth from the model and the maps that were drawn."""
    ratio = dark_current_ratio(plan.temperature + ZERO_CELSIUS, model.dark.reference + ZERO_CELSIUS)
    dark = maps.dark * np.float32(ratio)
    regions = {}
    for region in layout.regions:
        chain = amplifier(model, region.output)
        at = (region.rows, region.columns)
        sound = maps.sound[at]
        response = maps.response[at][sound].astype(np.float64)
        current = dark[at][sound].astype(np.float64)
        regions[region.scope] = RegionTruth(
            conversion_gain=chain.conversion_gain,
            read_noise=chain.read_noise,
            bias_level=chain.bias_level,
            dark_current=float(current.mean()),
            dsnu=float(current.std()),
            offset_nonuniformity=float(maps.offset[at][sound].std(dtype=np.float64)),
            prnu=float(100 * response.std() / response.mean()),
            saturation_capacity=_saturation(model, chain),
            curvature=chain.curvature,
        )
    return Truth(
        regions=regions,
        temperature=plan.temperature,
        cti_parallel=model.cti_parallel,
        cti_serial=model.cti_serial,
        defects=maps.defects,
        traps=maps.traps,
        response=maps.response,
        dark_current=dark,
        offset=maps.offset,
        full_well=maps.full_well,
        sound=maps.sound,
    )


def _saturation(model: SensorModel, chain: Amplifier) -> float:
    """Full well, or the charge that reaches the converter's last code when that is less."""
    last = (2 ** (model.sensor.adc_bits or 16) - 1 - chain.bias_level) * chain.conversion_gain
    bend = chain.curvature / 100 / model.full_well
    if bend == 0:
        reached = last
    else:
        root = 1 - 4 * bend * last
        reached = (1 - np.sqrt(root)) / (2 * bend) if root > 0 else np.inf
    return float(min(model.full_well, reached))
