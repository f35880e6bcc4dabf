"""Which numbers a limit speaks of."""

from collections.abc import Iterable, Mapping
from dataclasses import replace
from functools import cache
from itertools import product

from sensorgrade.defects.defect import DefectCount
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import Limit, Sensor

PART_KINDS = ("output ", "colour ", "zone ")
COLOUR_PLANES = ("red", "green-red", "green-blue", "blue")

Reading = Measurement | DefectCount


def by_name(
    measurements: Iterable[Measurement], counts: Iterable[DefectCount]
) -> dict[str, list[Reading]]:
    """All readings of one device under the name that limits use."""
    named: dict[str, list[Reading]] = {}
    for measurement in measurements:
        named.setdefault(measurement.name, []).append(measurement)
    for count in counts:
        named.setdefault(count.kind, []).append(count)
    return named


def readings(limit: Limit, named: Mapping[str, list[Reading]]) -> list[Reading]:
    """The readings that must meet ``limit``.

    ``zone`` and ``scope`` narrow: every part of the limit's scope must be a part of the
    reading's, with or without its kind ("left" stands for "output left", "red" for "colour red",
    "green" for both greens). A limit without zone does not look at readings of zones. A count
    without narrowing is that of the whole device, where there is one: it is the sum of its
    outputs' counts, and ``of: worst`` or ``of: mean`` looks at those instead.
    """
    found = named.get(limit.name, [])
    if limit.zone is not None:
        found = [reading for reading in found if _has_part(reading.scope, f"zone {limit.zone}")]
    else:
        found = [reading for reading in found if not _of_zone(reading.scope)]
    if limit.scope is not None:
        for part in limit.scope.split(", "):
            found = [reading for reading in found if _has_part(reading.scope, part)]
        return found
    whole: list[Reading] = [
        reading
        for reading in found
        if isinstance(reading, DefectCount)
        and "output " not in reading.scope
        and "colour " not in reading.scope
    ]
    parts = [reading for reading in found if reading not in whole]
    if whole and (limit.of == "every" or not parts):
        return whole
    return parts


def absent(limit: Limit, found: list[Reading], sensor: Sensor) -> list[str]:
    """Outputs and colours that the sensor has and the readings lack.

    A limit on every output is not met by the outputs that happened to be measured. Only asked
    where readings are given per output or per colour at all.
    """
    if limit.scope is not None or not found:
        return []
    scopes = tuple(reading.scope for reading in found)
    return _lacking(scopes, tuple(sensor.outputs), sensor.colour != "none")


@cache
def _lacking(scopes: tuple[str, ...], names: tuple[str, ...], coloured: bool) -> list[str]:
    """Places without a scope; the devices of a lot ask the same again and again."""
    outputs = [""]
    if len(names) > 1 and any("output " in scope for scope in scopes):
        outputs = [f"output {name}" for name in names]
    colours = [""]
    if coloured and any("colour " in scope for scope in scopes):
        colours = [f"colour {name}" for name in COLOUR_PLANES]
    places = [[part for part in pair if part] for pair in product(outputs, colours)]
    return [
        ", ".join(place)
        for place in places
        if not any(all(_has_part(scope, part) for part in place) for scope in scopes)
    ]


def combined(limit: Limit, found: list[Reading]) -> list[Reading]:
    """The readings after ``of``: all of them, the worst alone, or their mean.

    The worst is the largest reading against an upper limit and the smallest against a lower one;
    its own uncertainty goes with it. The mean's uncertainty is the mean of the uncertainties,
    which holds however strongly they are correlated (JCGM 100:2008, 5.2.2, note 1); the outputs
    of one device share lamp, temperature and bench.
    """
    if limit.of == "every" or len(found) < 2:
        return found
    if limit.of == "worst":
        return [(max if limit.relation == "<=" else min)(found, key=reading_value)]
    size = len(found)
    value = sum(reading_value(reading) for reading in found) / size
    doubt = sum(reading.standard_uncertainty for reading in found) / size
    scope = f"mean of {size}"
    first = found[0]
    if isinstance(first, Measurement):
        samples = min(reading.n for reading in found if isinstance(reading, Measurement))
        return [replace(first, scope=scope, value=value, standard_uncertainty=doubt, n=samples)]
    # A mean of counts is no longer a whole number: it is decided as a measured quantity.
    return [Measurement(limit.name, scope, value, doubt, "", size)]


def reading_value(reading: Reading) -> float:
    """The number that is held against a limit: the value, or the number of defects found."""
    return float(reading.found) if isinstance(reading, DefectCount) else reading.value


@cache
def _has_part(scope: str, wanted: str) -> bool:
    """Whether one comma-joined part of ``scope`` is ``wanted``, as written or without its kind."""
    parts = scope.split(", ")
    names = parts + [
        part.removeprefix(kind) for part in parts for kind in PART_KINDS if part.startswith(kind)
    ]
    if wanted in ("green", "colour green"):
        return any(name.startswith("green-") for name in names)
    return wanted in names


@cache
def _of_zone(scope: str) -> bool:
    return any(part.startswith("zone ") for part in scope.split(", "))
