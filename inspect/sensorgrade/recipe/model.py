"""What a recipe says, validated and in plain numbers: the Recipe and its parts."""

from dataclasses import dataclass
from typing import Any

from sensorgrade.options import choice, entry, number, quantity

COLOURS = {"R": "red", "G": "green", "B": "blue"}


@dataclass(frozen=True, slots=True, order=True)
class Section:
    """A rectangle of pixels, 0-based and half-open, rows before columns.

    Written in recipes the FITS way, ``"[x1:x2,y1:y2]"``, 1-based and inclusive.
    """

    row_start: int
    row_stop: int
    column_start: int
    column_stop: int

    @property
    def shape(self) -> tuple[int, int]:
        """(rows, columns)."""
        return self.row_stop - self.row_start, self.column_stop - self.column_start

    @property
    def slices(self) -> tuple[slice, slice]:
        """Index of this section in an array of shape (rows, columns)."""
        return slice(self.row_start, self.row_stop), slice(self.column_start, self.column_stop)


@dataclass(frozen=True, slots=True)
class HeaderSection:
    """A section that the frames' own headers state; written in recipes ``header KEYWORD``."""

    keyword: str


@dataclass(frozen=True, slots=True, kw_only=True)
class OutputOptions:
    """One amplifier: where its pixels lie in the raw frame, and where it sits."""

    image: Section | HeaderSection | None = entry(
        "Image section in the raw frame, '[x1:x2,y1:y2]', or 'header KEYWORD' where the frames"
        " state it; omit for all of the extension",
        default=None,
    )
    overscan: Section | HeaderSection | None = entry(
        "Serial overscan columns beside the image section, '[x1:x2,y1:y2]'", default=None
    )
    parallel_overscan: Section | HeaderSection | None = entry(
        "Parallel overscan rows beyond the image section, '[x1:x2,y1:y2]'", default=None
    )
    prescan: Section | HeaderSection | None = entry(
        "Serial prescan columns, '[x1:x2,y1:y2]'", default=None
    )
    extension: str | None = entry(
        "Name or number of the FITS extension that holds this output", default=None
    )
    place: Section | HeaderSection | None = entry(
        "Where the image section goes in the assembled image; needed when outputs come as"
        " separate extensions",
        default=None,
    )
    corner: str = choice(
        "Corner of the assembled image section that is read first (FITS display: row 1 at the"
        " bottom)",
        "bottom left",
        "bottom right",
        "top left",
        "top right",
        default="bottom left",
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Sensor:
    """The device as its maker describes it."""

    technology: str = choice("Kind of sensor", "ccd", "cmos")
    pixel_pitch: float = quantity("um", "Distance between pixel centres", minimum=0.1)
    outputs: dict[str, OutputOptions] = entry(
        "Amplifiers by name; omit for one output that reads the whole frame and no overscan",
        default_factory=dict,
    )
    colour: str = choice(
        "Colour filters of the 2 x 2 cell, first row first",
        "none",
        "RGGB",
        "BGGR",
        "GRBG",
        "GBRG",
        default="none",
    )
    adc_bits: int | None = number(
        "Bits of the converter; its end code is then known", default=None, minimum=1, maximum=32
    )
    line_time: float | None = quantity(
        "us", "Time between the starts of two rows", default=None, minimum=0.0
    )
    pixel_time: float | None = quantity(
        "us", "Time between two pixels of a row", default=None, minimum=0.0
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class RawBinary:
    """Layout of headerless binary files."""

    dtype: str = choice("Sample type", "uint8", "uint16", "int16", "uint32", "int32", "float32")
    rows: int = number("Rows of the frame", minimum=1)
    columns: int = number("Columns of the frame", minimum=1)
    byte_order: str = choice("Byte order", "little", "big", default="little")
    skip: int = number("Bytes before the first sample", default=0, minimum=0)


@dataclass(frozen=True, slots=True, kw_only=True)
class FrameRules:
    """How to tell what each file is.

    The names after ``sorted_by`` are header keywords, manifest columns or named groups of the
    file-name pattern, according to ``sorted_by``. Values are in the unit that the keyword's
    own convention has: s, degC, nm, us unless the text carries a unit.
    """

    sorted_by: str = choice(
        "Where kind, exposure and the rest are read", "header", "manifest", "name", default="header"
    )
    manifest: str | None = entry(
        "CSV file in the source folder, a row for each frame", default=None
    )
    pattern: str | None = entry(
        "Regular expression with named groups, matched to the path below the source", default=None
    )
    kind: str = entry("Names the frame's kind", default="IMAGETYP")
    exposure: str = entry("Names the exposure time [s]", default="EXPTIME")
    temperature: str | None = entry("Names the sensor temperature [degC]", default=None)
    level: str | None = entry(
        "Names the light level, any unit in proportion to light", default=None
    )
    wavelength: str | None = entry("Names the wavelength [nm] or filter", default=None)
    time: str | None = entry("Names the start of the exposure, ISO 8601", default="DATE-OBS")
    serial: str | None = entry(
        "Names the serial number; else the folder's name is used", default=None
    )
    lot: str | None = entry("Names the lot", default=None)
    wafer: str | None = entry("Names the wafer", default=None)
    die_row: str | None = entry("Names the die's row on the wafer", default=None)
    die_column: str | None = entry("Names the die's column on the wafer", default=None)
    cycles: str | None = entry("Names the number of pumping cycles", default=None)
    phase_time: str | None = entry("Names the dwell time of a phase in pumping [us]", default=None)
    kinds: dict[str, str] = entry(
        "Your own words for kinds: word in the files, then bias, dark, flat, x-ray, pump or ignore",
        default_factory=dict,
    )
    raw: RawBinary | None = entry("Layout of headerless binary files", default=None)
    temperature_tolerance: float = quantity(
        "K", "Frames whose temperatures differ by less are taken alike", default=2.0, minimum=0.0
    )
    exposure_tolerance: float = quantity(
        "%", "Frames whose exposures differ by less are taken alike", default=0.5, minimum=0.0
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Zone:
    """A named part of the assembled image, in FITS coordinates (1-based x, y)."""

    rectangle: Section | None = entry("'[x1:x2,y1:y2]' of the assembled image", default=None)
    circle: tuple[float, float, float] | None = entry("[x, y, radius] in pixels", default=None)
    ring: tuple[float, float, float, float] | None = entry(
        "[x, y, inner radius, outer radius] in pixels", default=None
    )
    border: int | None = number("Width in pixels of the frame's border", default=None, minimum=1)


@dataclass(frozen=True, slots=True)
class Limit:
    """One bound on a measurement or a count, in that quantity's own unit.

    ``relation`` is ``"<="`` or ``">="``; a range in the recipe becomes two limits.
    ``of`` selects among scopes: every output must meet it, or the worst or mean of them.
    ``scope`` and ``zone`` narrow the limit to one output, colour, wavelength or zone.
    ``temperature`` [degC] is the one the limit holds for, None for the frames' own.
    ``rule`` is the decision rule, None for the recipe's.
    ``line`` is the line of the recipe that states it.
    """

    name: str
    relation: str
    bound: float
    unit: str
    line: int
    of: str = "every"
    scope: str | None = None
    zone: str | None = None
    temperature: float | None = None
    rule: str | None = None


@dataclass(frozen=True, slots=True)
class Grade:
    """A named set of limits; a device takes the first grade whose limits it meets."""

    name: str
    limits: tuple[Limit, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class DecisionRule:
    """When a reading with its doubt counts as within a limit (JCGM 106, ILAC-G8)."""

    kind: str = choice(
        "How doubt is counted",
        "simple",
        "guarded acceptance",
        "guarded rejection",
        "non-binary",
        default="simple",
    )
    confidence: float = quantity(
        "%",
        "Probability of conformity that guarded decisions ask for",
        default=95.0,
        minimum=50.0,
        maximum=99.9999,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class LotPlan:
    """Acceptance of the whole lot by attributes; without any key the lot is not judged.

    Either a sample size and an acceptance number, or an acceptance quality limit from which
    ISO 2859-1 gives both (single sampling, normal inspection, level II).
    """

    sample_size: int | None = number(
        "Devices of the lot that are judged, drawn at random", default=None, minimum=1
    )
    acceptance_number: int | None = number(
        "Devices of the sample that may miss every grade", default=None, minimum=0
    )
    quality_limit: float | None = quantity(
        "%", "Acceptance quality limit (AQL), in place of the two above", default=None, minimum=0.0
    )

    def __post_init__(self) -> None:
        stated = (self.sample_size is not None, self.acceptance_number is not None)
        if stated[0] != stated[1] or (stated[0] and self.quality_limit is not None):
            raise ValueError("expected sample_size with acceptance_number, or quality_limit alone")


@dataclass(frozen=True, slots=True)
class Recipe:
    """A validated recipe.

    ``stages`` maps a stage's name to its options object, only for stages that are to run.
    ``sha256`` is the digest of ``text``, the recipe as written; ``path`` says where it was.
    """

    name: str
    sensor: Sensor
    frames: FrameRules
    stages: dict[str, Any]
    zones: dict[str, Zone]
    decision: DecisionRule
    grades: tuple[Grade, ...]
    path: str
    text: str
    sha256: str
    lot: LotPlan = LotPlan()
