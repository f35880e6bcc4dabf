"""Counts of pixels and clusters at other thresholds, from what inspections kept: no frame is read.

The pixels go the way they go in an inspection: judged, ranked, joined to clusters, counted. All
devices of a lot go it together.
"""

from collections.abc import Collection, Mapping, Sequence
from dataclasses import dataclass
from itertools import groupby

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.candidates import (
    DARK,
    LOW,
    OFFSET,
    PARTS,
    Candidates,
    Layout,
    outputs_at,
)
from sensorgrade.defects.clusters import ClusterOptions, cluster_numbers
from sensorgrade.defects.defect import DefectCount
from sensorgrade.defects.ranking import CERTAIN, RANK, ranked
from sensorgrade.defects.table import FINDERS
from sensorgrade.defects.thresholds import MOVABLE, NEAR, PixelOptions, judged, significance
from sensorgrade.defects.zones import in_zone
from sensorgrade.recipe.model import Zone
from sensorgrade.wording import number_text

KINDS = (*RANK, "trap column", "cluster")  # by number
TRAP_COLUMN, CLUSTER = len(RANK), len(RANK) + 1
UNITS = ("electron/s", "%", "%", "electron")
TOGETHER = 1000  # devices at once, to bound memory

Integers = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Recount:
    """One device's counts at other thresholds.

    ``lacking`` maps a count that cannot be made without frames to the sentence saying why.
    """

    counts: tuple[DefectCount, ...]
    lacking: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class Entries:
    """What is counted, arrays (K,): ``kind`` by its number in `KINDS`, ``device`` in the group."""

    device: Integers
    kind: Integers
    row: Integers
    column: Integers
    significance: Floats
    probability: Floats
    shared: Floats

    def __getitem__(self, chosen: Integers | NDArray[np.bool_]) -> "Entries":
        return Entries(
            self.device[chosen],
            self.kind[chosen],
            self.row[chosen],
            self.column[chosen],
            self.significance[chosen],
            self.probability[chosen],
            self.shared[chosen],
        )


def recounted(
    candidates: Sequence[Candidates],
    *,
    pixels: PixelOptions,
    clusters: ClusterOptions | None,
    zones: Mapping[str, Zone],
    names: Collection[str],
) -> list[Recount]:
    """The counts in ``names`` of every device at the thresholds of ``pixels``.

    Clusters are joined as ``clusters`` says, None where the recipe does not ask for them. Counts
    equal those of an inspection with these options. ``significance`` and ``noisy`` must be those of
    the inspection: what they left out was not kept.
    """
    kinds = {name: kinds for name, kinds in counted(pixels, clusters).items() if name in names}
    found: list[Recount] = []
    for _, alike in groupby(candidates, key=lambda one: one.layout):
        group = list(alike)
        for start in range(0, len(group), TOGETHER):
            found += _group(group[start : start + TOGETHER], pixels, clusters, zones, kinds)
    return found


def _group(
    group: list[Candidates],
    pixels: PixelOptions,
    clusters: ClusterOptions | None,
    zones: Mapping[str, Zone],
    kinds: Mapping[str, list[int]],
) -> list[Recount]:
    """As `recounted`, for devices of one layout."""
    layout = group[0].layout
    entries = _judged(group, layout, pixels)
    lines = entries.kind == TRAP_COLUMN
    traps, entries = entries[lines], entries[~lines]
    number = (entries.device * layout.shape[0] + entries.row) * layout.shape[1] + entries.column
    entries = entries[ranked(number, entries.kind, entries.probability)]
    parts = [traps, entries]
    if clusters is not None:
        parts = [traps, *_clustered(entries, layout, clusters)]
    counts = _counts(_joined(parts), len(group), layout, zones, kinds)
    return [
        Recount(tuple(of_device), lacking)
        for of_device, lacking in zip(counts, _lacking(group, layout, pixels), strict=True)
    ]


def _judged(group: list[Candidates], layout: Layout, options: PixelOptions) -> Entries:
    """Every pixel with the kinds it may be, and the settled ones."""
    automatic = np.full((len(group), len(PARTS), len(layout.regions)), np.nan)
    typical, scale = np.full_like(automatic, np.nan), np.zeros_like(automatic)
    reaches = np.concatenate([one.reaches for one in group])
    at = _devices([one.reaches for one in group]), reaches["part"], reaches["region"]
    automatic[at], typical[at] = reaches["threshold"], reaches["typical"]
    scale[at] = reaches["scale"]
    pixels = np.concatenate([one.pixels for one in group])
    device = _devices([one.pixels for one in group])
    parts = []
    for part in range(len(PARTS)):
        mine = np.flatnonzero(pixels["part"] == part)
        chosen, of_device = pixels[mine], device[mine]
        value = chosen["value"].astype(np.float64)
        error = chosen["uncertainty"].astype(np.float64)
        place = of_device, part, chosen["region"]
        apart = significance(part, value, error)
        kinds = judged(
            part,
            value,
            error,
            options,
            automatic=automatic[place],
            typical=typical[place],
            scale=scale[place],
        )
        parts += [
            Entries(
                of_device[one.places],
                np.full(len(one.places), RANK.index(one.kind)),
                chosen["row"][one.places].astype(np.int64),
                chosen["column"][one.places].astype(np.int64),
                apart[one.places],
                one.probability,
                one.shared,
            )
            for one in kinds
        ]
    settled = np.concatenate([one.settled for one in group])
    parts.append(
        Entries(
            _devices([one.settled for one in group]),
            settled["kind"].astype(np.int64),
            settled["row"].astype(np.int64),
            settled["column"].astype(np.int64),
            settled["significance"],
            settled["probability"],
            np.zeros(len(settled)),
        )
    )
    return _joined(parts)


def _clustered(entries: Entries, layout: Layout, options: ClusterOptions) -> list[Entries]:
    """Entries that are in no cluster, and one for each cluster at its worst pixel."""
    sure = np.flatnonzero(entries.probability >= CERTAIN)
    members = entries[sure]
    # Devices lie above one another with room between them, so that no cluster joins two.
    apart = layout.shape[0] + options.distance + 1
    number = cluster_numbers(members.device * apart + members.row, members.column, options)
    inside = number >= 0
    alone = np.ones(len(entries.device), np.bool_)
    alone[sure[inside]] = False
    members, number = members[inside], number[inside]
    order = np.lexsort((-members.significance, number))
    first = np.searchsorted(number[order], np.arange(number.max(initial=-1) + 1))
    worst = members[order[first]]
    least = (
        np.minimum.reduceat(members.probability[order], first)
        if len(first)
        else np.empty(0, np.float64)
    )
    kind = np.full(len(first), CLUSTER)
    clusters = Entries(
        worst.device, kind, worst.row, worst.column, worst.significance, least, np.zeros(len(first))
    )
    return [entries[alone], clusters]


def _counts(
    entries: Entries,
    devices: int,
    layout: Layout,
    zones: Mapping[str, Zone],
    kinds: Mapping[str, list[int]],
) -> list[list[DefectCount]]:
    """Counts for each device, its outputs and zones."""
    scopes: list[tuple[str, NDArray[np.bool_] | None]] = [("device", None)]
    rows, columns = entries.row.astype(np.int32), entries.column.astype(np.int32)
    output = outputs_at(layout, rows, columns)
    number_of = len(layout.outputs)
    if number_of > 1:
        scopes += [
            (f"output {name}", output == place) for place, (name, _) in enumerate(layout.outputs)
        ]
    scopes += [
        (f"zone {name}", in_zone(zone, rows, columns, layout.shape)) for name, zone in zones.items()
    ]
    sure = entries.probability >= CERTAIN
    doubt = entries.probability * (1.0 - entries.probability)
    found: list[list[DefectCount]] = [[] for _ in range(devices)]
    for name, of_name in kinds.items():
        mine = np.isin(entries.kind, of_name)
        for scope, inside in scopes:
            here = np.flatnonzero(mine if inside is None else mine & inside)
            device = entries.device[here]
            number = np.bincount(device[sure[here]], minlength=devices).tolist()
            expected = np.bincount(device, entries.probability[here], devices).tolist()
            variance = np.bincount(device, doubt[here], devices)
            place = device * number_of + output[here]
            together = np.bincount(place, entries.shared[here], devices * number_of)
            variance += np.square(together.reshape(devices, number_of)).sum(axis=1)
            for of_device, *count in zip(
                found, number, expected, np.sqrt(variance).tolist(), strict=True
            ):
                of_device.append(DefectCount(name, scope, *count))
    return found


def counted(pixels: PixelOptions, clusters: ClusterOptions | None) -> dict[str, list[int]]:
    """Names of the counts that thresholds of pixels can change, with the kinds they count."""
    names = {
        count.name: [KINDS.index(kind) for kind in count.kinds]
        for finder in FINDERS
        for count in finder.counts
        if set(count.kinds) <= set(KINDS)
    }
    if pixels.warm is None:
        del names["warm_pixels"]
    if clusters is None:
        del names["clusters"]
    return names


def _lacking(
    group: list[Candidates], layout: Layout, options: PixelOptions
) -> list[dict[str, str]]:
    """For each device the counts that would need pixels that were not kept."""
    reaches = np.concatenate([one.reaches for one in group])
    device = _devices([one.reaches for one in group])
    found: list[dict[str, str]] = [{} for _ in group]
    for part, kinds in MOVABLE.items():
        mine = np.flatnonzero(reaches["part"] == part)
        of_part = reaches[mine]
        sign = -1.0 if part == LOW else 1.0
        for kind in kinds:
            stated = getattr(options, kind)
            if stated is None and kind not in ("hot", "offset"):
                continue
            threshold = of_part["threshold"] if stated is None else np.full(len(mine), stated)
            nearest = sign * threshold - NEAR * of_part["typical"]
            usual = 0.0 if part in (DARK, OFFSET) else 100.0 * sign
            short = np.maximum(nearest, usual) < sign * of_part["reach"]
            for place in np.flatnonzero(short):
                one = of_part[place]
                scope = layout.regions[one["region"]]
                where = "" if scope == "device" else f" of {scope}"
                way = "up" if part == LOW else "down"
                wanted = sign * max(nearest[place], usual)
                sentence = (
                    f"{kind} from {number_text(threshold[place])} {UNITS[part]} on needs the"
                    f" frames: it asks for pixels{where} {way} to {number_text(wanted)}"
                    f" {UNITS[part]}, they were kept {way} to {number_text(one['reach'])}"
                )
                lacking = found[device[mine[place]]]
                lacking.setdefault(f"{kind}_pixels", sentence)
                lacking.setdefault("clusters", sentence)
    return found


def _joined(parts: list[Entries]) -> Entries:
    return Entries(
        *(
            np.concatenate([getattr(one, name) for one in parts])
            for name in ("device", "kind", "row", "column", "significance", "probability", "shared")
        )
    )


def _devices(arrays: list[NDArray[np.void]]) -> Integers:
    """The device's number for each row of all arrays in turn."""
    return np.repeat(np.arange(len(arrays)), [len(one) for one in arrays])
