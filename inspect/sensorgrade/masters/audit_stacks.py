"""What is wrong with stacks and with the set as a whole."""

import re
from collections.abc import Iterator, Sequence
from datetime import UTC, datetime
from itertools import pairwise

import numpy as np

from sensorgrade.frames.frame import Frame, Stack
from sensorgrade.frames.sources import natural
from sensorgrade.masters.audit_frames import Reference
from sensorgrade.masters.sketch import Sketch
from sensorgrade.measurement import Finding

DRIFT = 0.10  # change of light within a stack that is worth a word
GRADIENT = 0.3  # of a dark's mean signal, across the frame
LEAST_GRADIENT = 5.0  # DN
SIGNIFICANT = 6.0
SATURATED = 0.01  # share of samples at the last code that spoils a mean
DARK_NAMES = ("dark_current", "dsnu", "hot_pixels")
FLAT_NAMES = ("conversion_gain", "prnu")
DIGITS = re.compile(r"\d+")


def light_leak(
    stack: Stack, sketches: Sequence[Sketch], biases: Sequence[Sketch], known: Reference
) -> Iterator[Finding]:
    """A dark that is brighter on one side: light leak, or glow of the readout.

    A plane is fitted to the (8, 8) medians of the mean dark less the mean bias; it must rise by
    more than `GRADIENT` of the mean signal and by six times its own uncertainty.
    """
    if not sketches or known.zero is None:
        return
    blocks = np.mean([s.blocks for s in sketches], axis=0)
    dark = np.mean([s.blocks for s in biases], axis=0) if biases else known.zero
    blocks = blocks - dark
    rows, columns = np.indices(blocks.shape)
    y, x = (axis.reshape(-1) / max(axis.max(), 1) - 0.5 for axis in (rows, columns))
    design = np.stack([np.ones(blocks.size), x, y], axis=1)
    if blocks.size < 9:
        return
    fit, *_ = np.linalg.lstsq(design, blocks.reshape(-1), rcond=None)
    scatter = np.std(blocks.reshape(-1) - design @ fit, ddof=3)
    doubt = scatter * np.sqrt(np.linalg.inv(design.T @ design)[1, 1])
    rise = float(np.hypot(fit[1], fit[2]))
    if rise > max(GRADIENT * abs(fit[0]), LEAST_GRADIENT, SIGNIFICANT * doubt):
        yield Finding(
            "warning",
            stack.name,
            f"light leak or glow: the dark rises by {rise:.0f} DN across the frame, its mean is"
            f" {fit[0]:.0f} DN",
            "cover the sensor and take the darks again",
            DARK_NAMES,
        )


def lamp_drift(stack: Stack, sketches: Sequence[Sketch], known: Reference) -> Iterator[Finding]:
    """Light that changes within a stack of flats."""
    levels = [s.level - (known.zero or 0.0) for s in sketches]
    middle = float(np.median(levels)) if levels else 0.0
    if len(levels) < 2 or middle <= known.notable:
        return
    span = (max(levels) - min(levels)) / middle
    if span > DRIFT:
        yield Finding(
            "warning",
            stack.name,
            f"lamp out of line: the light changes by {100 * span:.0f} % within the stack",
            "let the lamp settle; levels are scaled to their mean, linearity is not to be trusted",
            ("linearity_error",),
        )


def saturated(stacks: Sequence[tuple[Stack, Sequence[Sketch]]]) -> Iterator[Finding]:
    """Flats at the converter's last code where unsaturated ones are needed."""
    flats = [(stack, found) for stack, found in stacks if stack.kind == "flat" and found]
    full = [stack for stack, found in flats if np.mean([s.full for s in found]) > SATURATED]
    if flats and len(full) == len(flats):
        yield Finding(
            "error",
            "flats",
            "every flat is saturated",
            "take flats with less light",
            (*FLAT_NAMES, "linearity_error", "dead_pixels", "dim_pixels", "bright_pixels"),
        )
        return
    large = [stack for stack, found in flats if len(found) >= 3]
    if large and all(stack in full for stack in large):
        yield Finding(
            "error",
            large[0].name,
            "saturated: the flats for the master are at the converter's last code",
            "take them with less light",
            ("prnu", "dead_pixels", "dim_pixels", "bright_pixels"),
        )


def temperature_out_of_line(stacks: Sequence[Stack]) -> Iterator[Finding]:
    """A single frame whose temperature sets it apart from frames otherwise alike."""
    groups: dict[tuple[object, ...], list[Stack]] = {}
    for stack in stacks:
        if stack.temperature is not None:
            exposure = None if stack.kind == "bias" else stack.exposure
            key = (stack.kind, exposure, stack.wavelength, stack.level, stack.phase_time)
            groups.setdefault(key, []).append(stack)
    for group in groups.values():
        single = [stack for stack in group if len(stack.frames) == 1]
        rest = [stack for stack in group if len(stack.frames) >= 3]
        if len(single) == 1 and rest:
            usual = max(rest, key=lambda stack: len(stack.frames))
            yield Finding(
                "warning",
                single[0].frames[0].label,
                f"temperature out of line: {single[0].temperature:.1f} degC, frames otherwise"
                f" alike have {usual.temperature:.1f} degC; it stands apart from them",
                "let the temperature settle, take the frame again",
            )


def clock_backwards(frames: Sequence[Frame]) -> Iterator[Finding]:
    """Frames numbered in a row whose times go back.

    Only names that are equal but for their numbers are compared, so that names which say
    nothing about order raise nothing.
    """
    series: dict[tuple[str, str], list[Frame]] = {}
    for frame in frames:
        if frame.time is not None:
            series.setdefault((frame.kind, DIGITS.sub("#", frame.label)), []).append(frame)
    for members in series.values():
        members.sort(key=lambda frame: natural(frame.label))
        steps = [
            (first, second)
            for first, second in pairwise(members)
            if first.time is not None and second.time is not None and second.time < first.time
        ]
        if steps and len(steps) <= max(1, (len(members) - 1) // 5):
            first, second = steps[0]
            assert first.time is not None and second.time is not None
            yield Finding(
                "warning",
                second.label,
                f"clock going backwards: taken at {_clock(second.time)}, the frame before it"
                f" ({first.label}) at {_clock(first.time)}",
                "set the bench's clock; frames are joined in the order of their times",
            )


def _clock(time: float) -> str:
    return datetime.fromtimestamp(time, UTC).isoformat(timespec="seconds").replace("+00:00", "Z")


def too_few(stacks: Sequence[Stack]) -> Iterator[Finding]:
    """Stacks too small for what they are taken for."""
    biases = [stack for stack in stacks if stack.kind == "bias"]
    darks = [stack for stack in stacks if stack.kind == "dark"]
    flats = [stack for stack in stacks if stack.kind == "flat"]
    if biases and max(len(stack.frames) for stack in biases) < 2:
        yield Finding(
            "warning",
            biases[0].name,
            "a single bias frame shows no noise",
            "take two or more, better ten",
            ("read_noise",),
        )
    if darks and max(len(stack.frames) for stack in darks) < 3:
        yield Finding(
            "warning",
            darks[0].name,
            "fewer than three darks taken alike: particle events cannot be told from hot pixels",
            "take three or more, better five",
            ("hot_pixels",),
        )
    if flats and max(len(stack.frames) for stack in flats) < 2:
        yield Finding(
            "warning",
            flats[0].name,
            "no two flats are taken alike: there is no pair",
            "take flats in pairs",
            ("conversion_gain",),
        )
