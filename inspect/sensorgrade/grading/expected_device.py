"""The device a plan is made for: from the recipe, from an earlier run, and from what is stated."""

from collections.abc import Mapping, Sequence
from dataclasses import fields, replace
from statistics import median
from typing import Any

from sensorgrade.errors import RequestError
from sensorgrade.grading.expected_uncertainty import FIELDS, ExpectedDevice
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.recipe.model import Recipe, Section
from sensorgrade.recipe.quantities import WrongQuantity, quantity

FILLED = 0.9  # of the converter's range that saturation is taken to fill


def expected_device(
    recipe: Recipe, *, like: Sequence[DeviceReadings] = (), stated: Mapping[str, str] | None = None
) -> ExpectedDevice:
    """What a device of this recipe is like, the surest source last.

    Parameters
    ----------
    recipe : Recipe
        The loosest limit on a quantity stands for it where nothing else does; output sections
        give the pixels, the converter's bits the gain.
    like : sequence of DeviceReadings
        Devices measured before; their medians are taken.
    stated : mapping of name to text
        Quantities with units, such as ``{"read_noise": "4.5 electron"}``.

    Raises
    ------
    RequestError
        A stated name or quantity is not one of an expected device's.
    """
    values: dict[str, Any] = {}
    for level in reversed(recipe.grades):
        for limit in level.limits:
            if limit.name in FIELDS and limit.bound > 0.0:
                values.setdefault(FIELDS[limit.name], limit.bound)
    sections = [output.image for output in recipe.sensor.outputs.values()]
    sizes = [one.shape[0] * one.shape[1] for one in sections if isinstance(one, Section)]
    if sizes:
        values["pixels"] = min(sizes)
    device = replace(ExpectedDevice(), **values)
    if recipe.sensor.adc_bits is not None and "conversion_gain" not in values:
        gain = device.saturation / (FILLED * 2.0**recipe.sensor.adc_bits)
        device = replace(device, conversion_gain=gain)
    for name, field in FIELDS.items():
        found = [one.value for each in like for one in each.measurements if one.name == name]
        if found and median(found) > 0.0:
            measured: dict[str, Any] = {field: median(found)}
            device = replace(device, **measured)
    return replace(device, **_stated(stated or {}))


def _stated(stated: Mapping[str, str]) -> dict[str, Any]:
    """The stated quantities as numbers in the fields' own units."""
    known = {field.name: field.metadata["declared"] for field in fields(ExpectedDevice)}
    values: dict[str, Any] = {}
    for name, text in stated.items():
        if name not in known:
            raise RequestError(f"--expect {name}: no such quantity; there are {', '.join(known)}")
        unit = known[name].unit
        try:
            value = quantity(text, unit or "")
        except WrongQuantity as wrong:
            raise RequestError(f'--expect {name}: cannot read "{text}"; {wrong}') from wrong
        least = known[name].minimum
        if value < least:
            raise RequestError(
                f'--expect {name}: expected {least:g} {unit or ""} or more, found "{text}"'
            )
        values[name] = int(value) if name == "pixels" else value
    return values
