"""Which frames the simulated bench takes, and how good the bench is."""

from collections.abc import Sequence
from dataclasses import dataclass

from sensorgrade.options import choice, entry, number, quantity


@dataclass(frozen=True, slots=True, kw_only=True)
class StackPlan:
    """Frames taken alike."""

    kind: str = choice("Kind of frame", "bias", "dark", "flat", "x-ray", "pump")
    frames: int = number("How many", default=2, minimum=1)
    exposure: float = quantity("s", "Exposure time", default=0.0, minimum=0.0)
    light: float = quantity(
        "electron", "Mean charge from light where the lamp is brightest", default=0.0, minimum=0.0
    )
    photons: float = number(
        "x-ray: mean number of photons of manganese (Fe-55 source) that a frame detects",
        default=0.0,
        minimum=0.0,
    )
    cycles: int = number("pump: times that charge goes forth and back", default=0, minimum=0)
    phase_time: float = quantity("us", "pump: dwell in one phase", default=0.0, minimum=0.0)
    temperature: float | None = quantity(
        "deg_C", "Sensor temperature; omit for the plan's", default=None, minimum=-200.0
    )
    wavelength: str | None = entry("Wavelength [nm] or filter, as the header says", default=None)


@dataclass(frozen=True, slots=True, kw_only=True)
class FramePlan:
    """Stacks in the order they are taken, and the bench's own faults."""

    stacks: tuple[StackPlan, ...] = entry("Stacks in the order they are taken")
    temperature: float = quantity("deg_C", "Sensor temperature", default=20.0, minimum=-200.0)
    lamp_noise: float = quantity(
        "%", "Standard deviation of the light from frame to frame", default=0.0, minimum=0.0
    )
    lamp_drift: float = quantity(
        "%", "Change of the light from the first frame to the last", default=0.0
    )
    shading: float = quantity(
        "%", "Light lost in the corners, with the square of the radius", default=0.0, maximum=100.0
    )
    idle: float = quantity("s", "Time between two exposures", default=2.0, minimum=0.0)


def frame_plan(
    *,
    bias: int = 10,
    darks: Sequence[tuple[int, float]] = ((5, 100.0),),
    levels: Sequence[float] = (),
    pairs: int = 1,
    flats: Sequence[tuple[int, float]] = (),
    temperature: float = 20.0,
    full_exposure: float = 10.0,
    lamp_noise: float = 0.0,
    lamp_drift: float = 0.0,
    shading: float = 0.0,
) -> FramePlan:
    """The usual set: biases, darks, flat pairs over light levels, flats for the master.

    Parameters
    ----------
    bias : int
        Bias frames.
    darks : sequence of (frames, exposure [s])
    levels : sequence of float [electron]
        Mean charge of the flat pairs, ``pairs`` pairs each.
    flats : sequence of (frames, light [electron])
    temperature : float [degC]
    full_exposure : float [s]
        Exposure of the brightest flat; the others in proportion to their light.
    lamp_noise, lamp_drift, shading : float [%]
    """
    brightest = max([*levels, *(light for _, light in flats)], default=1.0)
    return FramePlan(
        stacks=(
            *((StackPlan(kind="bias", frames=bias),) if bias else ()),
            *(StackPlan(kind="dark", frames=frames, exposure=time) for frames, time in darks),
            *(
                StackPlan(
                    kind="flat",
                    frames=frames,
                    light=light,
                    exposure=full_exposure * light / brightest,
                )
                for frames, light in [*((2 * pairs, level) for level in levels), *flats]
            ),
        ),
        temperature=temperature,
        lamp_noise=lamp_noise,
        lamp_drift=lamp_drift,
        shading=shading,
    )
