"""A first guess at outputs that come as separate extensions of one FITS file."""

import re
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sensorgrade.frames.layout_guess import LayoutGuess, guessed_layout
from sensorgrade.frames.unpack import DAMAGE
from sensorgrade.recipe.model import OutputOptions, Section

Image = NDArray[np.float64]
PLACE_WORDS = ("DETSEC", "CCDSEC")  # where an extension lies on the detector; common practice
DIRECTED = re.compile(r"\s*\[\s*(\d{1,6}):(\d{1,6})\s*,\s*(\d{1,6}):(\d{1,6})\s*\]\s*")


def image_extensions(path: Path) -> dict[str, str | None]:
    """Name of each image of a FITS file, to the text that says where it lies on the detector.

    Empty where the file cannot be read or holds one image only. A name is EXTNAME, or the number
    of the extension where that is missing or stands twice.
    """
    found: dict[str, str | None] = {}
    try:
        with fits.open(path, memmap=True, lazy_load_hdus=True) as units:
            names = [str(unit.name or "") for unit in units]
            for number, unit in enumerate(units):
                if unit.header.get("NAXIS", 0) < 2 or not unit.is_image:
                    continue
                name = names[number]
                key = name if name and names.count(name) == 1 else str(number)
                place = next((unit.header[w] for w in PLACE_WORDS if w in unit.header), None)
                found[key] = place if isinstance(place, str) else None
    except DAMAGE:
        return {}
    return found if len(found) > 1 else {}


def guessed_extensions(
    means: Mapping[str, tuple[Image | None, Image | None]], places: Mapping[str, str | None]
) -> LayoutGuess:
    """One output for each extension.

    Parameters
    ----------
    means : mapping
        Extension to its mean dark and lit images of shape (M, N) [DN], as for `guessed_layout`.
    places : mapping
        Extension to its section of the detector. Without sections that fit, extensions are laid
        side by side in their order. Nothing is flipped: see `mirrored`.
    """
    outputs: dict[str, OutputOptions] = {}
    colour = "none"
    for name, (dark, lit) in means.items():
        guess = guessed_layout(dark, lit)
        only = next(iter(guess.outputs.values())) if len(guess.outputs) == 1 else OutputOptions()
        outputs[name] = replace(only, extension=name)
        colour = guess.colour
    shapes = {
        name: output.image.shape if isinstance(output.image, Section) else _shape(means[name])
        for name, output in outputs.items()
    }
    stated = _stated(shapes, places) or _side_by_side(shapes)
    return LayoutGuess(
        {name: replace(output, place=stated[name]) for name, output in outputs.items()},
        colour,
    )


def _shape(means: tuple[Image | None, Image | None]) -> tuple[int, int]:
    some = means[0] if means[0] is not None else means[1]
    assert some is not None
    return some.shape[0], some.shape[1]


def _stated(
    shapes: Mapping[str, tuple[int, int]], places: Mapping[str, str | None]
) -> dict[str, Section] | None:
    """Places as the headers state them; None unless all do and all fit without gap or overlap."""
    found = {}
    for name, shape in shapes.items():
        match = DIRECTED.fullmatch(places.get(name) or "")
        if match is None:
            return None
        first_x, last_x, first_y, last_y = map(int, match.groups())
        columns, rows = sorted((first_x, last_x)), sorted((first_y, last_y))
        section = Section(rows[0] - 1, rows[1], columns[0] - 1, columns[1])
        if section.row_start < 0 or section.column_start < 0 or section.shape != shape:
            return None
        found[name] = section
    row = min(section.row_start for section in found.values())
    column = min(section.column_start for section in found.values())
    moved = {
        name: Section(
            section.row_start - row,
            section.row_stop - row,
            section.column_start - column,
            section.column_stop - column,
        )
        for name, section in found.items()
    }
    height = max(section.row_stop for section in moved.values())
    width = max(section.column_stop for section in moved.values())
    covered = sum(shape[0] * shape[1] for shape in shapes.values())
    distinct = len(set(moved.values())) == len(moved)
    return moved if distinct and covered == height * width else None


def _side_by_side(shapes: Mapping[str, tuple[int, int]]) -> dict[str, Section]:
    found = {}
    start = 0
    for name, (rows, columns) in shapes.items():
        found[name] = Section(0, rows, start, start + columns)
        start += columns
    return found


def mirrored(place: str | None) -> bool:
    """Whether a section runs backwards: the extension is stored in the order of reading."""
    match = DIRECTED.fullmatch(place or "")
    if match is None:
        return False
    first_x, last_x, first_y, last_y = map(int, match.groups())
    return last_x < first_x or last_y < first_y
