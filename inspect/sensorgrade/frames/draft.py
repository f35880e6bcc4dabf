"""A first recipe for a folder of frames, with a comment on each guess and what to check.

The draft is a place to start from, never a recipe to grade with: it sets no limits, because
what is good enough is not written in the frames.
"""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import FrameError, RequestError
from sensorgrade.frames.contents import FileContents, Layout
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.extension_guess import guessed_extensions, image_extensions, mirrored
from sensorgrade.frames.fits import read_fits
from sensorgrade.frames.frame import KINDS
from sensorgrade.frames.geometry import fits_section
from sensorgrade.frames.keyword_guess import guessed_keywords, pixel_pitch, unknown_kinds
from sensorgrade.frames.layout_guess import LayoutGuess, guessed_layout
from sensorgrade.frames.readers import reader_of
from sensorgrade.frames.sources import FoundFile, checked_sources, files_below
from sensorgrade.frames.values import celsius, kind_of, seconds, text
from sensorgrade.recipe.document import printable

MOST_FRAMES = 2000  # headers that are looked at
JOINED = 4  # frames that a mean image is made of
SPECIAL = {"x-ray": "x_ray", "pump": "pocket_pumping"}  # kinds with stages of their own
NAME_WORDS = ("bias", "zero", "offset", "dark", "flat", "xray", "x-ray", "fe55", "pump")
NAME_WORD = re.compile("|".join(NAME_WORDS), re.IGNORECASE)
NAME_EXPOSURE = re.compile(r"[_-]([0-9]+(?:\.[0-9]+)?)s(?![a-z])", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class Seen:
    """One frame: its file, header and what it seems to be."""

    file: FoundFile
    contents: FileContents
    kind: str | None

    @property
    def shape(self) -> tuple[int, int]:
        """(rows, columns) of the first image."""
        return next(iter(self.contents.planes.values())).shape


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
    seen, refused = _read(files[:MOST_FRAMES], Layout(tuple(places)))
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
        *_head(folder, files, seen, refused, shape),
        *_sensor(alike, layout, told=told),
        *(
            f"  # CHECK: {name} is stored in the order of reading, mirrored against the detector"
            for name, place in places.items()
            if mirrored(place)
        ),
        "",
        *_frames(seen),
        *_stages(seen, stages),
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


def _head(
    folder: Path,
    files: Sequence[FoundFile],
    seen: Sequence[Seen],
    refused: Sequence[str],
    shape: tuple[int, int],
) -> list[str]:
    """What was found, as comments."""
    name = printable(folder.resolve().name, 60)
    lines = [
        f"# Drafted from {len(seen)} frames below {printable(str(folder), 200)}.",
        "# Every line marked 'guess' comes from the frames and wants checking; 'CHECK' must be",
        "# filled in. Then: sensorgrade recipes validate FILE, and sensorgrade check FOLDER.",
        "#",
        "# What the folder holds:",
    ]
    if len(files) > MOST_FRAMES:
        lines.append(f"#   only the first {MOST_FRAMES} of {len(files)} files were looked at")
    keywords = guessed_keywords([one.contents.values for one in seen])
    groups = Counter(_described(one, keywords) for one in seen)
    lines += [f"#   {count:4} {group}" for group, count in sorted(groups.items())[:40]]
    shapes = Counter(one.shape for one in seen)
    for other, count in shapes.items():
        if other != shape:
            lines.append(
                f"#   CHECK: {count} frames have {other[1]} x {other[0]} pixels (x by y), the"
                f" others {shape[1]} x {shape[0]}; take them out"
            )
    lines += [f"#   CHECK: {sentence}" for sentence in refused[:10]]
    found = {one.kind for one in seen}
    lacks = {
        "bias": "no bias: read noise and bias level cannot be measured",
        "dark": "no darks: dark current and hot pixels cannot be measured",
        "flat": "no flats: gain, response and dead pixels cannot be measured",
    }
    lines += [f"#   CHECK: {sentence}" for kind, sentence in lacks.items() if kind not in found]
    return [*lines, "", f"name: {_quoted(name)}  # guess: the folder's name", ""]


def _described(one: Seen, keywords: dict[str, str]) -> str:
    """The frame as one of a kind: ``"flat, 20 s, Blue"``."""
    values = one.contents.values
    parts = [one.kind or "of unknown kind"]
    exposure = seconds(values.get(keywords.get("exposure", ""), ""))
    if exposure is not None and one.kind != "bias":
        parts.append(f"{exposure:g} s")
    colour = text(values.get(keywords.get("wavelength", ""), ""))
    if colour is not None and one.kind == "flat":
        parts.append(printable(colour, 20))
    degrees = celsius(values.get(keywords.get("temperature", ""), ""))
    if degrees is not None:
        parts.append(f"about {round(degrees)} degC")
    return ", ".join(parts)


def _sensor(frames: Sequence[Seen], layout: LayoutGuess, *, told: bool) -> list[str]:
    """The sensor part; ``told`` says that there were dark and lit frames to tell it by."""
    overscan = any(output.overscan for output in layout.outputs.values())
    lines = [
        f"sensor:  # {frames[0].shape[1]} x {frames[0].shape[0]} pixels (x by y) in a raw frame",
        f"  technology: {'ccd' if overscan or layout.colour == 'none' else 'cmos'}"
        "  # guess: ccd or cmos; CHECK",
    ]
    pitch = pixel_pitch([one.contents.values for one in frames])
    if pitch is None:
        lines.append("  pixel_pitch: 10 um  # CHECK: no header states it; see the data sheet")
    else:
        lines.append(f"  pixel_pitch: {pitch[1]:g} um  # guess: {pitch[0]} in the headers")
    lines += _converter(frames)
    if layout.colour != "none":
        lines += [
            f"  colour: {layout.colour}  # guess: the greens are sure; red was taken to be",
            "                # stronger than blue, CHECK with a red light",
        ]
    if not told:
        lines.append(
            "  # CHECK: without bias (or dark) and flat, overscan cannot be told from image;"
            " give outputs"
        )
    if told and not layout.outputs:
        lines.append("  # guess: one output and no overscan, all rows and columns respond to light")
    elif layout.outputs:
        lines += [
            "  # guess: overscan stays dark in flats, outputs have their own bias levels. CHECK",
            "  # the sections against the data sheet, and the corner that each output reads first.",
            "  outputs:",
        ]
    for name, output in layout.outputs.items():
        lines.append(f"    {_quoted(name) if output.extension else name}:")
        if output.extension is not None:
            lines.append(f"      extension: {_quoted(output.extension)}")
        for key in ("image", "overscan", "parallel_overscan", "prescan", "place"):
            section = getattr(output, key)
            if section is not None:
                lines.append(f'      {key}: "{fits_section(section)}"')
        lines.append(f"      corner: {output.corner}")
    return lines


def _converter(frames: Sequence[Seen]) -> list[str]:
    """The converter's bits by the largest code, where samples are whole 16-bit numbers."""
    brightest = 0
    step = 0
    for kind in ("flat", "x-ray", "dark", "bias", "pump", None):
        chosen = [one for one in frames if one.kind == kind][-JOINED:]
        for one in chosen:
            plane = next(iter(one.contents.planes.values()))
            if plane.dtype != "uint16":
                return [
                    "  # guess: samples are no 16-bit whole numbers; give adc_bits if they were"
                ]
            try:
                codes = np.unique(read_plane(plane, 0, plane.shape[0]))
            except (FrameError, OSError):
                continue
            brightest = max(brightest, int(codes[-1]))
            step = int(np.gcd.reduce(codes, initial=step))
        if brightest:
            break
    bits = next(bits for bits in (8, 10, 12, 14, 16) if brightest < 1 << bits)
    if brightest == (1 << bits) - max(step, 1):
        lines = [f"  adc_bits: {bits}  # guess: the frames reach its last code, {brightest}"]
    else:
        lines = [
            f"  # adc_bits: {bits}  # CHECK: the largest code found is {brightest}, which proves"
        ]
        lines.append("  #                little; take the number from the data sheet")
    if step > 1:
        lines.append(
            f"  # CHECK: every code is a multiple of {step}: the converter's bits were moved up"
        )
    return lines


def _frames(seen: Sequence[Seen]) -> list[str]:
    """The frames part."""
    values = [one.contents.values for one in seen]
    keywords = guessed_keywords(values)
    if "kind" in keywords:
        lines = ["frames:", "  sorted_by: header"]
        if "exposure" not in keywords:
            lines.append("  # CHECK: no header keyword states the exposure time")
    else:
        lines = ["frames:", *_by_name(seen, timed="exposure" in keywords)]
    for key, keyword in keywords.items():
        lines.append(f"  {key}: {keyword}  # guess: {_examples(values, keyword)}")
    if "serial" not in keywords:
        lines.append("  # guess: no serial number in the headers, so the folder's name is used")
    unknown = unknown_kinds(values, keywords.get("kind", ""))
    if unknown:
        lines.append("  kinds:  # CHECK: say bias, dark, flat, x-ray, pump or ignore for each")
        lines += [f"    {_quoted(word)}: ignore  # {unknown[word]} frames" for word in unknown]
    return [*lines, ""]


def _by_name(seen: Sequence[Seen], *, timed: bool) -> list[str]:
    """How frames are sorted where only file or folder names tell the kind.

    ``timed`` says that the headers state the exposure, so that the names need not.
    """
    known = [one for one in seen if one.kind is not None]
    if not known:
        return [
            "  # CHECK: neither headers nor names tell what the frames are. Write a CSV file with",
            "  # the columns file, kind and exposure beside them:",
            "  # sorted_by: manifest",
            "  # manifest: manifest.csv",
        ]
    words = sorted({word.lower() for one in known for word in NAME_WORD.findall(one.file.label)})
    named = not timed and any(NAME_EXPOSURE.search(one.file.label) for one in known)
    exposure = r"(?:.*?[_-](?P<exposure>[0-9]+(?:\.[0-9]+)?)s(?![a-z]))?" if named else ""
    lines = [
        "  sorted_by: name  # guess: no header keyword names the kind, file or folder names do",
        f"  pattern: '(?i:.*(?P<kind>{'|'.join(words)}){exposure})'",
    ]
    if not timed and not named:
        lines.append("  # CHECK: neither headers nor names state the exposure; darks need it")
    if len(known) < len(seen):
        lines.append(f"  # CHECK: {len(seen) - len(known)} names hold no such word")
    return lines


def _examples(values: Sequence[dict[str, str | float | int | bool]], keyword: str) -> str:
    """A few values of a keyword."""
    found = Counter(text(one[keyword]) or "" for one in values if keyword in one)
    shown = [printable(word, 24) for word, _ in found.most_common(3)]
    return ", ".join(shown) + (", …" if len(found) > 3 else "")


def _stages(seen: Sequence[Seen], stages: Sequence[str]) -> list[str]:
    """Every stage, but those for kinds of frames that are not there."""
    found = {one.kind for one in seen}
    absent = {stage for kind, stage in SPECIAL.items() if kind in KINDS and kind not in found}
    return [
        "# All stages, with their usual options; one that lacks frames says so and the rest runs.",
        "stages:" if stages else "stages: {}",
        *(f"  {stage}: {{}}" for stage in stages if stage not in absent),
        "",
    ]


def _quoted(word: str) -> str:
    """A YAML scalar that is text whatever it holds."""
    return "'" + word.replace("'", "''") + "'"


GRADES = (
    "# No limits yet: run it once, look at the numbers, then write what is good enough, best",
    "# grade first.",
    "# grades:",
    "#   science:",
    "#     read_noise: <= 5 electron",
    "#     hot_pixels: <= 100",
    "#   engineering:",
    "#     read_noise: <= 10 electron",
)
