"""A raw frame as it lies on disk or in memory, and frames taken alike: the stack."""

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Section

KINDS = ("bias", "dark", "flat", "x-ray", "pump")


@dataclass(frozen=True, slots=True)
class Coding:
    """How samples lie that cannot be read in place, and must be decoded first.

    ``packing`` is ``"plain"`` or ``"gzip"`` for numbers of numpy type ``stored``, row after row
    from the plane's ``offset``; else the form of a whole image that a library unpacks, and
    ``index`` which image of the file. The value is zero + scale * stored; ``blank`` is the stored
    number that stands for no value.
    """

    packing: Literal["plain", "gzip", "fits tiles", "tiff", "columns first"]
    stored: str
    scale: float = 1.0
    zero: float = 0.0
    blank: int | None = None
    index: int = 0


@dataclass(frozen=True, slots=True)
class Plane:
    """One two-dimensional image whose samples can be read in row bands, any band first.

    Either ``data`` holds the samples (native uint16 or float32), or ``path`` and ``offset``
    say where they lie, row after row without gaps. ``dtype`` is ``"uint16"`` or ``"float32"``.
    ``swap`` says that the bytes stand in the other order than the machine's; ``flip`` that the
    top bit is inverted (FITS BZERO 32768). Anything else (compressed, scaled, 32-bit integer)
    carries a ``coding``; `decoded` replaces such planes by ones in a scratch folder, and must be
    called before the samples are read in bands.
    """

    shape: tuple[int, int]
    dtype: str
    path: Path | None = None
    offset: int = 0
    swap: bool = False
    flip: bool = False
    coding: Coding | None = None
    data: NDArray[np.uint16] | NDArray[np.float32] | None = field(default=None, compare=False)


@dataclass(frozen=True, slots=True)
class Frame:
    """One raw frame and what is known of how it was taken.

    ``planes`` has one entry for each image that the geometry reads: a single one keyed ``""``
    for a plain file, or one keyed by extension name for outputs kept apart. ``exposure`` [s],
    ``temperature`` [degC], ``time`` [s since 1970, UTC], ``phase_time`` [us]. ``level`` is the
    light in any proportional unit. ``wavelength`` is the text found ("550" nm or a filter name).
    ``path`` is the file as the user knows it (also when a scratch file holds the samples);
    ``label`` is that path below the source, with forward slashes, for reports and provenance.
    ``sections`` are those that the header states for an output, by the plane's key and keyword.
    """

    path: Path
    label: str
    kind: str
    planes: dict[str, Plane]
    exposure: float | None = None
    temperature: float | None = None
    level: float | None = None
    wavelength: str | None = None
    time: float | None = None
    cycles: int | None = None
    phase_time: float | None = None
    sections: dict[str, dict[str, Section]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Stack:
    """Frames of one kind taken alike, in the order of time (else of name).

    The values are those the frames share: exposure and the rest are the mean over frames.
    """

    kind: str
    frames: tuple[Frame, ...]
    exposure: float | None = None
    temperature: float | None = None
    level: float | None = None
    wavelength: str | None = None
    cycles: int | None = None
    phase_time: float | None = None

    @property
    def name(self) -> str:
        """Short text for people, such as ``"flat, 20 s, Blue"``."""
        parts = [self.kind]
        if self.exposure is not None and self.kind != "bias":
            parts.append(f"{self.exposure:g} s")
        if self.level is not None:
            parts.append(f"level {self.level:g}")
        if self.wavelength is not None:
            parts.append(self.wavelength)
        if self.phase_time is not None:
            parts.append(f"{self.phase_time:g} us")
        if self.temperature is not None and self.kind in ("dark", "pump"):
            parts.append(f"{self.temperature:.1f} degC")
        return ", ".join(parts)


@dataclass(frozen=True, slots=True)
class DeviceFrames:
    """All that was found of one device.

    ``folder`` is a safe file name made from ``serial``, unique within the lot.
    """

    serial: str
    folder: str
    stacks: tuple[Stack, ...]
    findings: tuple[Finding, ...] = ()
    lot: str | None = None
    wafer: str | None = None
    die_row: int | None = None
    die_column: int | None = None

    @property
    def frames(self) -> tuple[Frame, ...]:
        """Every frame, stack after stack."""
        return tuple(frame for stack in self.stacks for frame in stack.frames)


def at_absolute_paths(device: DeviceFrames) -> DeviceFrames:
    """The device with paths that mean the same wherever a process was started."""
    stacks = []
    for stack in device.stacks:
        frames = []
        for frame in stack.frames:
            planes = {
                name: replace(plane, path=plane.path and plane.path.absolute())
                for name, plane in frame.planes.items()
            }
            frames.append(replace(frame, path=frame.path.absolute(), planes=planes))
        stacks.append(replace(stack, frames=tuple(frames)))
    return replace(device, stacks=tuple(stacks))
