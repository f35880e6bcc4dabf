"""Frames that lie among those of another device."""

from collections.abc import Iterator
from pathlib import Path

from sensorgrade.measurement import Finding
from sensorgrade.recipe.document import printable

REMEDY = "move each device's frames to its own folder, or set frames.serial"


def mixed_serials(
    serials: dict[Path, dict[str, list[str]]], *, asked: bool
) -> Iterator[tuple[Path, str, Finding]]:
    """Folder, serial and finding for each serial whose frames are mixed with others'.

    Parameters
    ----------
    serials : dict
        Labels of frames by device folder and serial.
    asked : bool
        The recipe tells devices apart by serial, so that a folder may hold many; then only
        frames that lie apart from most of their serial's, among others', are strays. Else
        every folder with several serials is mixed.
    """
    home: dict[str, Path] = {}
    for folder, by_serial in serials.items():
        for serial, labels in by_serial.items():
            if serial not in home or len(labels) > len(serials[home[serial]][serial]):
                home[serial] = folder
    for folder, by_serial in serials.items():
        if len(by_serial) < 2:
            continue
        for serial, labels in by_serial.items():
            if asked and home[serial] == folder:
                continue
            others = ", ".join(other for other in by_serial if other != serial)
            seen = (
                f"mixed serials: {len(labels)} frame(s) of {serial} lie among frames of"
                f" {printable(others, 120)}"
            )
            yield folder, serial, Finding("error", labels[0], seen, REMEDY)
