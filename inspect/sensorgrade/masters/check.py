"""A look at a set of frames without measuring anything: what is there, what is wrong."""

import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.frames.decode import decoded
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.frames.geometry import geometry
from sensorgrade.frames.inventory import find_devices
from sensorgrade.masters.audit import audited
from sensorgrade.masters.outlook import Outlook, outlooks
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Recipe


@dataclass(frozen=True, slots=True)
class Checked:
    """One device after the audit, and the outlook for each name that limits are set on."""

    device: DeviceFrames
    outlooks: tuple[Outlook, ...]


def checked(sources: Sequence[Path], recipe: Recipe) -> Iterator[Checked]:
    """Audit each device below the sources.

    Raises
    ------
    RequestError
        A source is missing or holds no frames.
    """
    for device in find_devices(sources, recipe):
        looked = _audited(device, recipe)
        yield Checked(looked, outlooks(looked, recipe.grades))


def _audited(device: DeviceFrames, recipe: Recipe) -> DeviceFrames:
    if not device.stacks:
        return device
    with tempfile.TemporaryDirectory(prefix="sensorgrade-") as scratch:
        ready = decoded(device, scratch=Path(scratch))
        if not ready.stacks:
            return ready
        shapes = {key: plane.shape for key, plane in ready.frames[0].planes.items()}
        try:
            layout = geometry(recipe.sensor, shapes, ready.frames[0].sections)
        except RequestError as error:
            finding = Finding(
                "error",
                ready.frames[0].label,
                str(error),
                "correct the recipe's sections, or take frames of that layout",
            )
            return replace(ready, stacks=(), findings=(*ready.findings, finding))
        return audited(ready, layout, recipe.sensor)
