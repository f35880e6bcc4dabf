"""A simulated device: its frames in memory, and the truth about it."""

import hashlib
import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import RequestError
from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.frame import DeviceFrames, Frame, Stack
from sensorgrade.frames.geometry import Geometry, geometry
from sensorgrade.simulate.exposure import Conditions, raw_frame
from sensorgrade.simulate.maps import Image, device_maps, telegraph_states
from sensorgrade.simulate.model import SensorModel
from sensorgrade.simulate.plan import FramePlan, StackPlan
from sensorgrade.simulate.truth import Truth, device_truth

LIT = ("flat", "pump")  # kinds of frame that the lamp shines on
START = 1_767_254_400.0  # 2026-01-01T08:00:00 UTC, s since 1970: when every run starts


@dataclass(frozen=True, slots=True)
class SimulatedDevice:
    """Frames in memory with the truth; ``model`` and ``plan`` are what they were made from."""

    frames: DeviceFrames
    truth: Truth
    model: SensorModel
    plan: FramePlan


def simulate_device(
    model: SensorModel, plan: FramePlan, *, seed: int = 0, serial: str = "simulated"
) -> SimulatedDevice:
    """Take the frames of ``plan`` with one device of ``model``.

    The same model, plan, seed and serial give the same frames, sample by sample; another serial
    gives another device of the same kind. Every frame has its own generator, made from seed,
    serial and the frame's number, so frames do not depend on those taken before.

    Raises
    ------
    RequestError
        Sections, defects or converter do not fit the frame.
    """
    if (model.sensor.adc_bits or 16) > 16:
        raise RequestError(
            "sensor.adc_bits: simulated frames hold 16 bits at most; give 16 or less"
        )
    layout = geometry(model.sensor, _raw_shapes(model))
    _check(layout)
    device = int.from_bytes(hashlib.sha256(serial.encode()).digest()[:8], "big")
    maps = device_maps(model, layout, _generator(seed, device, 0))
    illumination = _illumination(layout.shape, plan.shading)
    times = _times(plan)
    high = telegraph_states(maps.telegraph, times, _generator(seed, device, 1))
    light = _lamp(plan, _generator(seed, device, 2))
    stacks = []
    number = 0
    for stack, level in zip(plan.stacks, _levels(plan), strict=True):
        frames = []
        for _ in range(stack.frames):
            conditions = Conditions(
                light=stack.light * light[number] if stack.kind in LIT else 0.0,
                cycles=stack.cycles if stack.kind == "pump" else 0,
                phase_time=stack.phase_time,
                photons=stack.photons if stack.kind == "x-ray" else 0.0,
                exposure=stack.exposure if stack.kind != "bias" else 0.0,
                temperature=_temperature(stack, plan),
                high=high[number],
            )
            raw = raw_frame(
                model, layout, maps, illumination, conditions, _generator(seed, device, 3 + number)
            )
            frames.append(_frame(raw, stack, plan, level, number, times[number]))
            number += 1
        stacks.append(_stack(stack, plan, level, tuple(frames)))
    return SimulatedDevice(
        frames=DeviceFrames(serial=serial, folder=_folder(serial), stacks=tuple(stacks)),
        truth=device_truth(model, plan, layout, maps),
        model=model,
        plan=plan,
    )


def _generator(seed: int, device: int, number: int) -> np.random.Generator:
    return np.random.default_rng(np.random.SeedSequence([seed, device], spawn_key=(number,)))


def _raw_shapes(model: SensorModel) -> dict[str, tuple[int, int]]:
    """Plane keys of a raw frame; simulated frames keep all outputs in one plane."""
    if any(output.extension for output in model.sensor.outputs.values()):
        raise RequestError(
            "sensor.outputs: simulated frames hold all outputs in one image; leave 'extension' out"
        )
    return {"": (model.rows, model.columns)}


def _check(layout: Geometry) -> None:
    """Overscan rows must be the image's, parallel overscan columns likewise."""
    for output in layout.outputs:
        for label, section, axis in (
            ("overscan", output.overscan, 0),
            ("prescan", output.prescan, 0),
            ("parallel_overscan", output.parallel_overscan, 1),
        ):
            if section is not None and section.shape[axis] != output.image.shape[axis]:
                raise RequestError(
                    f"sensor.outputs.{output.name}.{label}: covers {section.shape[axis]}"
                    f" {('rows', 'columns')[axis]}, the image section has"
                    f" {output.image.shape[axis]}; make them equal"
                )


def _illumination(shape: tuple[int, int], shading: float) -> Image:
    """Light over that at the centre, falling with the square of the radius, shape (M, N)."""
    rows, columns = (np.linspace(-1, 1, size) for size in shape)
    square = (rows[:, None] ** 2 + columns[None, :] ** 2) / 2
    return (1 - shading / 100 * square).astype(np.float32)


def _times(plan: FramePlan) -> NDArray[np.float64]:
    """When each frame's exposure starts [s since the first]."""
    spans = [stack.exposure + plan.idle for stack in plan.stacks for _ in range(stack.frames)]
    return np.concatenate([[0.0], np.cumsum(spans)[:-1]])


def _lamp(plan: FramePlan, rng: np.random.Generator) -> NDArray[np.float64]:
    """Light of each frame over nominal."""
    total = sum(stack.frames for stack in plan.stacks)
    drift = plan.lamp_drift / 100 * np.linspace(0, 1, total)
    light: NDArray[np.float64] = 1 + drift + plan.lamp_noise / 100 * rng.standard_normal(total)
    return light


def _temperature(stack: StackPlan, plan: FramePlan) -> float:
    return plan.temperature if stack.temperature is None else stack.temperature


def _levels(plan: FramePlan) -> list[float | None]:
    """What each stack's frames say of their light: electron/s, or electron if no time is given.

    Nothing where the exposure time alone tells it, as for a lamp that shines steadily.
    """
    flats = [stack for stack in plan.stacks if stack.kind == "flat"]
    if not all(stack.exposure for stack in flats):
        rates = [stack.light for stack in plan.stacks]
    else:
        rates = [stack.light / (stack.exposure or 1.0) for stack in plan.stacks]
        told = [rate for rate, stack in zip(rates, plan.stacks, strict=True) if stack in flats]
        if len(flats) > 1 and np.allclose(told, told[0]):
            return [None] * len(rates)
    return [
        rate if stack.kind == "flat" else None
        for rate, stack in zip(rates, plan.stacks, strict=True)
    ]


def _frame(
    raw: NDArray[np.uint16],
    stack: StackPlan,
    plan: FramePlan,
    level: float | None,
    number: int,
    time: float,
) -> Frame:
    pumped = stack.kind == "pump"
    return frame_from_array(
        raw,
        kind=stack.kind,
        exposure=stack.exposure,
        temperature=_temperature(stack, plan),
        level=level,
        wavelength=stack.wavelength,
        time=START + time,
        cycles=stack.cycles if pumped else None,
        phase_time=stack.phase_time if pumped else None,
        name=f"{number:04d}_{stack.kind}.fits",
    )


def _stack(
    stack: StackPlan, plan: FramePlan, level: float | None, frames: tuple[Frame, ...]
) -> Stack:
    return Stack(
        kind=stack.kind,
        frames=frames,
        exposure=stack.exposure,
        temperature=_temperature(stack, plan),
        level=level,
        wavelength=stack.wavelength,
        cycles=stack.cycles if stack.kind == "pump" else None,
        phase_time=stack.phase_time if stack.kind == "pump" else None,
    )


def _folder(serial: str) -> str:
    return re.sub(r"[^A-Za-z0-9._-]", "_", serial)
