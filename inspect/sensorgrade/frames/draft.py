"""A first recipe for a folder of frames, with a comment on each guess and what to check.

The draft is a place to start from, never a recipe to grade with: it sets no limits, because
what is good enough is not written in the frames.
"""

from collections import Counter
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import FrameError, RequestError
from sensorgrade.frames.contents import FileContents, Layout
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.draft_parts import (
    GRADES,
    NAME_WORD,
    Seen,
    frames_part,
    head_part,
    sensor_part,
    stages_part,
)
from sensorgrade.frames.extension_guess import guessed_extensions, image_extensions, mirrored
from sensorgrade.frames.fits import read_fits
from sensorgrade.frames.keyword_guess import guessed_keywords
from sensorgrade.frames.layout_guess import guessed_layout
from sensorgrade.frames.raw import read_raw
from sensorgrade.frames.raw_guess import guessed_raw
from sensorgrade.frames.readers import reader_of
from sensorgrade.frames.sources import FoundFile, checked_sources, files_below
from sensorgrade.frames.values import kind_of
from sensorgrade.recipe.document import printable

MOST_FRAMES = 2000  # headers that are looked at
JOINED = 4  # frames that a mean image is made of


def drafted_recipe(folder: Path, *, stages: Sequence[str]) -> str:
    """A recipe, as YAML text with comments, for the frames below ``folder``.

    ``stages`` are the names of the stages there are, all of which the draft enables but those
    for kinds of frames that the folder does not have.

    Raises
    ------
    RequestError
        No such folder, or no frame in it that can be read; the message says why.
    """
    checked_sources((folder,))
    files = [found for found in files_below(folder, prefix="") if isinstance(found, FoundFile)]
    places = _extensions(files)
    headerless = [found.path for found in files if reader_of(found.path.name) is read_raw]
    raw = guessed_raw(headerless)
    seen, refused = _read(files[:MOST_FRAMES], Layout(tuple(places), raw))
    if not seen:
        why = f"; the first that was refused: {refused[0]}" if refused else ""
        raise RequestError(f"{folder}: no frames were found in it to draft a recipe from{why}")
    shape = Counter(one.shape for one in seen).most_common(1)[0][0]
    alike = [one for one in seen if one.shape == shape]
    means = {
        key: (_mean(alike, ("bias", "dark"), key), _mean(alike, ("flat",), key))
        for key in places or ("",)
    }
    layout = guessed_extensions(means, places) if places else guessed_layout(*means[""])
    told = all(dark is not None and lit is not None for dark, lit in means.values())
    lines = [
        *head_part(folder, files, seen, refused, shape),
        *sensor_part(alike, layout, told=told),
        *(
            f"  # CHECK: {name} is stored in the order of reading, mirrored against the detector"
            for name, place in places.items()
            if mirrored(place)
        ),
        "",
        *frames_part(seen, raw),
        *stages_part(seen, stages),
        *GRADES,
    ]
    return "\n".join(lines) + "\n"


def _extensions(files: Sequence[FoundFile]) -> dict[str, str | None]:
    """The extensions of the first FITS file that holds several images; empty without one."""
    fits_files = [file for file in files if reader_of(file.path.name) is read_fits]
    return image_extensions(fits_files[0].path) if fits_files else {}


def _read(files: Sequence[FoundFile], layout: Layout) -> tuple[list[Seen], list[str]]:
    """Frames whose headers can be read, and sentences on those that cannot."""
    contents: list[tuple[FoundFile, FileContents]] = []
    refused = []
    for file in files:
        reader = reader_of(file.path.name)
        assert reader is not None  # files_below passes over the others
        try:
            contents.append((file, reader(file.path, layout)))
        except FrameError as error:
            refused.append(printable(str(error), 300))
        except OSError as error:
            refused.append(f"{printable(file.label)}: {error.strerror}")
    word = guessed_keywords([found.values for _, found in contents]).get("kind")
    return [Seen(file, found, _kind(file.label, found, word)) for file, found in contents], refused


def _kind(label: str, contents: FileContents, keyword: str | None) -> str | None:
    """The frame's kind by its header, else by a word in its name or folder."""
    if keyword is not None and keyword in contents.values:
        return kind_of(str(contents.values[keyword]), {})
    words = NAME_WORD.findall(label)
    return kind_of(words[-1], {}) if words else None


def _mean(frames: Sequence[Seen], kinds: tuple[str, ...], key: str) -> NDArray[np.float64] | None:
    """Mean raw image [DN] of a few frames of these kinds, of plane ``key``; None without any."""
    chosen = [one for kind in kinds for one in frames if one.kind == kind][:JOINED]
    total: NDArray[np.float64] | None = None
    count = 0
    for one in chosen:
        plane = one.contents.planes[key]
        try:
            image = read_plane(plane, 0, plane.shape[0]).astype(np.float64)
        except (FrameError, OSError):
            continue  # the inspection will name it; a guess can do without
        total = image if total is None else total + image
        count += 1
    return None if total is None else total / count
