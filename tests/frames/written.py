"""Frames written to files in every form that the readers take."""

from pathlib import Path

import numpy as np
from astropy.io import fits

from sensorgrade.frames.contents import Layout
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.readers import reader_of


def samples(path: Path, layout: Layout | None = None, key: str = "") -> np.ndarray:
    """All samples of one plane of a file, by the reader that its name selects."""
    plane = reader_of(path.name)(path, layout or Layout()).planes[key]
    values = read_plane(plane, 0, plane.shape[0])
    assert str(values.dtype) == plane.dtype
    assert values.shape == plane.shape
    return values


def write_fits(path: Path, image: np.ndarray, **cards: object) -> Path:
    """A plain FITS file with ``cards``; an underscore in a name stands for a hyphen."""
    unit = fits.PrimaryHDU(image)
    for name, value in cards.items():
        unit.header[name.replace("_", "-")] = value
    unit.writeto(path)
    return path


def card(text: str) -> bytes:
    """One card of 80 bytes."""
    assert len(text) <= 80
    return text.ljust(80).encode("latin-1")


def fits_bytes(cards: list[str], data: bytes = b"") -> bytes:
    """A FITS unit from cards as written, END and padding added."""
    head = b"".join(map(card, [*cards, "END"]))
    return b"".join(
        part + b"\0 "[k : k + 1] * (-len(part) % 2880) for k, part in ((1, head), (0, data))
    )
