"""The parts of a drafted recipe as lines of YAML, each guess with a comment on it."""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import FileContents, Value
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.geometry import fits_section
from sensorgrade.frames.keyword_guess import guessed_keywords, pixel_pitch, unknown_kinds
from sensorgrade.frames.layout_guess import LayoutGuess
from sensorgrade.frames.sources import FoundFile
from sensorgrade.frames.values import celsius, seconds, text
from sensorgrade.recipe.document import printable
from sensorgrade.recipe.model import RawBinary

SPECIAL = {"x-ray": "x_ray", "pump": "pocket_pumping"}  # kinds with stages of their own
NAME_WORDS = ("bias", "zero", "offset", "dark", "flat", "xray", "x-ray", "fe55", "pump")
NAME_WORD = re.compile("|".join(NAME_WORDS), re.IGNORECASE)
NAME_EXPOSURE = re.compile(r"[_-]([0-9]+(?:\.[0-9]+)?)s(?![a-z])", re.IGNORECASE)
CODES_FROM = 4  # frames whose codes are looked at


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


def head_part(
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
    looked_at = len(seen) + len(refused)
    if looked_at < len(files):
        lines.append(f"#   only the first {looked_at} of {len(files)} files were looked at")
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


def sensor_part(frames: Sequence[Seen], layout: LayoutGuess, *, told: bool) -> list[str]:
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
        chosen = [one for one in frames if one.kind == kind][-CODES_FROM:]
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


def frames_part(seen: Sequence[Seen], raw: RawBinary | None) -> list[str]:
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
    if raw is not None:
        lines += [
            "  raw:  # guess: the row length that makes rows alike, the byte order that makes",
            "        # neighbours alike; CHECK by looking at a master",
            f"    dtype: {raw.dtype}",
            f"    rows: {raw.rows}",
            f"    columns: {raw.columns}",
            f"    byte_order: {raw.byte_order}",
        ]
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


def _examples(values: Sequence[dict[str, Value]], keyword: str) -> str:
    """A few values of a keyword."""
    found = Counter(text(one[keyword]) or "" for one in values if keyword in one)
    shown = [printable(word, 24) for word, _ in found.most_common(3)]
    return ", ".join(shown) + (", …" if len(found) > 3 else "")


def stages_part(seen: Sequence[Seen], stages: Sequence[str]) -> list[str]:
    """Every stage, but those for kinds of frames that are not there."""
    found = {one.kind for one in seen}
    absent = {stage for kind, stage in SPECIAL.items() if kind not in found}
    return [
        "# All stages, with their usual options; one that lacks frames says so and the rest runs.",
        "stages:" if stages else "stages: {}",
        *(f"  {stage}: {{}}" for stage in stages if stage not in absent),
        "",
    ]


def _quoted(word: str) -> str:
    """A YAML scalar that is text whatever it holds."""
    return "'" + word.replace("'", "''") + "'"
