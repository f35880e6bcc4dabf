"""What devices there are below the sources, and what was found of each."""

import re
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from sensorgrade.errors import FrameError, RequestError
from sensorgrade.frames.contents import Layout, Value
from sensorgrade.frames.device_folder import device_folder, distinct_names, label_prefixes
from sensorgrade.frames.folder_name import folder_names
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.frames.identity import Identity, identity, name_groups
from sensorgrade.frames.manifest import Manifests
from sensorgrade.frames.mixed_serials import mixed_serials
from sensorgrade.frames.readers import READERS, reader_of
from sensorgrade.frames.sources import (
    FoundFile,
    Remark,
    checked_sources,
    files_below,
    natural,
    shown,
)
from sensorgrade.frames.stacks import stacks
from sensorgrade.frames.stated_sections import stated_sections
from sensorgrade.measurement import Finding
from sensorgrade.recipe.document import printable
from sensorgrade.recipe.model import Recipe

FEW = 3  # findings alike that are listed one by one


@dataclass(slots=True)
class Folder:
    """One device's folder while files are gathered: its source, what is in it."""

    source: Path
    found: list[Identity] = field(default_factory=list)
    findings: list[Finding] = field(default_factory=list)


def find_devices(sources: Sequence[Path], recipe: Recipe) -> tuple[DeviceFrames, ...]:
    """Every device of the sources with its stacks, in natural order of serial.

    A frame belongs to the serial that the recipe's rules find for it. Without one, its device is
    the folder it lies in, or the folder above the first one named for a kind ("BIAS",
    "flat_20s"). Folders of one name get as much of their path as tells them apart. Samples are
    not read; a plane that has a coding must go through `decoded` before it is.

    Files that plainly are no frames are passed over; all else that cannot be used gives a
    finding. A device whose files are all unusable is still returned, without stacks.

    Raises
    ------
    RequestError
        A source is missing or holds no frames, or a manifest cannot be read.
    """
    folders = _gathered(checked_sources(sources), recipe)
    if not any(item.frame for folder in folders.values() for item in folder.found):
        raise RequestError(_no_frames(sources, folders))
    names = distinct_names(list(folders))
    members: dict[str, list[Identity]] = {}
    findings: dict[str, list[Finding]] = {}
    homeless: list[Finding] = []
    for path, folder in folders.items():
        serials = dict.fromkeys(item.serial or names[path] for item in folder.found if item.frame)
        for item in folder.found:
            if item.frame is not None:
                members.setdefault(item.serial or names[path], []).append(item)
            for finding in _odd(item):
                target = [item.serial or names[path]] if item.frame else list(serials)
                for serial in target or [names[path]]:
                    findings.setdefault(serial, []).append(finding)
        if serials:
            for serial in serials:
                findings.setdefault(serial, []).extend(folder.findings)
        elif any(finding.severity == "error" for finding in folder.findings):
            findings.setdefault(names[path], []).extend(folder.findings)
        else:
            homeless += folder.findings
    asked = recipe.frames.serial is not None
    for path, serial, finding in mixed_serials(_serials(folders, asked=asked), asked=asked):
        findings.setdefault(serial if asked else names[path], []).append(finding)
    ordered = sorted({*members, *findings}, key=natural)
    findings.setdefault(ordered[0], []).extend(homeless)
    safe = folder_names(ordered)
    return tuple(
        _device(serial, safe[serial], members.get(serial, []), findings.get(serial, []), recipe)
        for serial in ordered
    )


def _gathered(sources: tuple[Path, ...], recipe: Recipe) -> dict[Path, Folder]:
    """Every file and remark of the sources, by the folder that stands for a device."""
    rules = recipe.frames
    layout = Layout(
        tuple(
            dict.fromkeys(
                output.extension for output in recipe.sensor.outputs.values() if output.extension
            )
        ),
        rules.raw,
    )
    pattern = re.compile(rules.pattern) if rules.pattern is not None else None
    folders: dict[Path, Folder] = {}
    prefixes = label_prefixes(sources)
    for source in sources:
        manifests = Manifests(rules.manifest if rules.sorted_by == "manifest" else None, source)
        for found in files_below(source, prefix=prefixes[source]):
            if isinstance(found, Remark):
                home = device_folder(found.folder, source)
                folders.setdefault(home, Folder(source)).findings.append(found.finding)
                continue
            folder = folders.setdefault(device_folder(found.path.parent, source), Folder(source))
            if rules.sorted_by == "name" and pattern is not None:
                given = name_groups(pattern, found)
            else:
                given = manifests.row(found)
            folder.found.append(_identified(found, layout, given, recipe))
        for finding in manifests.left_over():
            folders.setdefault(source, Folder(source)).findings.append(finding)
    return folders


def _identified(
    file: FoundFile, layout: Layout, given: dict[str, Value] | None, recipe: Recipe
) -> Identity:
    reader = reader_of(file.path.name)
    assert reader is not None  # files_below yields no other files
    try:
        contents = reader(file.path, layout)
        sections = stated_sections(file.path, recipe.sensor.outputs, contents)
    except FrameError as error:
        seen = printable(str(error).removeprefix(f"{file.path}: "), 500)
        return Identity(file, None, odd=((seen, "it was left out"),))
    except OSError as error:
        seen = f"cannot be read: {(error.strerror or 'unknown reason').lower()}; it was left out"
        return Identity(file, None, odd=((seen, "make it readable"),))
    found = identity(file, contents.values, contents.planes, given, recipe.frames)
    if sections and found.frame is not None:
        found = replace(found, frame=replace(found.frame, sections=sections))
    if contents.remarks and found.frame is not None:
        extra = tuple((remark, "correct the header") for remark in contents.remarks)
        return replace(found, odd=found.odd + extra)
    return found


def _serials(folders: dict[Path, Folder], *, asked: bool) -> dict[Path, dict[str, list[str]]]:
    """Labels of the frames by folder and serial: the one asked for, else the header's own."""
    serials: dict[Path, dict[str, list[str]]] = {}
    for path, folder in folders.items():
        for item in folder.found:
            serial = item.serial if asked else item.claimed
            if item.frame is not None and serial is not None:
                serials.setdefault(path, {}).setdefault(serial, []).append(item.file.label)
    return serials


def _odd(item: Identity) -> list[Finding]:
    """The findings about one file: an error where it was left out, else a warning."""
    severity = "warning" if item.frame is not None else "error"
    undecides = ("dark_current", "dsnu") if _dark_without_exposure(item) else ()
    return [
        Finding(severity, item.file.label, seen, remedy, undecides)  # type: ignore[arg-type]
        for seen, remedy in item.odd
    ]


def _dark_without_exposure(item: Identity) -> bool:
    return item.frame is not None and item.frame.kind == "dark" and item.frame.exposure is None


def _device(
    serial: str, folder: str, items: list[Identity], findings: list[Finding], recipe: Recipe
) -> DeviceFrames:
    found, about_stacks = stacks(
        (item.frame for item in items if item.frame is not None), recipe.frames
    )
    findings = [*findings, *about_stacks]
    known = {}
    for name in ("lot", "wafer", "die_row", "die_column"):
        values = dict.fromkeys(
            value for item in items if (value := getattr(item, name)) is not None
        )
        known[name] = next(iter(values), None)
        if len(values) > 1:
            listed = ", ".join(map(str, list(values)[:5]))
            findings.append(
                Finding(
                    "warning",
                    serial,
                    f"its frames name different values of {name.replace('_', ' ')}: {listed};"
                    " the first was taken",
                    "correct the frames that are wrong",
                )
            )
    return DeviceFrames(serial, folder, found, _joined(findings), **known)


def _joined(findings: list[Finding]) -> tuple[Finding, ...]:
    """Findings that say the same of more than a few files become one."""
    alike: dict[tuple[object, ...], list[Finding]] = {}
    for finding in findings:
        key = (finding.severity, finding.seen, finding.remedy, finding.undecides)
        alike.setdefault(key, []).append(finding)
    joined = []
    for group in alike.values():
        if len(group) <= FEW:
            joined += group
            continue
        first = group[0]
        where = f"{first.where} and {len(group) - 1} more"
        joined.append(Finding(first.severity, where, first.seen, first.remedy, first.undecides))
    return tuple(joined)


def _no_frames(sources: Sequence[Path], folders: dict[Path, Folder]) -> str:
    where = ", ".join(map(shown, sources))
    unusable = [
        f"{item.file.label}: {seen}"
        for folder in folders.values()
        for item in folder.found
        for seen, _ in item.odd
    ]
    if not unusable:
        return f"{where}: holds no frames; they are files named {', '.join(READERS)}"
    return f"{where}: none of its {len(unusable)} files can be used; the first is {unusable[0]}"
