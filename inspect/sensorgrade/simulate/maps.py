"""What one simulated device is, pixel by pixel: drawn once, the same in all its frames."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Geometry
from sensorgrade.simulate.model import SensorModel
from sensorgrade.simulate.placing import PlacedDefect, placed_defects
from sensorgrade.simulate.pumping import PlacedTrap, placed_traps

CELL = {"R": "red", "G": "green", "B": "blue"}

Image = NDArray[np.float32]


@dataclass(frozen=True, slots=True)
class Telegraph:
    """Pixels (K,) that step between two states.

    ``amplitude`` is the step in the output [electron], ``current`` that in dark current
    [electron/s at the reference temperature]; the mean times in each state are in [s].
    """

    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    amplitude: NDArray[np.float64]
    current: NDArray[np.float64]
    dwell_low: NDArray[np.float64]
    dwell_high: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Maps:
    """Pixel maps of shape (M, N) in the assembled image's coordinates.

    ``response`` over nominal, with colour filters and defects; ``dark`` [electron/s] at the
    reference temperature; ``offset`` [electron]; ``full_well`` [electron]; ``noise`` [electron]
    that noisy pixels add; ``curvature`` of nonlinear pixels, loss at full well; ``stuck`` the
    code returned or -1; ``trapped`` [electron] what a trap on the pixel's way takes. ``sound`` is
    True where no defect was put. Those that only some defects have are None without them.
    """

    response: Image
    dark: Image
    offset: Image
    full_well: Image
    noise: Image | None
    curvature: Image | None
    stuck: NDArray[np.int32] | None
    trapped: Image | None
    telegraph: Telegraph
    sound: NDArray[np.bool_]
    defects: tuple[PlacedDefect, ...]
    traps: tuple[PlacedTrap, ...]


def device_maps(model: SensorModel, geometry: Geometry, rng: np.random.Generator) -> Maps:
    """Draw the maps of one device and put its defects in."""
    response = _response(model, geometry, rng)
    dark = _dark(model, geometry, rng)
    offset = _offset(model, geometry, rng)
    full_well = np.full(geometry.shape, model.full_well, np.float32)
    if model.full_well_spread:
        full_well *= 1 + model.full_well_spread / 100 * _normal(rng, geometry.shape)
    noise = np.zeros(geometry.shape, np.float32)
    curvature = np.zeros(geometry.shape, np.float32)
    stuck = np.full(geometry.shape, -1, np.int32)
    trapped = np.zeros(geometry.shape, np.float32)
    sound = np.ones(geometry.shape, dtype=bool)
    defects = placed_defects(model.defects, geometry, rng)
    for defect in defects:
        at = defect.section.slices
        sound[at] = False
        if defect.kind in ("hot", "warm"):
            dark[at] += defect.value
        elif defect.unit == "%" and defect.kind != "nonlinear":
            response[at] *= defect.value / 100
        elif defect.kind == "noisy":
            noise[at] = defect.value
        elif defect.kind == "stuck":
            stuck[at] = round(defect.value)
        elif defect.kind == "trap":
            trapped[at] += defect.value
        elif defect.kind == "nonlinear":
            curvature[at] = defect.value / 100
    kinds = {defect.kind for defect in defects}
    return Maps(
        response=response,
        dark=dark,
        offset=offset,
        full_well=full_well,
        noise=noise if "noisy" in kinds else None,
        curvature=curvature if "nonlinear" in kinds else None,
        stuck=stuck if "stuck" in kinds else None,
        trapped=trapped if "trap" in kinds else None,
        telegraph=_telegraph(defects),
        sound=sound,
        defects=defects,
        traps=placed_traps(model.traps, geometry, rng),
    )


def _normal(rng: np.random.Generator, shape: int | tuple[int, int]) -> Image:
    return rng.standard_normal(shape, dtype=np.float32)


def _response(model: SensorModel, geometry: Geometry, rng: np.random.Generator) -> Image:
    M, N = geometry.shape
    spread = model.response
    response = np.ones((M, N), np.float32)
    if spread.pixel:
        response += spread.pixel / 100 * _normal(rng, (M, N))
    if spread.row:
        response += spread.row / 100 * _normal(rng, M)[:, None]
    if spread.column:
        response += spread.column / 100 * _normal(rng, N)[None, :]
    if model.sensor.colour != "none":
        for at, letter in enumerate(model.sensor.colour):
            row, column = divmod(at, 2)
            response[row::2, column::2] *= getattr(spread, CELL[letter]) / 100
    return np.maximum(response, 0)


def _dark(model: SensorModel, geometry: Geometry, rng: np.random.Generator) -> Image:
    dark = np.full(geometry.shape, model.dark.current, np.float32)
    if model.dark.nonuniformity:
        dark *= 1 + model.dark.nonuniformity / 100 * _normal(rng, geometry.shape)
    if model.dark.tail_fraction:
        tail = rng.random(geometry.shape, dtype=np.float32) < model.dark.tail_fraction / 100
        dark[tail] += rng.exponential(model.dark.tail_mean, int(tail.sum()))
    return np.maximum(dark, 0)


def _offset(model: SensorModel, geometry: Geometry, rng: np.random.Generator) -> Image:
    M, N = geometry.shape
    offset = np.zeros((M, N), np.float32)
    if model.offsets.pixel:
        offset += model.offsets.pixel * _normal(rng, (M, N))
    if model.offsets.column:
        offset += model.offsets.column * _normal(rng, N)[None, :]
    return offset


def _telegraph(defects: tuple[PlacedDefect, ...]) -> Telegraph:
    """The single pixels of all telegraph defects."""
    pixels = [
        (row, column, defect.model)
        for defect in defects
        if defect.kind == "telegraph"
        for row in range(defect.section.row_start, defect.section.row_stop)
        for column in range(defect.section.column_start, defect.section.column_stop)
    ]
    return Telegraph(
        rows=np.array([row for row, _, _ in pixels], np.intp),
        columns=np.array([column for _, column, _ in pixels], np.intp),
        amplitude=np.array([model.amplitude for _, _, model in pixels], float),
        current=np.array([model.current for _, _, model in pixels], float),
        dwell_low=np.array([model.dwell_low for _, _, model in pixels], float),
        dwell_high=np.array([model.dwell_high for _, _, model in pixels], float),
    )


def telegraph_states(
    telegraph: Telegraph, times: NDArray[np.float64], rng: np.random.Generator
) -> NDArray[np.bool_]:
    """Whether each pixel is in its high state at each of ``times`` [s], shape (L, K).

    Sampled exactly from the two-state Markov process, which forgets at the sum of both rates.
    """
    high = telegraph.dwell_high / (telegraph.dwell_high + telegraph.dwell_low)
    rate = 1 / telegraph.dwell_high + 1 / telegraph.dwell_low
    states = np.empty((len(times), len(high)), dtype=bool)
    chance = high
    for at, draw in enumerate(rng.random(states.shape)):
        if at:
            memory = np.exp(-rate * (times[at] - times[at - 1]))
            chance = high + (states[at - 1] - high) * memory
        states[at] = draw < chance
    return states
