"""Compiled loops over every sample: arrays and numbers only."""

import os
import tempfile

import numba


@numba.njit
def _probe() -> None:
    """Nothing; shows whether compiled code can be kept between runs."""


try:
    _probe.enable_caching()
except RuntimeError:
    # Neither this package nor the user's cache folder can be written. Workers that this process
    # starts share what it compiles; a folder that outlived it could be planted by somebody else.
    _folder = tempfile.TemporaryDirectory(prefix="sensorgrade-kernels-", ignore_cleanup_errors=True)
    os.environ["NUMBA_CACHE_DIR"] = numba.config.CACHE_DIR = _folder.name
