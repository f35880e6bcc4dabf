"""Open raw files and their samples, band of rows by band of rows."""

import os
import resource
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import Frame, Plane, Stack

Samples = NDArray[np.uint16] | NDArray[np.float32]
SPARE = 64  # descriptors left for everything but frames


@dataclass(frozen=True, slots=True)
class OpenStack:
    """A stack's planes of one extension, ready to be read.

    ``dtype`` is uint16 when every plane is, else float32. ``swap`` and ``flip`` (L,) uint16 are
    the masks by which `kernels.stack.native` makes values of samples as they were read.
    """

    stack: Stack
    planes: tuple[Plane, ...]
    descriptors: tuple[int, ...]
    dtype: np.dtype[np.uint16] | np.dtype[np.float32]
    swap: NDArray[np.uint16]
    flip: NDArray[np.uint16]

    @property
    def columns(self) -> int:
        """Width of the raw frame."""
        return self.planes[0].shape[1]


@contextmanager
def opened_files(frames: tuple[Frame, ...]) -> Iterator[dict[Path, int]]:
    """Descriptors of every file that the frames lie in, closed at the end.

    Raises
    ------
    FrameError
        A file cannot be opened; the message names it.
    """
    paths = {plane.path for frame in frames for plane in frame.planes.values() if plane.path}
    soft, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    if soft != resource.RLIM_INFINITY and len(paths) + SPARE > soft:
        wanted = len(paths) + SPARE
        limit = wanted if hard == resource.RLIM_INFINITY else min(wanted, hard)
        resource.setrlimit(resource.RLIMIT_NOFILE, (limit, hard))
    descriptors: dict[Path, int] = {}
    try:
        for path in sorted(paths):
            try:
                descriptors[path] = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
            except OSError as error:
                raise FrameError(
                    f"{path}: cannot be opened ({error.strerror}); restore the file or take it out"
                ) from error
        yield descriptors
    finally:
        for descriptor in descriptors.values():
            os.close(descriptor)


def open_stack(stack: Stack, extension: str, descriptors: dict[Path, int]) -> OpenStack:
    """The planes of ``extension`` of every frame of the stack."""
    planes = tuple(frame.planes[extension] for frame in stack.frames)
    integer = all(plane.dtype == "uint16" for plane in planes)
    return OpenStack(
        stack=stack,
        planes=planes,
        descriptors=tuple(
            -1 if plane.path is None else descriptors[plane.path] for plane in planes
        ),
        dtype=np.dtype(np.uint16) if integer else np.dtype(np.float32),
        swap=np.array([0xFFFF * (plane.swap and integer) for plane in planes], np.uint16),
        flip=np.array([0x8000 * (plane.flip and integer) for plane in planes], np.uint16),
    )


def read_band(source: OpenStack, start: int, stop: int, out: Samples) -> None:
    """Read raw rows ``start`` to ``stop`` of every frame into ``out`` (L, R, W).

    16-bit samples are left as stored; everything else becomes native float32.

    Raises
    ------
    FrameError
        A file ends too early or cannot be read; the message names it.
    """
    for frame, plane, descriptor, rows in zip(
        source.stack.frames, source.planes, source.descriptors, out, strict=True
    ):
        if source.dtype == np.uint16:
            _fill(frame, plane, descriptor, start, stop, rows)
        elif plane.dtype == "float32":
            _fill(frame, plane, descriptor, start, stop, rows)
            if plane.swap and plane.data is None:
                rows.byteswap(inplace=True)
        else:
            stored = np.empty(rows.shape, np.uint16)
            _fill(frame, plane, descriptor, start, stop, stored)
            if plane.swap:
                stored.byteswap(inplace=True)
            rows[:] = stored ^ np.uint16(0x8000 if plane.flip else 0)


def read_rows(source: OpenStack, rows: NDArray[np.int64]) -> Samples:
    """Values of single raw rows of every frame, (L, S, W), in native uint16 or float32."""
    out = np.empty((len(source.planes), len(rows), source.columns), source.dtype)
    for index, row in enumerate(rows):
        line = np.empty((len(source.planes), 1, source.columns), source.dtype)
        read_band(source, int(row), int(row) + 1, line)
        out[:, index] = line[:, 0]
    if out.dtype == np.uint16:
        for frame, swap, flip in zip(out, source.swap, source.flip, strict=True):
            if swap:
                frame.byteswap(inplace=True)
            if flip:
                frame ^= flip
    return out


def _fill(
    frame: Frame, plane: Plane, descriptor: int, start: int, stop: int, rows: Samples
) -> None:
    """Samples of one frame as stored, into contiguous ``rows``."""
    if plane.data is not None:
        rows[:] = plane.data[start:stop]
        return
    line = plane.shape[1] * rows.itemsize
    wanted = (stop - start) * line
    view = memoryview(rows).cast("B")  # type: ignore[arg-type]
    done = 0
    while done < wanted:
        try:
            found = os.preadv(descriptor, [view[done:]], plane.offset + start * line + done)
        except OSError as error:
            raise FrameError(
                f"{frame.label}: cannot be read ({error.strerror}); copy the file again or take"
                " it out"
            ) from error
        if found == 0:
            raise FrameError(
                f"{frame.label}: ends before row {stop} of {plane.shape[0]};"
                " copy the file again or take it out"
            )
        done += found
