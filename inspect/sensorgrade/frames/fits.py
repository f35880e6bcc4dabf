"""FITS files: where each image lies and what its header says, without reading samples.

Source: FITS Standard 4.0, sections 4.4 (mandatory and scaling keywords) and 7.1 (IMAGE),
10.1 (tiled image compression).
"""

import gzip
import math
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from sensorgrade.errors import FrameError
from sensorgrade.frames.cards import BLOCK, header
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
from sensorgrade.frames.native import UNSIGNED_16, native_type

STORED = {8: "u1", 16: ">i2", 32: ">i4", 64: ">i8", -32: ">f4", -64: ">f8"}
GZIP = b"\x1f\x8b"
MAX_UNITS = 1000
MAX_AXES = 999


@dataclass(frozen=True, slots=True)
class Unit:
    """One header and data unit: number, header, start and length of the data [byte]."""

    index: int
    values: dict[str, Value]
    start: int
    length: int


def read_fits(path: Path, layout: Layout) -> FileContents:
    """Header values and image planes of a FITS file, plain, gzip or tile-compressed.

    Without ``layout.extensions`` the file must hold one image, in the primary or in any
    extension; its header joins the primary's. With them, each names an extension by EXTNAME
    or number, and the header values are the primary's, completed by the extensions'.

    Raises
    ------
    FrameError
        Not FITS, truncated, no image or several, or an image that cannot be a frame.
    """
    with path.open("rb") as file:
        packed = file.read(2) == GZIP
        size = file.seek(0, 2)
        file.seek(0)
        if not packed:
            return _contents(path, file, layout, size=size, packed=False)
        try:
            with gzip.open(file) as unpacked:
                return _contents(path, unpacked, layout, size=size, packed=True)
        except (zlib.error, EOFError, gzip.BadGzipFile) as error:
            raise FrameError(f"{path}: its gzip stream is damaged ({error})") from error


def _contents(
    path: Path, file: BinaryIO | gzip.GzipFile, layout: Layout, *, size: int, packed: bool
) -> FileContents:
    units = _units(path, file, layout, size=size, packed=packed)
    chosen = _chosen(path, units, layout.extensions)
    values: dict[str, Value] = dict(units[0].values)
    planes = {}
    remarks = []
    for key, unit in chosen.items():
        values = unit.values | values if layout.extensions else values | unit.values
        planes[key] = _plane(path, unit, size=size, packed=packed)
        if planes[key].coding and unit.values.get("BZERO") == -UNSIGNED_16:
            remarks.append(
                "BZERO is -32768, the opposite of the standard's sign for unsigned numbers;"
                " values were taken literally and come out 65536 too low if the writer meant +32768"
            )
    headers = {key: units[0].values | unit.values for key, unit in chosen.items()}
    return FileContents(values, planes, tuple(remarks), headers)


def _units(
    path: Path, file: BinaryIO | gzip.GzipFile, layout: Layout, *, size: int, packed: bool
) -> list[Unit]:
    """The file's units, up to the primary's image when nothing else is asked for."""
    units: list[Unit] = []
    while len(units) < MAX_UNITS:
        values = header(file, path)  # type: ignore[arg-type]  # GzipFile reads like BinaryIO
        if not units and values.get("SIMPLE") is not True:
            raise FrameError(f"{path}: is not FITS: its first card is not SIMPLE = T")
        if units and not isinstance(values.get("XTENSION"), str):
            break  # the standard allows special records after the last unit
        unit = Unit(len(units), values, file.tell(), _length(path, values))
        units.append(unit)
        if not layout.extensions and _is_image(unit) and unit.index == 0:
            break
        if packed:
            check_expansion(path, decoded=unit.start + unit.length, stored=size)
        following = unit.start + -(-unit.length // BLOCK) * BLOCK
        if not packed and following >= size:
            break
        file.seek(following)
        if packed and not _more(file):
            break
        file.seek(following)
    return units


def _more(file: BinaryIO | gzip.GzipFile) -> bool:
    return len(file.read(1)) == 1


def _length(path: Path, values: dict[str, Value]) -> int:
    """Bytes of the data unit (FITS 4.0, equation 2)."""
    bitpix = values.get("BITPIX")
    if bitpix not in STORED or type(bitpix) is not int:
        raise FrameError(f"{path}: BITPIX is {bitpix!r}; FITS has 8, 16, 32, 64, -32 and -64")
    axes = _axes(path, values, "NAXIS")
    if not axes:
        return 0
    extra = [values.get(name, default) for name, default in (("PCOUNT", 0), ("GCOUNT", 1))]
    if not all(type(count) is int and count >= 0 for count in extra):
        raise FrameError(f"{path}: PCOUNT and GCOUNT are {extra}; FITS has whole numbers there")
    parameters, groups = (int(count) for count in extra)
    return abs(bitpix) // 8 * groups * (parameters + math.prod(axes))


def _axes(path: Path, values: dict[str, Value], word: str) -> list[int]:
    """Lengths of the axes, fastest first."""
    count = values.get(word)
    if type(count) is not int or not 0 <= count <= MAX_AXES:
        raise FrameError(f"{path}: {word} is {count!r}; FITS has 0 to {MAX_AXES}")
    axes = []
    for number in range(1, count + 1):
        length = values.get(f"{word}{number}")
        if type(length) is not int or length < 0:
            raise FrameError(f"{path}: {word}{number} is {length!r}; FITS has whole numbers from 0")
        axes.append(length)
    return axes


def _is_tiled(unit: Unit) -> bool:
    return unit.values.get("ZIMAGE") is True


def _is_image(unit: Unit) -> bool:
    """Whether the unit holds pixels of an image, of whatever number of axes."""
    if unit.index == 0 or unit.values["XTENSION"] == "IMAGE":
        return unit.length > 0
    return _is_tiled(unit)


def _chosen(path: Path, units: list[Unit], extensions: tuple[str, ...]) -> dict[str, Unit]:
    """The units that become planes, by the key of the plane."""
    images = [unit for unit in units if _is_image(unit)]
    if not extensions:
        if not images:
            raise FrameError(f"{path}: holds no image; take it out")
        if len(images) > 1:
            raise FrameError(
                f"{path}: holds {len(images)} images ({', '.join(map(_name, images))}); name the"
                " extension of each output in the recipe"
            )
        return {"": images[0]}
    chosen = {}
    for wanted in extensions:
        matching = [unit for unit in images if wanted.upper() == _name(unit).upper()] or [
            unit for unit in images if wanted == str(unit.index)
        ]
        if not matching:
            raise FrameError(
                f"{path}: has no image extension {wanted!r}; it has"
                f" {', '.join(map(_name, images)) or 'none'}"
            )
        chosen[wanted] = matching[0]
    return chosen


def _name(unit: Unit) -> str:
    name = unit.values.get("EXTNAME")
    return name if isinstance(name, str) and name else str(unit.index)


def _plane(path: Path, unit: Unit, *, size: int, packed: bool) -> Plane:
    tiled = _is_tiled(unit)
    values = unit.values
    axes = _axes(path, values, "ZNAXIS" if tiled else "NAXIS")
    if len(axes) < 2 or any(length != 1 for length in axes[2:]) or "GROUPS" in values:
        raise FrameError(
            f"{path}: its image has {len(axes)} axes ({' x '.join(map(str, axes))}); a frame has"
            " two, write each image to a file or extension of its own"
        )
    shape = checked_shape(path, axes[1], axes[0])
    bitpix = values.get("ZBITPIX" if tiled else "BITPIX")
    if type(bitpix) is not int or bitpix not in STORED:
        raise FrameError(f"{path}: ZBITPIX is {bitpix!r}; FITS has 8, 16, 32, 64, -32 and -64")
    scale, zero = (_scaling(path, values, word, default) for word, default in SCALING)
    blank = values.get("BLANK", values.get("ZBLANK")) if bitpix > 0 else None
    if blank is not None and type(blank) is not int:
        raise FrameError(f"{path}: BLANK is {blank!r}; FITS has a whole number there")
    stored = STORED[bitpix]
    if tiled or packed:
        dtype = native_type(stored, scale=scale, zero=zero)
        check_expansion(path, decoded=shape[0] * shape[1] * abs(bitpix) // 8, stored=size)
        if tiled and packed:
            raise FrameError(f"{path}: is compressed twice, by tiles and by gzip; unpack the gzip")
        coding = Coding(
            "fits tiles" if tiled else "gzip",
            stored,
            scale=scale,
            zero=zero,
            blank=blank,
            index=unit.index,
        )
        if tiled:
            check_length(path, needed=unit.start + unit.length, found=size)
        return Plane(shape, dtype, path=path, offset=unit.start, coding=coding)
    check_length(path, needed=unit.start + unit.length, found=size)
    return stored_plane(
        path, shape, stored=stored, offset=unit.start, scale=scale, zero=zero, blank=blank
    )


SCALING = (("BSCALE", 1.0), ("BZERO", 0.0))


def _scaling(path: Path, values: dict[str, Value], word: str, default: float) -> float:
    value = values.get(word, default)
    if isinstance(value, (str, bool)) or not math.isfinite(value):
        raise FrameError(f"{path}: {word} is {value!r}; FITS has a number there")
    return float(value)
