"""What a reader finds in a file without reading its samples, and how large a file may be."""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import Coding, Plane
from sensorgrade.frames.native import UNSIGNED_16, native_type
from sensorgrade.recipe.model import RawBinary

Value = str | float | int | bool

MAX_SAMPLES = 1 << 30  # of one image; the largest sensors made have a quarter of that
MAX_EXPANSION = 200  # decoded over stored bytes; noise that was compressed stays below 10
FREE_EXPANSION = 64 << 20  # decoded bytes up to which any expansion is harmless


@dataclass(frozen=True, slots=True)
class FileContents:
    """``values`` by upper-case keyword; ``planes`` as in Frame; ``remarks`` are worth a warning.

    ``headers`` has the values of each plane's own header, by the plane's key, where a file has
    several headers.
    """

    values: dict[str, Value]
    planes: dict[str, Plane]
    remarks: tuple[str, ...] = ()
    headers: dict[str, dict[str, Value]] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Layout:
    """What a reader must be told: extensions that outputs are read from, and the raw layout."""

    extensions: tuple[str, ...] = ()
    raw: RawBinary | None = None


def checked_shape(path: Path, rows: int, columns: int) -> tuple[int, int]:
    """(rows, columns), once they are found to be those of an image one could hold.

    Raises
    ------
    FrameError
        No pixels, or more than `MAX_SAMPLES`.
    """
    if rows < 1 or columns < 1:
        raise FrameError(f"{path}: states {rows} rows and {columns} columns; a frame has pixels")
    if rows * columns > MAX_SAMPLES:
        raise FrameError(
            f"{path}: states {rows} x {columns} pixels (rows x columns), more than the"
            f" {MAX_SAMPLES} that a frame may have; the header is damaged or hostile"
        )
    return rows, columns


def check_expansion(path: Path, *, decoded: int, stored: int) -> None:
    """Refuse a compressed image that claims to grow beyond what sensor data can.

    Raises
    ------
    FrameError
        The claim is absurd; the message states both sizes.
    """
    if decoded > FREE_EXPANSION and decoded > MAX_EXPANSION * stored:
        raise FrameError(
            f"{path}: claims to expand from {stored} to {decoded} bytes, more than"
            f" {MAX_EXPANSION} times; it is damaged or hostile, take it out"
        )


def check_length(path: Path, *, needed: int, found: int) -> None:
    """Refuse a file that ends before its last sample.

    Raises
    ------
    FrameError
        The file is too short; the message states both sizes.
    """
    if needed > found:
        raise FrameError(
            f"{path}: truncated: the image ends at byte {needed}, the file has {found};"
            " copy it again or take it out"
        )


def stored_plane(
    path: Path,
    shape: tuple[int, int],
    *,
    stored: str,
    offset: int,
    scale: float = 1.0,
    zero: float = 0.0,
    blank: int | None = None,
) -> Plane:
    """A plane of uncompressed samples: read in place where it can be, else to be decoded."""
    kind = np.dtype(stored)
    dtype = native_type(kind, scale=scale, zero=zero)
    signed = kind.kind == "i" and kind.itemsize == 2 and zero == UNSIGNED_16
    plain = zero == 0.0 and kind == np.dtype(dtype).newbyteorder(kind.byteorder)
    if scale == 1.0 and blank is None and (plain or signed):
        return Plane(shape, dtype, path=path, offset=offset, swap=not kind.isnative, flip=signed)
    coding = Coding("plain", stored, scale=scale, zero=zero, blank=blank)
    return Plane(shape, dtype, path=path, offset=offset, coding=coding)
