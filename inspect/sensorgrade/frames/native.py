"""Which of the two sample types every frame is brought to: uint16 or float32."""

import numpy as np
from numpy.typing import ArrayLike, DTypeLike, NDArray

# FITS stores unsigned 16-bit numbers as signed ones with this offset (FITS 4.0, 5.2.5).
UNSIGNED_16 = 32768.0


def native_type(stored: DTypeLike, *, scale: float = 1.0, zero: float = 0.0) -> str:
    """``"uint16"`` where every stored number fits it exactly, else ``"float32"``.

    The choice hangs on the type and never on the values, so that frames taken alike come out
    alike. float32 holds whole DN exactly up to 2**24; larger ones are rounded to 1 part in 2**24.
    """
    kind = np.dtype(stored)
    if scale == 1.0:
        if kind.kind == "u" and kind.itemsize <= 2 and zero == 0.0:
            return "uint16"
        if kind.kind == "i" and kind.itemsize == 2 and zero == UNSIGNED_16:
            return "uint16"
    return "float32"


def native(
    stored: ArrayLike, *, scale: float = 1.0, zero: float = 0.0
) -> NDArray[np.uint16] | NDArray[np.float32]:
    """``zero + scale * stored`` as native uint16 or float32, by the rule of `native_type`."""
    array = np.asarray(stored)
    if native_type(array.dtype, scale=scale, zero=zero) == "uint16":
        if array.dtype.kind == "i":
            return (array.astype(np.int32) + int(zero)).astype(np.uint16)
        return np.ascontiguousarray(array, dtype=np.uint16)
    if scale == 1.0 and zero == 0.0:
        return np.ascontiguousarray(array, dtype=np.float32)
    return (zero + scale * array.astype(np.float64)).astype(np.float32)
