"""Numbers with units as recipes write them: ``"5 electron/s"``, ``"15 um"``, ``"70 %"``.

Units are those of astropy.units. Temperatures may be in degC or K, with the offset.
"""

import difflib
import math
import re
from functools import cache

from astropy import units

NUMBER = r"[+-]?(?:[0-9]+(?:\.[0-9]*)?|\.[0-9]+)(?:[eE][+-]?[0-9]+)?"
QUANTITY = re.compile(rf"\s*({NUMBER})\s*(.*?)\s*", re.DOTALL)
UNIT_TEXT = re.compile(r"[A-Za-z%°µμ_0-9 /*^().-]{0,40}")

# How people write what astropy spells differently.
ALIASES = {"degC": "deg_C", "°C": "deg_C", "Celsius": "deg_C"}
MEANT = {
    "e": "electron",
    "e-": "electron",
    "electrons": "electron",
    "e/s": "electron/s",
    "e-/s": "electron/s",
    "electrons/s": "electron/s",
    "adu": "DN",
    "ADU": "DN",
    "dn": "DN",
    "C": "degC",
    "deg": "degC",
    "percent": "%",
    "pct": "%",
    "micron": "um",
    "microns": "um",
    "sec": "s",
    "seconds": "s",
    "e-/DN": "electron/DN",
    "e-/ADU": "electron/DN",
    "electron/adu": "electron/DN",
}
USUAL = (
    *("electron", "DN", "electron/DN", "electron/s", "%", "dB", "degC", "K", "um", "mm", "nm"),
    *("s", "ms", "us", "ns", "V", "mV", "eV", "keV"),
)


class WrongQuantity(ValueError):
    """The text is no quantity of the unit asked for; the message says what was wrong."""


def quantity(text: str, unit: str) -> float:
    """The number that ``text`` states, in ``unit``.

    Parameters
    ----------
    text : str
        A number and a unit, such as ``"0.1 mm"``; a bare number only where ``unit`` is ``""``.
    unit : str
        An astropy unit string, or ``"degC"`` for a temperature (then K is understood as well).

    Raises
    ------
    WrongQuantity
        No number, no unit, one that does not convert, or a value beyond floating point.

    Examples
    --------
    >>> quantity("0.1 mm", "um")
    100.0
    >>> quantity("263.15 K", "degC")
    -10.0
    >>> quantity("3 /cm2", "1 / mm2")
    0.03
    """
    match = QUANTITY.fullmatch(text)
    if match is None:
        raise WrongQuantity(f'write a number and a unit, such as "{example(unit)}"')
    value, given = float(match[1]), match[2]
    if not math.isfinite(value):
        raise WrongQuantity("the number is too large")
    if given == unit:
        return value
    if given == "":
        raise WrongQuantity(f'write the unit too, such as "{example(unit)}"')
    return converted(value, given, unit)


def example(unit: str) -> str:
    """A quantity as one would write it, for messages and for the schema."""
    number = 20 if unit in ("%", "degC", "deg_C") else 10
    return f"{number} {unit.removeprefix('1 ').replace('deg_C', 'degC')}".strip()


def converted(value: float, given: str, unit: str) -> float:
    """``value`` from the unit ``given`` into ``unit``, without the last digits' conversion noise.

    Raises
    ------
    WrongQuantity
        ``given`` is no unit, or none that converts to ``unit``.
    """
    factor, offset = _conversion(given, unit)
    result = value * factor + offset
    if not math.isfinite(result):
        raise WrongQuantity("the number is too large")
    return float(f"{result:.12g}")


@cache
def _conversion(given: str, unit: str) -> tuple[float, float]:
    """(factor, offset) from ``given`` to ``unit``."""
    if unit == "":
        raise WrongQuantity(f'leave out "{given}"')
    found, wanted = parsed(given), parsed(unit)
    if wanted == units.deg_C:
        if found == units.deg_C:
            return 1.0, 0.0
        if found == units.K:
            return 1.0, -273.15
        raise WrongQuantity(f'"{given}" is no unit of temperature; write degC or K')
    if found == units.deg_C:
        raise WrongQuantity("a difference of temperatures is written in K")
    try:
        return float(found.to(wanted)), 0.0
    except (units.UnitConversionError, TypeError) as error:
        meant = MEANT.get(given)
        if meant is not None and parsed(meant).is_equivalent(wanted):
            raise WrongQuantity(f'write {meant} for "{given}"') from error
        raise WrongQuantity(f'"{given}" does not convert to {unit}') from error


@cache
def parsed(text: str) -> units.UnitBase:
    """The unit that ``text`` names.

    Raises
    ------
    WrongQuantity
        It names none; the message says the nearest that is usual.
    """
    if text.startswith("/"):  # as in "5 /cm2"
        text = f"1 {text}"
    if UNIT_TEXT.fullmatch(text) is None:
        raise WrongQuantity("what follows the number is no unit")
    try:
        unit = units.Unit(ALIASES.get(text, text), parse_strict="raise")
    except (ValueError, TypeError, OverflowError, ZeroDivisionError) as error:
        near = MEANT.get(text) or next(iter(difflib.get_close_matches(text, USUAL, 1)), None)
        hint = f"; nearest is {near}" if near else ""
        raise WrongQuantity(f'"{text}" is no unit{hint}') from error
    if unit == units.dimensionless_unscaled:
        raise WrongQuantity(f'"{text}" is no unit')
    return unit
