"""Coded samples to native ones: into a scratch folder for a whole device, or one band at a time."""

import dataclasses
import gzip
import zlib
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import IO, Any, BinaryIO, cast

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import Coding, DeviceFrames, Frame, Plane
from sensorgrade.frames.native import native
from sensorgrade.frames.unpack import unpacked_image
from sensorgrade.measurement import Finding

BAND_BYTES = 4 << 20  # decoded at a time


def decoded(device: DeviceFrames, *, scratch: Path) -> DeviceFrames:
    """The device with every coded plane replaced by one that can be read in place.

    Samples go to files in the folder ``scratch``, which the caller removes after use. A frame
    that cannot be decoded is left out with a finding, a stack without frames likewise.

    Raises
    ------
    OSError
        The scratch folder cannot be written.
    """
    if all(plane.coding is None for frame in device.frames for plane in frame.planes.values()):
        return device
    findings = list(device.findings)
    stacks = []
    number = 0
    for stack in device.stacks:
        frames = []
        for frame in stack.frames:
            target = scratch / f"{number}"
            number += 1
            try:
                frames.append(_decoded_frame(frame, target))
            except FrameError as error:
                seen = str(error).removeprefix(f"{frame.path}: ")
                remedy = "copy it again or take it out; it was left out"
                findings.append(Finding("error", frame.label, seen, remedy))
        if frames:
            stacks.append(dataclasses.replace(stack, frames=tuple(frames)))
    return dataclasses.replace(device, stacks=tuple(stacks), findings=tuple(findings))


def _decoded_frame(frame: Frame, target: Path) -> Frame:
    planes = {}
    for index, (key, plane) in enumerate(frame.planes.items()):
        if plane.coding is None:
            planes[key] = plane
            continue
        path = target.with_name(f"{target.name}-{index}")
        with path.open("wb") as file:
            for band in _bands(plane):
                file.write(band.data)
        planes[key] = Plane(plane.shape, plane.dtype, path=path)
    return dataclasses.replace(frame, planes=planes)


def read_plane(
    plane: Plane, row_start: int, row_stop: int
) -> NDArray[np.uint16] | NDArray[np.float32]:
    """Native samples of rows ``row_start`` up to ``row_stop`` of any plane, coded or not.

    Returns
    -------
    ndarray of shape (row_stop - row_start, N), uint16 or float32 [DN]

    Raises
    ------
    FrameError
        The file is damaged or shorter than it was.
    """
    if plane.data is not None:
        return plane.data[row_start:row_stop]
    if plane.coding is not None:
        return np.concatenate(list(_bands(plane)))[row_start:row_stop]
    with cast(Path, plane.path).open("rb") as file:
        return _stored_rows(file, plane, row_start, row_stop)


def read_rows(plane: Plane, rows: Sequence[int]) -> NDArray[np.uint16] | NDArray[np.float32]:
    """Native samples of single rows, shape (len(rows), N) [DN], of a plane without coding.

    Raises
    ------
    FrameError
        The file is damaged or shorter than it was.
    OSError
        The file cannot be opened.
    """
    if plane.data is not None:
        return plane.data[list(rows)]
    with cast(Path, plane.path).open("rb", buffering=0) as file:
        return np.concatenate([_stored_rows(file, plane, row, row + 1) for row in rows])


def _stored_rows(
    file: IO[bytes], plane: Plane, row_start: int, row_stop: int
) -> NDArray[np.uint16] | NDArray[np.float32]:
    columns = plane.shape[1]
    stored = np.dtype(plane.dtype)
    size = (row_stop - row_start) * columns * stored.itemsize
    file.seek(plane.offset + row_start * columns * stored.itemsize)
    data = file.read(size)
    if len(data) != size:
        raise FrameError(f"{plane.path}: truncated since it was first looked at; copy it again")
    rows = np.frombuffer(data, stored).reshape(row_stop - row_start, columns)
    if plane.swap:
        rows = rows.byteswap()
    return rows ^ np.uint16(0x8000) if plane.flip else rows


def _bands(plane: Plane) -> Iterator[NDArray[Any]]:
    """Native samples of a coded plane, band after band from the first row."""
    coding, path = cast(Coding, plane.coding), cast(Path, plane.path)
    if coding.packing in ("plain", "gzip"):
        stored = _stored_bands(path, plane, coding)
    else:
        stored = iter((unpacked_image(path, plane.shape, coding, offset=plane.offset),))
    for band in stored:
        if coding.blank is not None and (blanks := int(np.count_nonzero(band == coding.blank))):
            raise FrameError(
                f"{path}: holds {blanks} or more undefined samples (BLANK = {coding.blank}); a raw"
                " frame has a number in every pixel, take it out"
            )
        yield native(band, scale=coding.scale, zero=coding.zero)


def _stored_bands(path: Path, plane: Plane, coding: Coding) -> Iterator[NDArray[Any]]:
    rows, columns = plane.shape
    stored = np.dtype(coding.stored)
    step = max(1, BAND_BYTES // (columns * stored.itemsize))
    with path.open("rb") as raw:
        packed = coding.packing == "gzip"
        file = cast(BinaryIO, gzip.GzipFile(fileobj=raw)) if packed else raw
        try:
            file.seek(plane.offset)
            for row in range(0, rows, step):
                count = min(step, rows - row)
                data = file.read(count * columns * stored.itemsize)
                if len(data) < count * columns * stored.itemsize:
                    raise FrameError(f"{path}: truncated: its samples end at row {row} of {rows}")
                yield np.frombuffer(data, stored).reshape(count, columns)
            if packed:  # what follows holds the checksum of the stream
                for _ in range(rows // step + 1):
                    if not file.read(BAND_BYTES):
                        break
        except (zlib.error, EOFError, gzip.BadGzipFile) as error:
            raise FrameError(f"{path}: its gzip stream is damaged ({error})") from error
