"""Frames taken alike, found and put in order."""

from collections import Counter
from collections.abc import Callable, Iterable
from statistics import fmean

from sensorgrade.frames.frame import KINDS, Frame, Stack
from sensorgrade.frames.geometry import fits_section
from sensorgrade.frames.sources import natural
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import FrameRules, Section

Form = tuple[tuple[str, tuple[int, int], str, tuple[tuple[str, Section], ...]], ...]


def stacks(
    frames: Iterable[Frame], rules: FrameRules
) -> tuple[tuple[Stack, ...], tuple[Finding, ...]]:
    """Stacks of one device's frames: by kind, then exposure, temperature, level and the rest.

    Exposures and levels are alike within ``rules.exposure_tolerance``, temperatures within
    ``rules.temperature_tolerance`` of the lowest of their stack. A bias is told apart by its
    temperature alone, a dark also by exposure. Within a stack frames stand in order of time, or
    of name where a time is missing. Frames whose shape, sample type or stated sections are not
    those of most are left out, with a finding.
    """
    kept, findings = _of_one_form(list(frames))
    found = []
    for kind in KINDS:
        groups = [[frame for frame in kept if frame.kind == kind]]
        for split in _splits(kind, rules):
            groups = [part for group in groups for part in split(group)]
        found += [_stack(kind, group) for group in groups if group]
    return tuple(found), tuple(findings)


def _of_one_form(frames: list[Frame]) -> tuple[list[Frame], list[Finding]]:
    """The frames of the commonest shape, type and sections; a finding for each other one."""
    if not frames:
        return [], []
    counts = Counter(map(_form, frames))
    usual = max(counts, key=lambda form: (counts[form], form))
    kept = [frame for frame in frames if _form(frame) == usual]
    findings = [
        Finding(
            "error",
            frame.label,
            f"is {_form_text(_form(frame))}, the device's other frames are {_form_text(usual)};"
            " it was left out",
            "take it out, or correct it",
        )
        for frame in frames
        if _form(frame) != usual
    ]
    return kept, findings


def _form(frame: Frame) -> Form:
    return tuple(
        (key, plane.shape, plane.dtype, tuple(sorted(frame.sections.get(key, {}).items())))
        for key, plane in frame.planes.items()
    )


def _form_text(form: Form) -> str:
    return ", ".join(
        f"{key + ': ' if key else ''}{rows} x {columns} {dtype} (rows x columns)"
        + "".join(f", {keyword} {fits_section(section)}" for keyword, section in sections)
        for key, (rows, columns), dtype, sections in form
    )


Split = Callable[[list[Frame]], list[list[Frame]]]


def _splits(kind: str, rules: FrameRules) -> list[Split]:
    """What tells apart the stacks of a kind, one after the other."""
    relative = rules.exposure_tolerance / 100
    kelvin = rules.temperature_tolerance
    temperature = _by_closeness(lambda frame: frame.temperature, absolute=kelvin)
    exposure = _by_closeness(lambda frame: frame.exposure, relative=relative)
    level = _by_closeness(lambda frame: frame.level, relative=relative)
    return {
        "bias": [temperature],
        "dark": [exposure, temperature],
        "flat": [_by_value(lambda frame: frame.wavelength), level, exposure, temperature],
        "x-ray": [exposure, temperature],
        "pump": [
            _by_closeness(lambda frame: frame.phase_time, relative=relative),
            _by_value(lambda frame: frame.cycles),
            temperature,
            level,
        ],
    }[kind]


def _by_value(value: Callable[[Frame], str | int | None]) -> Split:
    def split(frames: list[Frame]) -> list[list[Frame]]:
        groups: dict[str | int | None, list[Frame]] = {}
        for frame in frames:
            groups.setdefault(value(frame), []).append(frame)
        return [groups[key] for key in sorted(groups, key=lambda key: (key is None, key))]

    return split


def _by_closeness(
    value: Callable[[Frame], float | None], *, relative: float = 0.0, absolute: float = 0.0
) -> Split:
    """Groups whose values lie within the tolerance of their lowest; those without one last."""

    def split(frames: list[Frame]) -> list[list[Frame]]:
        known = [(number, frame) for frame in frames if (number := value(frame)) is not None]
        groups: list[list[Frame]] = []
        lowest = 0.0
        for number, frame in sorted(known, key=lambda pair: pair[0]):
            if not groups or number - lowest > max(absolute, relative * abs(lowest)):
                groups.append([])
                lowest = number
            groups[-1].append(frame)
        unknown = [frame for frame in frames if value(frame) is None]
        return groups + ([unknown] if unknown else [])

    return split


def _stack(kind: str, frames: list[Frame]) -> Stack:
    by_name = sorted(frames, key=lambda frame: natural(frame.label))
    times = [frame.time for frame in by_name]
    if None not in times:
        by_name.sort(key=lambda frame: frame.time or 0.0)
    first = by_name[0]
    return Stack(
        kind=kind,
        frames=tuple(by_name),
        exposure=_mean(frame.exposure for frame in frames),
        temperature=_mean(frame.temperature for frame in frames),
        level=_mean(frame.level for frame in frames),
        wavelength=first.wavelength if kind == "flat" else None,
        cycles=first.cycles if kind == "pump" else None,
        phase_time=_mean(frame.phase_time for frame in frames) if kind == "pump" else None,
    )


def _mean(values: Iterable[float | None]) -> float | None:
    """Mean of the values there are, None when there are none."""
    known = [value for value in values if value is not None]
    return fmean(known) if known else None
