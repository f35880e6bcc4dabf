"""Frames made from arrays in memory: for the Python interface, simulation and tests."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from numpy.typing import NDArray

from sensorgrade.errors import FrameError
from sensorgrade.frames.frame import KINDS, Frame, Plane
from sensorgrade.frames.native import native


def frame_from_array(
    array: NDArray[Any] | Mapping[str, NDArray[Any]],
    *,
    kind: str,
    exposure: float | None = None,
    temperature: float | None = None,
    level: float | None = None,
    wavelength: str | None = None,
    time: float | None = None,
    cycles: int | None = None,
    phase_time: float | None = None,
    name: str = "array",
) -> Frame:
    """A frame whose samples are in memory.

    Parameters
    ----------
    array : ndarray of shape (M, N), or mapping from extension name to such arrays [DN]
        Unsigned 8 and 16-bit samples are held as uint16, all others as float32.
    kind : str
        bias, dark, flat, x-ray or pump.
    exposure, temperature, time, phase_time
        [s], [degC], [s since 1970, UTC], [us].
    level : float
        Light in any proportional unit.
    wavelength : str
        Number of nm as text, or a filter's name.
    name : str
        What reports call the frame.

    Raises
    ------
    FrameError
        The kind is unknown or an array is not two-dimensional.
    """
    if kind not in KINDS:
        raise FrameError(f"{name}: kind {kind!r} is not one of {', '.join(KINDS)}")
    arrays = array if isinstance(array, Mapping) else {"": array}
    return Frame(
        path=Path(name),
        label=name,
        kind=kind,
        planes={key: _plane(name, image) for key, image in arrays.items()},
        exposure=exposure,
        temperature=temperature,
        level=level,
        wavelength=wavelength,
        time=time,
        cycles=cycles,
        phase_time=phase_time,
    )


def _plane(name: str, image: NDArray[Any]) -> Plane:
    if image.ndim != 2 or image.size == 0:
        raise FrameError(f"{name}: a frame needs rows and columns, this array has {image.shape}")
    data = native(image)
    return Plane(shape=(image.shape[0], image.shape[1]), dtype=str(data.dtype), data=data)
