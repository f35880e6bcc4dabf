"""An 8-bit grey image as PNG bytes."""

import struct
import zlib

import numpy as np
from numpy.typing import NDArray


def png(grey: NDArray[np.uint8]) -> bytes:
    """PNG of an array (M, N), first row on top (ISO/IEC 15948: grey, depth 8, filter 0)."""
    rows, columns = grey.shape
    lines = np.zeros((rows, columns + 1), dtype=np.uint8)
    lines[:, 1:] = grey
    header = struct.pack(">IIBBBBB", columns, rows, 8, 0, 0, 0, 0)
    return b"".join(
        (
            b"\x89PNG\r\n\x1a\n",
            _chunk(b"IHDR", header),
            _chunk(b"IDAT", zlib.compress(lines.tobytes(), 1)),
            _chunk(b"IEND", b""),
        )
    )


def _chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
