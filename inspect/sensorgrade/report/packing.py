"""Numbers in a page: as base64 text of their bytes, deflated."""

import base64
import zlib
from typing import Any

from numpy.typing import NDArray


def packed_numbers(values: NDArray[Any], dtype: str) -> str:
    """Values of any shape as base64 text of a zlib stream of little-endian numbers ("<f8"…)."""
    return base64.b64encode(zlib.compress(values.astype(dtype).tobytes(), 6)).decode()
