"""Counts of a stored lot at other thresholds on pixels, in place of those of the run."""

from collections.abc import Collection, Mapping
from dataclasses import fields, replace
from typing import Any

from sensorgrade.defects.recount import Recount, counted, recounted
from sensorgrade.defects.thresholds import MOVABLE
from sensorgrade.errors import RequestError
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.lot.stored import StoredLot
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Recipe
from sensorgrade.wording import number_text, unit_text

STAGES = ("pixels", "clusters")


def moved_thresholds(run: Mapping[str, Any], asked: Mapping[str, Any]) -> tuple[str, ...]:
    """Names of the thresholds that ``asked`` moves from the run's; both are stages with options.

    Raises
    ------
    RequestError
        Something else of these stages differs, which only frames can answer.
    """
    movable = {kind for kinds in MOVABLE.values() for kind in kinds}
    moved = []
    for stage in STAGES:
        if stage not in run or stage not in asked:
            continue
        for field in fields(run[stage]):
            name = field.name
            before, after = getattr(run[stage], name), getattr(asked[stage], name)
            if before == after:
                continue
            if stage == "pixels" and name not in movable:
                raise RequestError(
                    f"stages.{stage}.{name}: the run had {before:g}, the limits say {after:g};"
                    " this needs the frames, inspect again"
                )
            moved.append(name)
    return tuple(moved)


def moved_text(recipe: Recipe, moved: Collection[str]) -> tuple[str, ...]:
    """The moved thresholds as people read them: ``"hot 3 electron/s"``."""
    texts = []
    for stage in STAGES:
        options = recipe.stages.get(stage)
        for declared in fields(options) if options is not None else ():
            if declared.name in moved:
                value = getattr(options, declared.name)
                unit = declared.metadata["declared"].unit
                tail = f" {unit_text(unit)}" if unit else ""
                amount = "as each output gives it" if value is None else number_text(value) + tail
                texts.append(f"{declared.name} {amount}")
    return tuple(texts)


def with_counts_at(
    stored: StoredLot, *, recipe: Recipe, moved: Collection[str], names: Collection[str]
) -> tuple[DeviceReadings, ...]:
    """The devices with counts at the recipe's thresholds; ``moved`` are those that changed.

    Only counts in ``names`` are made. One that would need pixels that were not kept is taken out,
    and a finding says why; it is undecided. Where a threshold did not move, the run's count stays.
    """
    pixels, clusters = recipe.stages["pixels"], recipe.stages.get("clusters")
    kept = [one for one in stored.candidates if one is not None]
    found = iter(recounted(kept, pixels=pixels, clusters=clusters, zones=recipe.zones, names=names))
    changing = set(counted(pixels, clusters)) | {"warm_pixels", "clusters"}
    return tuple(
        _recounted(device, None if candidates is None else next(found), moved, changing, names)
        for device, candidates in zip(stored.devices, stored.candidates, strict=True)
    )


def _recounted(
    device: DeviceReadings,
    recount: Recount | None,
    moved: Collection[str],
    changing: Collection[str],
    names: Collection[str],
) -> DeviceReadings:
    if recount is None:
        why = "its pixels were not kept, an earlier version of this program inspected it"
        lacking: Mapping[str, str] = dict.fromkeys(set(names) & set(changing), why)
        counts = {}
    else:
        lacking = {
            name: why
            for name, why in recount.lacking.items()
            if name in names and (name == "clusters" or name.removesuffix("_pixels") in moved)
        }
        unmoved = recount.lacking.keys() - lacking.keys()
        counts = {(one.kind, one.scope): one for one in recount.counts if one.kind not in unmoved}
    measured = {one.kind for one in device.counts}
    if "warm" in moved and "hot_pixels" in measured:
        measured |= {"warm_pixels"}
    stay = [
        one
        for one in device.counts
        if one.kind not in lacking and (one.kind, one.scope) not in counts
    ]
    new = [one for one in counts.values() if one.kind in measured and one.kind not in lacking]
    return replace(
        device,
        counts=(*stay, *new),
        findings=(*device.findings, *_findings(lacking)),
    )


def _findings(lacking: Mapping[str, str]) -> tuple[Finding, ...]:
    return tuple(
        Finding(
            severity="note",
            where="pixels",
            seen=why,
            remedy="inspect again with these thresholds",
            undecides=tuple(name for name in lacking if lacking[name] == why),
        )
        for why in dict.fromkeys(lacking.values())
    )
