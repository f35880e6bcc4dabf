"""NumPy files: the header only, and never a pickle.

The header is matched and not evaluated (NumPy format versions 1.0 and 2.0, numpy.lib.format).
"""

import re
from pathlib import Path

import numpy as np

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import (
    FileContents,
    Layout,
    check_length,
    checked_shape,
    stored_plane,
)
from sensorgrade.frames.frame import Coding, Plane
from sensorgrade.frames.native import native_type

MAGIC = b"\x93NUMPY"
LENGTH_BYTES = {b"\x01\x00": 2, b"\x02\x00": 4}  # by version
LONGEST_HEADER = 10_000  # bytes
HEADER = re.compile(
    r"\{'descr': (?P<type>[^:]*), 'fortran_order': (?P<by_columns>True|False),"
    r" 'shape': \((?P<shape>[0-9, ]*)\), ?\}\s*"
)
TYPE = re.compile(r"'([<>|=]?[uif][1248])'")


def read_npy(path: Path, layout: Layout) -> FileContents:
    """The plane of a two-dimensional .npy file; it has no header values.

    Raises
    ------
    FrameError
        Not a .npy file of a two-dimensional numeric array, or truncated.
    """
    with path.open("rb") as file:
        start = file.read(8)
        width = LENGTH_BYTES.get(start[6:]) if start[:6] == MAGIC else None
        length = int.from_bytes(file.read(width), "little") if width is not None else 0
        header = file.read(min(length, LONGEST_HEADER)).decode("latin-1")
        offset = file.tell()
    found = HEADER.fullmatch(header)
    if found is None or len(header) != length:
        raise FrameError(f"{path}: is not a NumPy array file that can be read")
    plain = TYPE.fullmatch(found["type"])
    try:
        dtype = np.dtype(plain[1]) if plain else None
    except TypeError:  # such as a float of one byte
        dtype = None
    if dtype is None:
        name = found["type"].strip("'|")
        raise FrameError(
            f"{path}: holds {'object' if name == 'O' else name} values; a frame has plain numbers"
        )
    axes = [axis.strip() for axis in found["shape"].split(",") if axis.strip()]
    if len(axes) != 2 or not all(axis.isdigit() and len(axis) < 12 for axis in axes):
        raise FrameError(
            f"{path}: its array has shape ({found['shape']}); a frame has rows and columns"
        )
    rows, columns = checked_shape(path, int(axes[0]), int(axes[1]))
    check_length(path, needed=offset + rows * columns * dtype.itemsize, found=path.stat().st_size)
    if found["by_columns"] == "True" and rows > 1 and columns > 1:
        coding = Coding("columns first", dtype.str)
        plane = Plane((rows, columns), native_type(dtype), path=path, offset=offset, coding=coding)
    else:
        plane = stored_plane(path, (rows, columns), stored=dtype.str, offset=offset)
    return FileContents({}, {"": plane})
