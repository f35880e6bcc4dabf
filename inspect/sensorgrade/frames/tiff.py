"""TIFF files of one image with one sample for each pixel, 8, 16 or 32 bit."""

import logging
from pathlib import Path
from typing import Any

import numpy as np
import tifffile

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import (
    FileContents,
    Layout,
    Value,
    check_expansion,
    check_length,
    checked_shape,
    stored_plane,
)
from sensorgrade.frames.frame import Coding, Plane
from sensorgrade.frames.native import native_type
from sensorgrade.frames.unpack import DAMAGE

# Its remarks on damaged tags would go to stderr, beside the sentence that a user gets here.
logging.getLogger("tifffile").addHandler(logging.NullHandler())


def read_tiff(path: Path, layout: Layout) -> FileContents:
    """Tags and the plane of a TIFF file; contiguous samples are read in place.

    Values are the tags by name, those of Exif, and the lines ``KEY = value`` of the image
    description.

    Raises
    ------
    FrameError
        Damaged or truncated, several images, several samples for each pixel.
    """
    size = path.stat().st_size
    try:
        with tifffile.TiffFile(path) as tiff:
            page = tiff.pages.first
            several = _has_second_page(tiff)
            values = _values(page)
            # A damaged tag can hold several numbers where one belongs, which int() refuses.
            dtype, samples = page.dtype, int(page.samplesperpixel)
            rows, columns = int(page.imagelength), int(page.imagewidth)
            depth = int(page.imagedepth)
            offsets, lengths = map(int, page.dataoffsets), map(int, page.databytecounts)
            spans = list(zip(offsets, lengths, strict=False))
            contiguous = page.is_contiguous and page.compression == 1 and page.fillorder == 1
            whole = page.bitspersample in (8, 16, 32, 64)
            order = tiff.byteorder
    except DAMAGE as error:
        raise FrameError(f"{path}: is not a TIFF file that can be read ({error})") from error
    if several:
        raise FrameError(f"{path}: holds several images; write each to a file of its own")
    if samples != 1 or depth != 1 or dtype is None or dtype.kind not in "uif":
        raise FrameError(
            f"{path}: has {samples} samples of type {dtype} for each pixel; a raw frame has one"
            " number"
        )
    shape = checked_shape(path, rows, columns)
    needed = max((start + count for start, count in spans), default=0)
    check_length(path, needed=needed, found=size)
    stored = np.dtype(dtype).newbyteorder(order)
    if contiguous and whole and spans:
        first = spans[0][0]
        check_length(path, needed=first + rows * columns * stored.itemsize, found=size)
        plane = stored_plane(path, shape, stored=stored.str, offset=first)
    else:
        check_expansion(path, decoded=rows * columns * stored.itemsize, stored=size)
        coding = Coding("tiff", stored.str)
        plane = Plane(shape, native_type(stored), path=path, coding=coding)
    return FileContents(values, {"": plane})


def _has_second_page(tiff: Any) -> bool:
    try:
        tiff.pages[1]
    except IndexError:
        return False
    return True


def _values(page: Any) -> dict[str, Value]:
    values: dict[str, Value] = {}
    described = ""
    for tag in page.tags:
        if tag.name == "ImageDescription" and isinstance(tag.value, str):
            described = tag.value
        if isinstance(tag.value, dict):  # the Exif block
            values |= {str(name).upper(): item for name, item in _plain(tag.value).items()}
        else:
            values |= {tag.name.upper(): item for item in _plain({"": tag.value}).values()}
    for line in described.splitlines():
        key, equals, text = line.partition("=")
        if equals and key.strip():
            values[key.strip().upper()] = text.strip().strip("'\"")
    return values


def _plain(items: dict[Any, Any]) -> dict[Any, Value]:
    """Texts, numbers, and fractions as quotients; lists and bytes are left out."""
    plain: dict[Any, Value] = {}
    for name, item in items.items():
        if isinstance(item, (str, bool, int, float)):
            plain[name] = item
        elif isinstance(item, tuple) and _is_fraction(item):
            plain[name] = item[0] / item[1]
    return plain


def _is_fraction(item: tuple[Any, ...]) -> bool:
    return len(item) == 2 and all(type(part) is int for part in item) and item[1] != 0
