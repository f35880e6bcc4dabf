"""Which limits can be decided with the frames there are, before anything is measured."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.recipe.model import Grade


@dataclass(frozen=True, slots=True)
class Outlook:
    """Whether limits on one name can be decided; ``lacking`` says what stands against it.

    ``decidable`` is None for a name of which it is not known what frames it needs.
    """

    name: str
    decidable: bool | None
    lacking: str


@dataclass(frozen=True, slots=True)
class Need:
    """Frames that a measurement cannot do without."""

    what: str
    met: Callable[[DeviceFrames], bool]


def _most(device: DeviceFrames, kind: str) -> int:
    """Frames in the largest stack of a kind."""
    return max((len(s.frames) for s in device.stacks if s.kind == kind), default=0)


def _stacks(device: DeviceFrames, kind: str) -> int:
    return sum(stack.kind == kind for stack in device.stacks)


BIAS = Need("bias frames", lambda d: _most(d, "bias") >= 1)
BIASES = Need("two bias frames", lambda d: _most(d, "bias") >= 2)
DARK = Need("dark frames", lambda d: _most(d, "dark") >= 1)
ZERO = Need(
    "bias frames, or darks of two exposures",
    lambda d: _most(d, "bias") >= 1 or _stacks(d, "dark") >= 2,
)
TEMPERATURES = Need(
    "darks of several temperatures",
    lambda d: len({round(s.temperature or 0) for s in d.stacks if s.kind == "dark"}) >= 2,
)
FLAT = Need("flat frames", lambda d: _most(d, "flat") >= 1)
PAIR = Need("a pair of flats taken alike", lambda d: _most(d, "flat") >= 2)
GAIN = Need(
    "a pair of flats taken alike, or X-ray frames",
    lambda d: _most(d, "flat") >= 2 or _most(d, "x-ray") >= 1,
)
LEVELS = Need("flats of three or more levels", lambda d: _stacks(d, "flat") >= 3)
STILL = Need(
    "five or more bias or dark frames taken alike",
    lambda d: max(_most(d, "bias"), _most(d, "dark")) >= 5,
)
X_RAY = Need("X-ray frames", lambda d: _most(d, "x-ray") >= 1)
EDGE = Need("flat or X-ray frames", lambda d: max(_most(d, "flat"), _most(d, "x-ray")) >= 1)
PUMP = Need("pumped frames", lambda d: _most(d, "pump") >= 1)

NEEDS: dict[str, tuple[Need, ...]] = {
    **dict.fromkeys(("bias_level", "bias_drift"), (BIAS,)),
    **dict.fromkeys(("read_noise", "row_noise", "column_noise"), (BIASES, GAIN)),
    "read_noise_dn": (BIASES,),
    **dict.fromkeys(("conversion_gain", "neighbour_covariance_right"), (GAIN,)),
    **dict.fromkeys(("neighbour_covariance_down", "variance_curvature"), (PAIR,)),
    "read_noise_intercept": (PAIR,),
    **dict.fromkeys(("saturation_capacity", "dynamic_range", "maximum_snr"), (PAIR, LEVELS)),
    **dict.fromkeys(("linearity_error", "linearity_departure"), (LEVELS,)),
    **dict.fromkeys(("prnu", "prnu_row", "prnu_column"), (FLAT,)),
    **dict.fromkeys(("dead_pixels", "dim_pixels", "bright_pixels"), (FLAT,)),
    **dict.fromkeys(("dark_current", "dark_current_median", "dsnu"), (DARK, ZERO, GAIN)),
    **dict.fromkeys(("hot_pixels", "warm_pixels"), (DARK, ZERO)),
    **dict.fromkeys(("dark_temperature", "doubling_step"), (DARK, TEMPERATURES)),
    **dict.fromkeys(("telegraph_pixels", "noisy_pixels"), (STILL,)),
    **dict.fromkeys(("cti_parallel", "cti_serial"), (EDGE,)),
    **dict.fromkeys(("x_ray_gain", "x_ray_width", "x_ray_line_ratio"), (X_RAY,)),
    "trap_density": (PUMP, FLAT, BIAS),
}


def outlooks(device: DeviceFrames, grades: Sequence[Grade]) -> tuple[Outlook, ...]:
    """An outlook for each name that the grades set limits on, in their order.

    A limit cannot be decided when frames are lacking, or when a finding says so.
    """
    names = dict.fromkeys(limit.name for grade in grades for limit in grade.limits)
    return tuple(_outlook(device, name) for name in names)


def _outlook(device: DeviceFrames, name: str) -> Outlook:
    against = [f"{f.where}: {f.seen}" for f in device.findings if name in f.undecides]
    needs = NEEDS.get(name)
    if needs is None:
        return Outlook(name, False if against else None, "; ".join(against))
    lacking = [need.what for need in needs if not need.met(device)]
    against = [f"needs {', '.join(lacking)}"] * bool(lacking) + against
    return Outlook(name, not against, "; ".join(against))
