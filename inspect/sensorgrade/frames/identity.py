"""What a frame's header, manifest row or name says of it."""

import re
from collections.abc import Callable
from dataclasses import dataclass

from sensorgrade.frames import values as parse
from sensorgrade.frames.contents import Value
from sensorgrade.frames.frame import Frame, Plane
from sensorgrade.frames.sources import FoundFile
from sensorgrade.recipe.document import printable
from sensorgrade.recipe.model import FrameRules

# Keywords that cameras use in the place of the usual ones (common practice).
ALIASES = {"EXPTIME": "EXPOSURE", "IMAGETYP": "OBSTYPE"}
TIME_OF_DAY = ("TIME-OBS", "UT", "UTC")
SERIAL_WORDS = ("SERIAL", "SERIALNO", "SERNO")
LONGEST_TEXT = 400


@dataclass(frozen=True, slots=True)
class Identity:
    """A frame with what tells its device, and what was odd: pairs of sentence and remedy.

    ``frame`` is None where it cannot be used; ``ignored`` where the recipe says so. ``claimed``
    is a serial that the header holds although the recipe does not ask for it.
    """

    file: FoundFile
    frame: Frame | None
    serial: str | None = None
    claimed: str | None = None
    lot: str | None = None
    wafer: str | None = None
    die_row: int | None = None
    die_column: int | None = None
    odd: tuple[tuple[str, str], ...] = ()
    ignored: bool = False


def identity(
    file: FoundFile,
    header: dict[str, Value],
    planes: dict[str, Plane],
    given: dict[str, Value] | None,
    rules: FrameRules,
) -> Identity:
    """Read kind, exposure, serial and the rest by the recipe's rules.

    ``given`` holds the manifest row or the groups of the file's name by upper-case name; they go
    before the ``header``. None where there was no row or no match.
    """
    if rules.sorted_by == "manifest" and given is None:
        return _unusable(file, "has no row in the manifest; it was left out", "add a row for it")
    if rules.sorted_by == "name" and given is None:
        return _unusable(
            file,
            "does not match frames.pattern; it was left out",
            "rename it or correct the pattern",
        )
    looked = _Values(header, given, rules)
    word = looked.text("kind")
    if word is None:
        return _unusable(
            file,
            f"does not say its kind ({rules.kind} is missing or empty); it was left out",
            "add it, or say in frames where the kind is found",
        )
    kind = parse.kind_of(word, rules.kinds)
    if kind is None:
        return _unusable(
            file,
            f"is of the kind {printable(word)!r}, which is not known; it was left out",
            "add the word to frames.kinds, with bias, dark, flat, x-ray, pump or ignore",
        )
    if kind == "ignore":
        return Identity(file, None, ignored=True)
    exposure = looked.number("exposure", parse.seconds)
    if exposure is not None and exposure < 0:
        looked.odd.append((f"its exposure is {exposure:g} s, which cannot be", "correct it"))
        exposure = None
    if exposure is None and kind == "dark":
        looked.odd.append(
            (f"does not say its exposure ({rules.exposure} is missing)", "add the exposure")
        )
    frame = Frame(
        path=file.path,
        label=file.label,
        kind=kind,
        planes=planes,
        exposure=exposure,
        temperature=looked.number("temperature", parse.celsius),
        level=looked.number("level", parse.light),
        wavelength=looked.wavelength(),
        time=looked.time(),
        cycles=looked.whole("cycles"),
        phase_time=looked.number("phase_time", parse.microseconds),
    )
    claims = (parse.text(header[name]) for name in SERIAL_WORDS if name in header)
    claimed = next((claim for claim in claims if claim), None)
    return Identity(
        file,
        frame,
        serial=looked.text("serial"),
        claimed=None if claimed is None else printable(claimed, LONGEST_TEXT),
        lot=looked.text("lot"),
        wafer=looked.text("wafer"),
        die_row=looked.whole("die_row"),
        die_column=looked.whole("die_column"),
        odd=tuple(looked.odd),
    )


def _unusable(file: FoundFile, seen: str, remedy: str) -> Identity:
    return Identity(file, None, odd=((seen, remedy),))


def name_groups(pattern: re.Pattern[str], file: FoundFile) -> dict[str, Value] | None:
    """The named groups that matched in the path below the source, None without a match."""
    below = file.path.relative_to(file.source).as_posix()
    found = pattern.search(below)
    if found is None:
        return None
    return {name.upper(): text for name, text in found.groupdict().items() if text}


class _Values:
    """Looks up what the rules name, and collects what could not be understood."""

    def __init__(
        self, header: dict[str, Value], given: dict[str, Value] | None, rules: FrameRules
    ) -> None:
        self.header = header
        self.given = given or {}
        self.rules = rules
        self.odd: list[tuple[str, str]] = []

    def value(self, field: str) -> Value | None:
        name: str | None = getattr(self.rules, field)
        for key in (name, field):
            if key is not None and key.upper() in self.given:
                return self.given[key.upper()]
        if name is None:
            return None
        found = self.header.get(name.upper())
        if found is None and name in ALIASES:
            found = self.header.get(ALIASES[name])
        return found

    def text(self, field: str) -> str | None:
        value = self.value(field)
        found = None if value is None else parse.text(value)
        return None if found is None else printable(found, LONGEST_TEXT)

    def number(self, field: str, convert: Callable[[Value], float | None]) -> float | None:
        value = self.value(field)
        if value is None or value == "":
            return None
        number = convert(value)
        if number is None:
            self._not_understood(field, value)
        return number

    def whole(self, field: str) -> int | None:
        value = self.value(field)
        if value is None or value == "":
            return None
        number = parse.whole(value)
        if number is None:
            self._not_understood(field, value)
        return number

    def wavelength(self) -> str | None:
        value = self.value("wavelength")
        found = None if value is None else parse.wavelength(value)
        return None if found is None else printable(found, LONGEST_TEXT)

    def time(self) -> float | None:
        value = self.value("time")
        if value is None or value == "":
            return None
        of_day = next((self.header[word] for word in TIME_OF_DAY if word in self.header), None)
        moment = parse.moment(value, of_day)
        if moment is None:
            self._not_understood("time", value)
        return moment

    def _not_understood(self, field: str, value: Value) -> None:
        name = getattr(self.rules, field) or field
        self.odd.append(
            (
                f"its {field.replace('_', ' ')} ({name}) is {printable(str(value))!r}, which could"
                " not be understood",
                "correct it, or name another place for it in frames",
            )
        )
