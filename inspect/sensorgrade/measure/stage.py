"""The form that every measuring stage has: inputs, options in; measurements and curves out."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Protocol

from sensorgrade.errors import NotMeasured
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduced import Reduced
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Sensor


@dataclass(frozen=True, slots=True)
class Quantity:
    """A measurement's name, unit and meaning, as limits, schema and guides need it."""

    name: str
    unit: str
    meaning: str


class StageResult(Protocol):
    """What a stage returns: its own frozen dataclass, with at least these two fields."""

    @property
    def measurements(self) -> tuple[Measurement, ...]:
        """What was measured, with uncertainties."""
        ...

    @property
    def findings(self) -> tuple[Finding, ...]:
        """What the audit should know."""
        ...


@dataclass(frozen=True, slots=True)
class Inputs:
    """What a stage may look at. ``results`` holds those of the stages before it, by name."""

    sensor: Sensor
    reduced: Reduced
    masters: Masters
    results: dict[str, StageResult]

    def measured(self, name: str, scope: str) -> Measurement:
        """The earlier stages' measurement of that name and scope.

        Raises
        ------
        NotMeasured
            No earlier stage measured it; the message names it.
        """
        for result in self.results.values():
            for measurement in result.measurements:
                if measurement.name == name and measurement.scope == scope:
                    return measurement
        raise NotMeasured(f"needs {name} of {scope}, which was not measured")


@dataclass(frozen=True, slots=True)
class Stage:
    """One line of the stage table.

    ``run(inputs, options)`` raises NotMeasured when frames are missing.
    """

    name: str
    options: type
    run: Callable[[Inputs, Any], StageResult]
    measures: tuple[Quantity, ...]
