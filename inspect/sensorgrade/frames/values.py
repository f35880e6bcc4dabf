"""Texts and numbers of headers, manifests and names, turned into quantities."""

import re
from datetime import UTC, datetime
from functools import lru_cache

from astropy import units

from sensorgrade.frames.contents import Value

NUMBER = re.compile(
    r"\s*([+-]?(?:\d{1,40}\.?\d{0,40}|\.\d{1,40})(?:[eE][+-]?\d{1,3})?)\s*(.{0,40})"
)
SECONDS = {"sec": "s", "secs": "s", "second": "s", "seconds": "s", "msec": "ms", "minutes": "min"}
CELSIUS = ("c", "degc", "deg c", "°c", "celsius", "deg. celsius", "degrees c", "deg", "")
ABSOLUTE_ZERO = -273.15  # degC

# Words that cameras and benches use for each kind, lower case, letters and digits only.
KIND_WORDS = {
    "bias": ("bias", "biases", "zero", "zeros", "offset", "biasframe", "biasframes"),
    "dark": ("dark", "darks", "darkframe", "darkframes", "darkcurrent"),
    "flat": (
        *("flat", "flats", "flatfield", "flatfields", "flatframe", "flatframes", "ff"),
        *("skyflat", "twilightflat", "domeflat", "lampflat", "ledflat", "domeflats", "skyflats"),
    ),
    "x-ray": ("xray", "xrays", "fe55", "fe55xray"),
    "pump": ("pump", "pumping", "pumped", "trappump", "pocketpump", "trappumping", "pocketpumping"),
}
WORDS = {word: kind for kind, words in KIND_WORDS.items() for word in words}


def kind_of(word: str, own: dict[str, str]) -> str | None:
    """bias, dark, flat, x-ray, pump or ignore for a word of the files; None if unknown.

    ``own`` are the recipe's words, which come first. Case, blanks and signs do not count.
    """
    folded = _folded(word)
    for mine, kind in own.items():
        if _folded(mine) == folded:
            return kind
    return WORDS.get(folded)


def _folded(word: str) -> str:
    return "".join(c for c in word.lower() if c.isalnum())


def seconds(value: Value) -> float | None:
    """Exposure time [s]; a number is in s already."""
    return _in_unit(value, "s")


def microseconds(value: Value) -> float | None:
    """Phase time [us]; a number is in us already."""
    return _in_unit(value, "us")


def celsius(value: Value) -> float | None:
    """Temperature [degC]; a number is in degC already, ``"263 K"`` is converted."""
    number, unit = _split(value)
    if number is None:
        return None
    if unit.lower() in CELSIUS:
        return number
    if unit in ("K", "kelvin"):
        return number + ABSOLUTE_ZERO
    return None


def light(value: Value) -> float | None:
    """Light level in proportion to light: the number, or the SI value where a unit is given."""
    number, unit = _split(value)
    if number is None or not unit:
        return number
    scale = _scale(unit, None)
    return None if scale is None else number * scale


def wavelength(value: Value) -> str | None:
    """Number of nm as text where it is one, else the filter's name; None for an empty text."""
    number, unit = _split(value)
    if number is not None:
        scale = 1.0 if not unit else _scale(unit, "nm")
        if scale is not None:
            return f"{number * scale:.6g}"
    return text(value)


def whole(value: Value) -> int | None:
    """A whole number."""
    number, unit = _split(value)
    if number is None or unit or not number.is_integer() or abs(number) >= 2**53:
        return None
    return int(number)


def text(value: Value) -> str | None:
    """The text of a value, None where it is empty."""
    if isinstance(value, float) and value.is_integer() and abs(value) < 2**53:
        value = int(value)
    return str(value).strip() or None


def moment(value: Value, time_of_day: Value | None) -> float | None:
    """Seconds since 1970 UTC of an ISO 8601 text; a bare date is joined by ``time_of_day``."""
    written = str(value).strip()
    if "T" not in written and " " not in written and isinstance(time_of_day, str):
        written = f"{written}T{time_of_day.strip()}"
    try:
        instant = datetime.fromisoformat(written)
    except ValueError:
        return None
    if instant.tzinfo is None:
        instant = instant.replace(tzinfo=UTC)
    return (instant - datetime(1970, 1, 1, tzinfo=UTC)).total_seconds()


def _in_unit(value: Value, target: str) -> float | None:
    number, unit = _split(value)
    if number is None or not unit:
        return number
    scale = _scale(SECONDS.get(unit.lower(), unit), target)
    return None if scale is None else number * scale


def _split(value: Value) -> tuple[float | None, str]:
    """Number and unit text; (None, "") where the value does not start with a number."""
    if isinstance(value, bool):
        return None, ""
    if isinstance(value, (int, float)):
        return float(value), ""
    found = NUMBER.fullmatch(value)
    if found is None:
        return None, ""
    return float(found[1]), found[2].strip()


@lru_cache(maxsize=1024)
def _scale(unit: str, target: str | None) -> float | None:
    """Factor from ``unit`` to ``target`` (else to SI), None where there is none."""
    try:
        parsed = units.Unit(unit)
        scale = parsed.to(target) if target else parsed.si.scale
    except (ValueError, TypeError, units.UnitsError):
        return None
    return float(scale)
