"""NumPy files: the header only, and never a pickle."""

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

MAX_HEADER = 10_000  # bytes, numpy's own bound for files that are not trusted


def read_npy(path: Path, layout: Layout) -> FileContents:
    """The plane of a two-dimensional .npy file; it has no header values.

    Raises
    ------
    FrameError
        Not a .npy file of a two-dimensional numeric array, or truncated.
    """
    with path.open("rb") as file:
        try:
            version = np.lib.format.read_magic(file)
            read = {
                (1, 0): np.lib.format.read_array_header_1_0,
                (2, 0): np.lib.format.read_array_header_2_0,
            }[version]
            shape, by_columns, dtype = read(file, max_header_size=MAX_HEADER)
        except (ValueError, KeyError) as error:
            raise FrameError(f"{path}: is not a NumPy array file that can be read") from error
        offset = file.tell()
    if dtype.kind not in "uif" or dtype.itemsize > 8:
        raise FrameError(f"{path}: holds {dtype} values; a frame has plain numbers")
    if len(shape) != 2:
        raise FrameError(f"{path}: its array has shape {shape}; a frame has rows and columns")
    rows, columns = checked_shape(path, *shape)
    check_length(path, needed=offset + rows * columns * dtype.itemsize, found=path.stat().st_size)
    if by_columns and rows > 1 and columns > 1:
        coding = Coding("columns first", dtype.str)
        plane = Plane((rows, columns), native_type(dtype), path=path, offset=offset, coding=coding)
    else:
        plane = stored_plane(path, (rows, columns), stored=dtype.str, offset=offset)
    return FileContents({}, {"": plane})
