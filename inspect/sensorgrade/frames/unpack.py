"""Images that only a library can unpack: tile-compressed FITS, TIFF, arrays kept by columns."""

import struct
import warnings
import zlib
from pathlib import Path
from typing import Any

import numpy as np
import tifffile
from astropy.io import fits
from numpy.typing import NDArray

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import Coding

# What the libraries raise on damaged files; they promise no single class.
DAMAGE = (
    ValueError,
    TypeError,
    KeyError,
    IndexError,
    AttributeError,
    ArithmeticError,
    RuntimeError,
    OSError,
    EOFError,
    MemoryError,
    AssertionError,
    struct.error,
    zlib.error,
    fits.VerifyError,
    tifffile.TiffFileError,
)


def unpacked_image(
    path: Path, shape: tuple[int, int], coding: Coding, *, offset: int
) -> NDArray[Any]:
    """The stored numbers of a whole image, shape (M, N), before scale and zero.

    Raises
    ------
    FrameError
        The image is damaged, or not of the shape and type its header gave.
    """
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            if coding.packing == "fits tiles":
                image = _fits_tiles(path, coding.index)
            elif coding.packing == "tiff":
                image = tifffile.imread(path, key=coding.index)
            else:
                columns_first = np.fromfile(
                    path, coding.stored, count=shape[0] * shape[1], offset=offset
                )
                image = columns_first.reshape(shape, order="F")
    except Exception as error:
        # astropy's decompressor has an exception of its own, in a module without a public name.
        if not isinstance(error, DAMAGE) and type(error).__name__ != "CfitsioException":
            raise
        raise FrameError(f"{path}: its compressed image is damaged ({error})") from error
    image = np.squeeze(image) if image.ndim > 2 else image
    if image.shape != shape:
        raise FrameError(f"{path}: unpacks to {image.shape} pixels, its header has {shape}")
    return image


def _fits_tiles(path: Path, index: int) -> NDArray[Any]:
    with fits.open(path, memmap=False, do_not_scale_image_data=True) as units:
        image: NDArray[Any] = np.asarray(units[index].data)
        return image
