"""One simulated frame: charge collected, moved to the outputs, turned into numbers."""

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from sensorgrade.frames.geometry import Geometry, Output
from sensorgrade.recipe.model import Section
from sensorgrade.silicon import ZERO_CELSIUS, dark_current_ratio
from sensorgrade.simulate.maps import Image, Maps
from sensorgrade.simulate.model import Amplifier, Events, SensorModel
from sensorgrade.simulate.pumping import pump
from sensorgrade.simulate.shift import deferred
from sensorgrade.simulate.x_rays import x_ray_charge

GAUSSIAN_FROM = 1000.0  # electron; above, a Poisson count is drawn as a rounded Gaussian
Sample = TypeVar("Sample", bound=np.generic)

STEPS = 4  # deposits per pixel along a particle's track


@dataclass(frozen=True, slots=True)
class Conditions:
    """What differs between frames: light [electron] where the lamp is brightest, times [s].

    ``photons`` is the mean number of X-ray photons detected; charge is pumped ``cycles`` times
    with ``phase_time`` [us].
    """

    light: float
    photons: float
    cycles: int
    phase_time: float
    exposure: float
    temperature: float  # degC
    high: NDArray[np.bool_]  # states of the telegraph pixels


def raw_frame(
    model: SensorModel,
    geometry: Geometry,
    maps: Maps,
    illumination: Image,
    conditions: Conditions,
    rng: np.random.Generator,
) -> NDArray[np.uint16]:
    """The raw frame of shape (rows, columns) [DN] that the model gives under ``conditions``."""
    charge = _collected(model, maps, illumination, conditions, rng)
    extra = _extra(maps, conditions, rng)
    last_code = 2 ** (model.sensor.adc_bits or 16) - 1
    first = amplifier(model, geometry.outputs[0].name)
    raw = np.full((model.rows, model.columns), round(first.bias_level), np.uint16)
    for output in geometry.outputs:
        chain = amplifier(model, output.name)
        packets = _packets(model, output, charge)
        signal = _signal(model, chain, packets, rng)
        prescan = 0 if output.prescan is None else output.prescan.shape[1]
        rows, columns = output.image.shape
        signal[:rows, prescan : prescan + columns] += oriented(output, extra[output.place.slices])
        level = chain.bias_level + chain.bias_drift * rng.standard_normal()
        signal /= np.float32(chain.conversion_gain)
        signal += np.float32(level)
        np.rint(signal, out=signal)
        np.clip(signal, 0, last_code, out=signal)
        _write(raw, output, signal.astype(np.uint16))
        if maps.stuck is not None:
            codes = maps.stuck[output.place.slices]
            raw[output.image.slices][codes >= 0] = codes[codes >= 0]
    return raw


def amplifier(model: SensorModel, name: str) -> Amplifier:
    """The chain of the output called ``name``."""
    return model.amplifiers.get(name, model.amplifier)


def oriented(output: Output, image: NDArray[Sample]) -> NDArray[Sample]:
    """A view whose first row and column are read first."""
    rows = -1 if output.corner.startswith("top") else 1
    columns = -1 if output.corner.endswith("right") else 1
    return image[::rows, ::columns]


def _collected(
    model: SensorModel,
    maps: Maps,
    illumination: Image,
    conditions: Conditions,
    rng: np.random.Generator,
) -> Image:
    """Charge [electron] of shape (M, N) at the end of the exposure."""
    ratio = dark_current_ratio(
        conditions.temperature + ZERO_CELSIUS, model.dark.reference + ZERO_CELSIUS
    )
    mean = maps.dark * np.float32(ratio * conditions.exposure)
    if conditions.light:
        mean += maps.response * illumination * np.float32(conditions.light)
    telegraph = maps.telegraph
    mean[telegraph.rows, telegraph.columns] += (
        conditions.high * telegraph.current * ratio * conditions.exposure
    )
    charge = poisson(mean, rng)
    if model.variance_curvature:
        charge += _repelled(charge - mean, mean, -model.variance_curvature / 8)
    if model.events.rate:
        area = mean.size * (model.sensor.pixel_pitch * 1e-4) ** 2  # cm²
        expected = model.events.rate * area * conditions.exposure / 60
        charge += _tracks(
            mean.shape, rng.poisson(expected), model.events, model.sensor.pixel_pitch, rng
        )
    if conditions.photons:
        charge += x_ray_charge(
            mean.shape,
            rng.poisson(conditions.photons),
            temperature=conditions.temperature,
            cloud=model.charge_cloud / model.sensor.pixel_pitch,
            rng=rng,
        )
    if maps.curvature is not None:
        charge *= 1 - maps.curvature * charge / maps.full_well
    np.minimum(charge, maps.full_well, out=charge)
    if maps.trapped is not None:
        charge -= np.minimum(charge, np.rint(maps.trapped))
    if conditions.cycles:
        pump(
            charge,
            maps.traps,
            cycles=conditions.cycles,
            phase_time=conditions.phase_time,
            kelvin=conditions.temperature + ZERO_CELSIUS,
            rng=rng,
        )
    return charge


def poisson(mean: Image, rng: np.random.Generator) -> Image:
    """Poisson counts, exact below `GAUSSIAN_FROM` and a rounded Gaussian above (skew < 0.03)."""
    if not mean.any():
        return np.zeros_like(mean)
    small = mean < GAUSSIAN_FROM
    if small.all():
        return rng.poisson(mean).astype(np.float32)
    counts = rng.standard_normal(mean.shape, dtype=np.float32)
    counts *= np.sqrt(mean)
    counts += mean
    np.rint(counts, out=counts)
    if small.any():
        counts[small] = rng.poisson(mean[small])
    return counts


def _repelled(deviation: Image, mean: Image, strength: float) -> Image:
    """Charge that moves between neighbours because a fuller pixel repels what arrives.

    Between two neighbours flows ``strength`` x mean x difference of their deviations, so the
    variance becomes S (1 - 8 strength S + 20 strength² S²), neighbours are correlated, and the
    sum of variance and covariances stays Poisson's: charge is moved, none is lost.
    """
    moved = np.zeros_like(deviation)
    flow = strength * mean[1:] * (deviation[1:] - deviation[:-1])
    moved[1:] -= flow
    moved[:-1] += flow
    flow = strength * mean[:, 1:] * (deviation[:, 1:] - deviation[:, :-1])
    moved[:, 1:] -= flow
    moved[:, :-1] += flow
    return moved


def _tracks(
    shape: tuple[int, int], count: int, events: Events, pitch: float, rng: np.random.Generator
) -> Image:
    """Charge [electron] of ``count`` straight tracks.

    Directions follow the cos² law of muons through a level surface; the charge along each
    fluctuates as a Moyal variable, 10 % of the most probable.
    """
    charge = np.zeros(shape, np.float32)
    for _ in range(count):
        cosine = max(rng.random() ** 0.25, 0.02)
        across = events.thickness * np.sqrt(1 / cosine**2 - 1) / pitch  # pixels
        per_um = events.charge * max(1 - 0.1 * np.log(rng.standard_normal() ** 2), 0.3)
        total = per_um * events.thickness / cosine
        steps = int(np.ceil(across * STEPS)) + 1
        along = np.linspace(0, across, steps)
        angle = rng.uniform(0, 2 * np.pi)
        rows = np.floor(rng.uniform(0, shape[0]) + along * np.sin(angle)).astype(int)
        columns = np.floor(rng.uniform(0, shape[1]) + along * np.cos(angle)).astype(int)
        inside = (rows >= 0) & (rows < shape[0]) & (columns >= 0) & (columns < shape[1])
        np.add.at(charge, (rows[inside], columns[inside]), np.float32(total / steps))
    return np.rint(charge)


def _extra(maps: Maps, conditions: Conditions, rng: np.random.Generator) -> Image:
    """What the pixels add to the signal besides charge [electron], shape (M, N)."""
    telegraph = maps.telegraph
    if maps.noise is None and not len(telegraph.rows):
        return maps.offset
    extra = maps.offset.copy()
    extra[telegraph.rows, telegraph.columns] += conditions.high * telegraph.amplitude
    if maps.noise is not None:
        noisy = maps.noise > 0
        extra[noisy] += maps.noise[noisy] * rng.standard_normal(int(noisy.sum()))
    return extra


def _packets(model: SensorModel, output: Output, charge: Image) -> Image:
    """Charge in the order of reading, with prescan, overscan and parallel overscan."""
    rows, columns = output.image.shape
    prescan = 0 if output.prescan is None else output.prescan.shape[1]
    overscan = 0 if output.overscan is None else output.overscan.shape[1]
    beyond = 0 if output.parallel_overscan is None else output.parallel_overscan.shape[0]
    packets = np.zeros((rows + beyond, prescan + columns + overscan), np.float32)
    image = oriented(output, charge[output.place.slices])
    packets[:rows, prescan : prescan + columns] = image
    if model.cti_parallel:
        packets = deferred(packets, model.cti_parallel, axis=0)
    if model.cti_serial:
        packets = deferred(packets, model.cti_serial, axis=1)
    return packets


def _signal(
    model: SensorModel, chain: Amplifier, packets: Image, rng: np.random.Generator
) -> Image:
    """Output signal [electron] with the noises of the chain."""
    signal = rng.standard_normal(packets.shape, dtype=np.float32)
    signal *= np.float32(chain.read_noise)
    signal += packets
    if chain.curvature:
        signal -= packets * packets * np.float32(chain.curvature / 100 / model.full_well)
    offsets = model.offsets
    if offsets.row_noise:
        signal += offsets.row_noise * rng.standard_normal((len(signal), 1), dtype=np.float32)
    if offsets.pickup:
        samples = np.arange(signal.size, dtype=np.float64).reshape(signal.shape)
        phase = 2 * np.pi * (samples / offsets.pickup_period + rng.random())
        signal += (offsets.pickup * np.sin(phase)).astype(np.float32)
    return signal


def _write(raw: NDArray[np.uint16], output: Output, codes: NDArray[np.uint16]) -> None:
    """Put an output's samples where its sections lie in the raw frame."""
    rows, columns = output.image.shape
    prescan = 0 if output.prescan is None else output.prescan.shape[1]
    blocks: list[tuple[Section | None, int, int]] = [
        (output.prescan, 0, 0),
        (output.image, 0, prescan),
        (output.overscan, 0, prescan + columns),
        (output.parallel_overscan, rows, prescan),
    ]
    for section, row, column in blocks:
        if section is not None:
            height, width = section.shape
            block = codes[row : row + height, column : column + width]
            raw[section.slices] = oriented(output, block)
