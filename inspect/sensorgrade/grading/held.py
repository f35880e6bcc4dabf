"""One limit beside the readings that must meet it, and what stands in the way of deciding."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.selection import Reading, absent, by_name, combined, readings
from sensorgrade.grading.temperature import at_temperature
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Limit, Recipe


@dataclass(frozen=True, slots=True)
class Held:
    """One place a limit holds for; ``why`` says why it cannot be decided, None if it can."""

    scope: str
    reading: Reading | None
    why: str | None


@dataclass(frozen=True, slots=True)
class Known:
    """One device's readings by name, and the findings by the name whose limits they undecide.

    ``places`` remembers where limits were held before: grades differ in their bounds far more
    often than in what these are held against.
    """

    named: Mapping[str, list[Reading]]
    barred: Mapping[str, list[Finding]]
    places: dict[tuple[object, ...], list[Held]] = field(default_factory=dict)


def known(
    measurements: Iterable[Measurement], counts: Iterable[DefectCount], findings: Iterable[Finding]
) -> Known:
    """A device's readings, sorted for lookup."""
    barred: dict[str, list[Finding]] = {}
    for finding in findings:
        for name in finding.undecides:
            barred.setdefault(name, []).append(finding)
    return Known(by_name(measurements, counts), barred)


@dataclass(frozen=True)
class DeviceReadings:
    """What grading knows of one device: values only, never frames."""

    serial: str
    measurements: tuple[Measurement, ...]
    counts: tuple[DefectCount, ...]
    findings: tuple[Finding, ...] = ()

    @cached_property
    def known(self) -> Known:
        """The same, sorted for lookup once for all that a lot is asked."""
        return known(self.measurements, self.counts, self.findings)


def held(limit: Limit, of_device: Known, *, recipe: Recipe) -> list[Held]:
    """The places that ``limit`` holds for on one device; there is at least one."""
    asked = (
        limit.name,
        limit.relation,
        limit.of,
        limit.scope,
        limit.zone,
        limit.temperature,
    )
    if asked not in of_device.places:
        of_device.places[asked] = _held(limit, of_device, recipe=recipe)
    return of_device.places[asked]


def _held(limit: Limit, of_device: Known, *, recipe: Recipe) -> list[Held]:
    findings = of_device.barred.get(limit.name, ())
    found = readings(limit, of_device.named)
    if not found:
        place = limit.scope or (f"zone {limit.zone}" if limit.zone else "device")
        return [Held(place, None, _bar(place, findings) or "not measured")]
    places = [
        Held(place, None, _bar(place, findings) or "not measured")
        for place in absent(limit, found, recipe.sensor)
    ]
    usable: list[Reading] = []
    for reading in found:
        there: Reading | str = reading
        if limit.temperature is not None:
            there = at_temperature(
                reading,
                of_device.named,
                celsius=limit.temperature,
                tolerance=recipe.frames.temperature_tolerance,
            )
        if isinstance(there, str):
            places.append(Held(reading.scope, reading, there))
        else:
            usable.append(there)
    return places + [
        Held(reading.scope, reading, _bar(reading.scope, findings))
        for reading in combined(limit, usable)
    ]


def _bar(scope: str, findings: Sequence[Finding]) -> str | None:
    """Why findings leave ``scope`` undecided, None if they do not.

    A finding about one output or colour ("read noise, output left") leaves the others alone.
    """
    if not findings:
        return None
    parts = set(scope.split(", "))
    for finding in findings:
        about = {
            part for part in finding.where.split(", ") if part.startswith(("output ", "colour "))
        }
        whole = not any(part.startswith(("output ", "colour ")) for part in parts)
        if whole or about <= parts:
            return f"cannot be decided, {finding.seen.rstrip('.')} ({finding.where})"
    return None
