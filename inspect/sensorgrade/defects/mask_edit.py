"""A mask as the readout downstream sees it: some bits, grown, cropped, turned, binned, joined."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter

from sensorgrade.defects.bits import BITS, BY_NAME, value_of
from sensorgrade.errors import RequestError
from sensorgrade.frames.geometry import fits_section
from sensorgrade.recipe.model import Section

ALL = sum(bit.value for bit in BITS)


@dataclass(frozen=True, slots=True, kw_only=True)
class Edit:
    """What is done to a mask, in the order of the fields.

    ``bits`` are the names kept, all if empty, less ``without``. ``grow`` maps a bit's name to the
    pixels by which whatever carries it is widened, in rows and in columns. ``flip`` names the
    axes that are reversed, ``"rows"`` (upside down) or ``"columns"``. ``rotate`` [degree], a
    multiple of 90, turns counterclockwise when row 0 is at the bottom, as FITS is shown. ``bin``
    is (rows, columns).
    """

    bits: tuple[str, ...] = ()
    without: tuple[str, ...] = ()
    grow: Mapping[str, int] = field(default_factory=dict)
    crop: Section | None = None
    flip: tuple[str, ...] = ()
    rotate: int = 0
    bin: tuple[int, int] = (1, 1)


def merged(masks: Sequence[NDArray[np.uint16]]) -> NDArray[np.uint16]:
    """Every bit that any of the masks (M, N) has.

    Raises
    ------
    RequestError
        Their shapes differ.
    """
    for mask in masks[1:]:
        _same_shape(masks[0], mask)
    joined: NDArray[np.uint16] = np.bitwise_or.reduce(np.stack(masks))
    return joined


def edited(mask: NDArray[np.uint16], edit: Edit) -> NDArray[np.uint16]:
    """The mask after every step of ``edit``.

    A pixel of a binned mask carries the bits of all its pixels.

    Raises
    ------
    RequestError
        A bit has no such name, the window leaves the mask, or bins do not fill it.
    """
    kept = (value_of(edit.bits) if edit.bits else ALL) & ~value_of(edit.without)
    mask = mask & np.uint16(kept)
    for name, pixels in edit.grow.items():
        mask = _grown(mask, np.uint16(value_of((name,))), pixels)
    if edit.crop is not None:
        mask = _cropped(mask, edit.crop)
    if "rows" in edit.flip:
        mask = mask[::-1]
    if "columns" in edit.flip:
        mask = mask[:, ::-1]
    mask = np.rot90(mask, -(edit.rotate // 90))
    return np.ascontiguousarray(_binned(mask, *edit.bin))


def _grown(mask: NDArray[np.uint16], bit: np.uint16, pixels: int) -> NDArray[np.uint16]:
    carries = (mask & bit).astype(np.uint16)
    wide: NDArray[np.uint16] = maximum_filter(carries, size=2 * pixels + 1, mode="constant", cval=0)
    return mask | wide


def _cropped(mask: NDArray[np.uint16], window: Section) -> NDArray[np.uint16]:
    rows, columns = mask.shape
    if window.row_stop > rows or window.column_stop > columns:
        raise RequestError(
            f"crop: {fits_section(window)} leaves the mask, which has {columns} x {rows} pixels"
            " (x by y); give a window within it"
        )
    return mask[window.slices]


def _binned(mask: NDArray[np.uint16], down: int, across: int) -> NDArray[np.uint16]:
    rows, columns = mask.shape
    if rows % down or columns % across:
        raise RequestError(
            f"bin: {across} x {down} (x by y) does not divide the mask of {columns} x {rows};"
            " crop it first to what the readout bins"
        )
    parted = mask.reshape(rows // down, down, columns // across, across)
    joined: NDArray[np.uint16] = np.bitwise_or.reduce(parted, axis=(1, 3))
    return joined


@dataclass(frozen=True, slots=True)
class BitDifference:
    """Pixels that carry a bit in both masks, and in one only."""

    bit: str
    both: int
    first_only: int
    second_only: int


def differences(first: NDArray[np.uint16], second: NDArray[np.uint16]) -> tuple[BitDifference, ...]:
    """Two masks (M, N) bit by bit, for the bits that occur; ``"any"`` is the pixel as a whole.

    Raises
    ------
    RequestError
        Their shapes differ.
    """
    _same_shape(first, second)
    found = []
    for name, value in (("any", ALL), *((bit.name, BY_NAME[bit.name].value) for bit in BITS)):
        one, other = (first & value) > 0, (second & value) > 0
        both = int((one & other).sum())
        found.append(BitDifference(name, both, int(one.sum()) - both, int(other.sum()) - both))
    return tuple(
        one for one in found if one.bit == "any" or one.both + one.first_only + one.second_only
    )


def _same_shape(first: NDArray[np.uint16], second: NDArray[np.uint16]) -> None:
    if first.shape != second.shape:
        raise RequestError(
            f"masks of {first.shape[1]} x {first.shape[0]} and {second.shape[1]} x"
            f" {second.shape[0]} pixels (x by y) cannot be joined or compared; give masks of one"
            " shape"
        )
