"""Headerless binary files, by the layout that the recipe gives."""

from pathlib import Path

import numpy as np

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import FileContents, Layout, checked_shape, stored_plane


def read_raw(path: Path, layout: Layout) -> FileContents:
    """The plane of a headerless file; it has no header values.

    Raises
    ------
    FrameError
        The recipe gives no layout, or the file's size is not the layout's.
    """
    raw = layout.raw
    if raw is None:
        raise FrameError(
            f"{path}: is headerless, and the recipe gives no layout for it; add frames.raw with"
            " dtype, rows and columns"
        )
    rows, columns = checked_shape(path, raw.rows, raw.columns)
    stored = np.dtype(raw.dtype).newbyteorder("<" if raw.byte_order == "little" else ">")
    needed = raw.skip + rows * columns * stored.itemsize
    found = path.stat().st_size
    if found != needed:
        raise FrameError(
            f"{path}: has {found} bytes, frames.raw describes {needed} ({raw.skip} skipped, {rows}"
            f" rows of {columns} {raw.dtype}); correct the layout or take the file out"
        )
    return FileContents(
        {}, {"": stored_plane(path, (rows, columns), stored=stored.str, offset=raw.skip)}
    )
