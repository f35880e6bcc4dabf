"""The audit: frames that are not what they say are left out, and every oddity becomes a finding."""

import dataclasses
from collections.abc import Iterator, Sequence

import numpy as np

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import DeviceFrames, Stack
from sensorgrade.frames.geometry import Geometry
from sensorgrade.masters.audit_codes import converter_findings
from sensorgrade.masters.audit_frames import (
    Suspicion,
    broken,
    identical,
    lit,
    mirrored,
    overscan_out_of_line,
    reference,
    unlit,
)
from sensorgrade.masters.audit_stacks import (
    clock_backwards,
    lamp_drift,
    light_leak,
    saturated,
    temperature_out_of_line,
    too_few,
)
from sensorgrade.masters.sketch import Sketch, sketch
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Sensor

# What cannot be decided once no frame of a kind is left.
NEEDED_FOR = {
    "bias": ("bias_level", "read_noise"),
    "dark": ("dark_current", "dsnu", "hot_pixels"),
    "flat": ("conversion_gain", "prnu", "linearity_error", "saturation_capacity", "dead_pixels"),
    "x-ray": ("conversion_gain",),
    "pump": ("traps",),
}
LAST_CODE = 65535


def audited(device: DeviceFrames, geometry: Geometry, sensor: Sensor) -> DeviceFrames:
    """The device without the frames that are not what they say, and with the audit's findings.

    A sample of rows of every frame is read; planes must carry no coding. A frame is left out when
    it cannot be read, has no variance, repeats another, contradicts its kind, or is mirrored
    against its fellows. What is wrong with a stack or with the set is told and left in.
    Measurements that a finding makes undecidable are named in it.
    """
    findings: list[Finding] = []
    looked: list[Sketch] = []
    gone: dict[int, Finding] = {}
    last_code = LAST_CODE if sensor.adc_bits is None else (1 << sensor.adc_bits) - 1
    for number, stack in enumerate(device.stacks):
        for frame in stack.frames:
            try:
                looked.append(
                    sketch(
                        frame,
                        geometry,
                        stack=number,
                        last_code=last_code,
                        mosaic=sensor.colour != "none",
                    )
                )
            except (FrameError, OSError) as error:
                why = error.strerror or "" if isinstance(error, OSError) else str(error)
                gone[id(frame)] = Finding(
                    "error",
                    frame.label,
                    f"unreadable: {why.removeprefix(f'{frame.path}: ')}; it was left out",
                    "restore the file or take it out",
                )
    for suspicion in _suspicions(looked):
        frame = suspicion.sketch.frame
        gone[id(frame)] = Finding(
            "error", frame.label, f"{suspicion.seen}; it was left out", suspicion.remedy
        )
    stacks = tuple(_without(device.stacks, gone))
    kinds = {stack.kind for stack in stacks}
    for stack in device.stacks:
        for frame in stack.frames:
            if id(frame) in gone:
                lost = () if frame.kind in kinds else NEEDED_FOR[frame.kind]
                findings.append(dataclasses.replace(gone[id(frame)], undecides=lost))
    kept = [s for s in looked if id(s.frame) not in gone]
    findings += _about_stacks(stacks, kept, sensor)
    return dataclasses.replace(device, stacks=stacks, findings=(*device.findings, *findings))


def _suspicions(looked: Sequence[Sketch]) -> list[Suspicion]:
    """One suspicion for each frame that fails a check; each check sees those left so far."""
    suspicions = list(broken(looked))
    rest = _unsuspected(looked, suspicions)
    known = reference(rest)
    for found in (
        mirrored(rest),
        overscan_out_of_line(rest, known),
        lit(rest, known),
        unlit(rest, known),
    ):
        suspicions += found
    # Last, so that of two equal frames of different kinds the one that fits its kind stays.
    suspicions += identical(_unsuspected(looked, suspicions))
    first = {id(suspicion.sketch): suspicion for suspicion in reversed(suspicions)}
    return list(first.values())


def _unsuspected(looked: Sequence[Sketch], suspicions: Sequence[Suspicion]) -> list[Sketch]:
    suspected = {id(suspicion.sketch) for suspicion in suspicions}
    return [s for s in looked if id(s) not in suspected]


def _without(stacks: Sequence[Stack], gone: dict[int, Finding]) -> Iterator[Stack]:
    for stack in stacks:
        frames = tuple(frame for frame in stack.frames if id(frame) not in gone)
        if frames:
            yield dataclasses.replace(stack, frames=frames)


def _about_stacks(
    stacks: Sequence[Stack], kept: Sequence[Sketch], sensor: Sensor
) -> Iterator[Finding]:
    known = reference(kept)
    of = {id(s.frame): s for s in kept}
    members = [(stack, [of[id(frame)] for frame in stack.frames]) for stack in stacks]
    biases = [s for s in kept if s.frame.kind == "bias"]
    for stack, found in members:
        if stack.kind == "dark":
            yield from light_leak(stack, found, biases, known)
        elif stack.kind == "flat":
            yield from lamp_drift(stack, found, known)
    yield from saturated(members)
    yield from temperature_out_of_line(stacks)
    yield from clock_backwards([frame for stack in stacks for frame in stack.frames])
    yield from too_few(stacks)
    histogram = np.zeros(1 << 16, np.int64)
    for s in kept:
        if s.counts is not None:
            histogram[int(s.lowest) : int(s.lowest) + len(s.counts)] += s.counts
    yield from converter_findings(histogram, bits=sensor.adc_bits)
