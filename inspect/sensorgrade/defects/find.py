"""All defects of a device: what the finders found, joined so that nothing counts twice."""

import os
from collections.abc import Iterable, Mapping
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.bits import BY_NAME
from sensorgrade.defects.candidates import CANDIDATE, REACH, SETTLED, Candidates, Layout
from sensorgrade.defects.clusters import ClusterOptions, groups
from sensorgrade.defects.defect import DEFECT, DefectCount, Defects
from sensorgrade.defects.ranking import CERTAIN, RANK, ranked
from sensorgrade.defects.stage import NOT_ASKED, POINT, CountName, Found, Line
from sensorgrade.defects.table import FINDERS
from sensorgrade.defects.thresholds import MOVABLE
from sensorgrade.defects.zones import in_zone, zone_names
from sensorgrade.frames.geometry import Geometry
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Zone

MOVING = tuple(kind for kinds in MOVABLE.values() for kind in kinds)
TRAP_COLUMN = "trap column"


def find_defects(
    inputs: Inputs,
    options: Mapping[str, Any],
    zones: Mapping[str, Zone],
    *,
    threads: int | None = None,
) -> Defects:
    """Run the finders that ``options`` names and join what they found.

    A pixel counts once, in the largest class it belongs to: line, then cluster, then point. The
    mask has every bit that applies.

    Parameters
    ----------
    inputs : Inputs
        With the results of the measuring stages.
    options : mapping
        Finder's name to its options, only those that are to run.
    zones : mapping
        Zones by name; counts are also given for each of them.
    threads : int, optional
        Cores to use, all by default; the result does not depend on it.
    """
    geometry = inputs.reduced.geometry
    mask = np.zeros(geometry.shape, np.uint16)
    enabled = [finder for finder in FINDERS if finder.name in options]
    with ThreadPoolExecutor(threads or os.cpu_count()) as pool:
        sought = {one.name: pool.submit(one.find, inputs, options[one.name]) for one in enabled}
    found = {name: one.result() for name, one in sought.items()}
    lines = [line for one in found.values() for line in one.lines]
    points = np.concatenate([one.points for one in found.values()] or [np.empty(0, POINT)])
    for line in lines:
        bits = BY_NAME["column" if line.kind.endswith("column") else "row"].value
        if line.kind.startswith("trap"):
            bits |= BY_NAME["trap"].value
        mask[line.row_start : line.row_stop, line.column_start : line.column_stop] |= bits
    on_line = mask[points["row"], points["column"]] > 0
    for kind in np.unique(points["kind"]):
        sure = points[(points["kind"] == kind) & (points["probability"] >= CERTAIN)]
        mask[sure["row"], sure["column"]] |= BY_NAME[str(kind)].value
    points = points[~on_line]
    candidates = _candidates(list(found.values()), points, lines, mask, geometry)
    numbers = _pixel_numbers(points, geometry.shape)
    points = points[ranked(numbers, _ranks(points), points["probability"])]
    rows = [_line_row(line) for line in lines]
    if "clusters" in options:
        cluster_rows, points = _clustered(points, options["clusters"], mask)
        rows.extend(cluster_rows)
    rows.extend(_point_row(point) for point in points[points["probability"] >= CERTAIN])
    masters = inputs.masters
    for master in (masters.bias, masters.dark, masters.flat):
        if master is not None:
            mask[master.count == 0] |= BY_NAME["no data"].value
    table = np.array(rows, DEFECT) if rows else np.empty(0, DEFECT)
    table["output"] = _outputs(geometry, table["row"], table["column"])
    table["zone"] = zone_names(zones, table["row"], table["column"], geometry.shape)
    table = table[np.lexsort((table["column"], table["row"], table["kind"]))]
    lacking = {name: why for one in found.values() for name, why in one.lacking.items()}
    names = [count for finder in enabled for count in finder.counts if count.name not in lacking]
    return Defects(
        table=table,
        mask=mask,
        counts=tuple(_counts(names, table, points, geometry, zones)),
        findings=tuple(_findings(lacking)),
        candidates=candidates,
    )


def _pixel_numbers(points: NDArray[np.void], shape: tuple[int, int]) -> NDArray[np.int64]:
    number: NDArray[np.int64] = points["row"].astype(np.int64) * shape[1] + points["column"]
    return number


def _ranks(points: NDArray[np.void]) -> NDArray[np.int64]:
    kinds, at = np.unique(points["kind"], return_inverse=True)
    return np.array([RANK.index(str(kind)) for kind in kinds], np.int64)[at]


def _candidates(
    found: Iterable[Found],
    points: NDArray[np.void],
    lines: Iterable[Line],
    mask: NDArray[np.uint16],
    geometry: Geometry,
) -> Candidates:
    """What the finders keep for other thresholds, without the pixels of bad lines.

    ``points`` are all that are on no line, ``mask`` has the lines' bits.
    """
    of_lines = BY_NAME["column"].value | BY_NAME["row"].value
    pixels = np.concatenate([one.candidates for one in found] or [np.empty(0, CANDIDATE)])
    others = points[~np.isin(points["kind"], MOVING)]
    traps = [line for line in lines if line.kind == TRAP_COLUMN]
    settled = np.zeros(len(others) + len(traps), SETTLED)
    here = settled[: len(others)]
    here["kind"] = _ranks(others)
    for name in ("row", "column", "significance", "probability"):
        here[name] = others[name]
    settled[len(others) :] = [
        (len(RANK), line.row_start, line.column_start, line.significance, line.probability)
        for line in traps
    ]
    return Candidates(
        layout=Layout(
            geometry.shape,
            tuple((output.name, output.place) for output in geometry.outputs),
            tuple(region.scope for region in geometry.regions),
        ),
        pixels=pixels[mask[pixels["row"], pixels["column"]] & of_lines == 0],
        reaches=np.concatenate([one.reaches for one in found] or [np.empty(0, REACH)]),
        settled=settled,
    )


def _clustered(
    points: NDArray[np.void], options: ClusterOptions, mask: NDArray[np.uint16]
) -> tuple[list[tuple[Any, ...]], NDArray[np.void]]:
    """Rows of the clusters, and the points that are in none."""
    sure = np.flatnonzero(points["probability"] >= CERTAIN)
    rows = []
    taken = np.zeros(len(points), np.bool_)
    for group in groups(points["row"][sure], points["column"][sure], options):
        members = points[sure[group]]
        taken[sure[group]] = True
        mask[members["row"], members["column"]] |= BY_NAME["cluster"].value
        worst = members[np.argmax(members["significance"])]
        rows.append(
            (
                "cluster",
                worst["row"],
                worst["column"],
                members["row"].min(),
                members["row"].max() + 1,
                members["column"].min(),
                members["column"].max() + 1,
                len(members),
                worst["value"],
                worst["uncertainty"],
                worst["unit"],
                worst["significance"],
                float(members["probability"].min()),
                "",
                "",
            )
        )
    return rows, points[~taken]


def _line_row(line: Line) -> tuple[Any, ...]:
    return (
        line.kind,
        line.row_start,
        line.column_start,
        line.row_start,
        line.row_stop,
        line.column_start,
        line.column_stop,
        (line.row_stop - line.row_start) * (line.column_stop - line.column_start),
        line.value,
        line.uncertainty,
        line.unit,
        line.significance,
        line.probability,
        "",
        "",
    )


def _point_row(point: np.void) -> tuple[Any, ...]:
    row, column = int(point["row"]), int(point["column"])
    return (
        point["kind"],
        row,
        column,
        row,
        row + 1,
        column,
        column + 1,
        1,
        point["value"],
        point["uncertainty"],
        point["unit"],
        point["significance"],
        point["probability"],
        "",
        "",
    )


def _outputs(
    geometry: Geometry, rows: NDArray[np.int32], columns: NDArray[np.int32]
) -> NDArray[np.str_]:
    """Name of the output that reads each pixel."""
    names = np.zeros(len(rows), "U32")
    for output in geometry.outputs:
        place = output.place
        inside = (rows >= place.row_start) & (rows < place.row_stop)
        inside &= (columns >= place.column_start) & (columns < place.column_stop)
        names[inside] = output.name
    return names


def _counts(
    names: list[CountName],
    table: NDArray[np.void],
    points: NDArray[np.void],
    geometry: Geometry,
    zones: Mapping[str, Zone],
) -> list[DefectCount]:
    """Counts for the device, each output and each zone.

    ``points`` are those in no line and no cluster; candidates below one half are among them
    although they are not in the table. The expected number is the sum of the probabilities. Its
    variance is the sum of p (1 - p), and for each output the square of what a standard uncertainty
    of its gain, which moves all its pixels together, changes in that sum.
    """
    large = table[~np.isin(table["kind"], RANK)]
    names_of = [output.name for output in geometry.outputs]
    output = _outputs(geometry, points["row"], points["column"])
    parts: list[tuple[str, NDArray[np.bool_], NDArray[np.bool_]]] = [
        ("device", np.ones(len(large), np.bool_), np.ones(len(points), np.bool_))
    ]
    if len(names_of) > 1:
        parts += [(f"output {one}", large["output"] == one, output == one) for one in names_of]
    parts += [
        (
            f"zone {name}",
            in_zone(zone, large["row"], large["column"], geometry.shape),
            in_zone(zone, points["row"], points["column"], geometry.shape),
        )
        for name, zone in zones.items()
    ]
    counts = []
    for count in names:
        of_large = np.isin(large["kind"], count.kinds)
        of_points = np.isin(points["kind"], count.kinds)
        for scope, large_here, here in parts:
            mine = large[of_large & large_here]
            _, first = np.unique(_place(mine), return_index=True)
            single = points[of_points & here]
            chance = np.concatenate([mine["probability"][first], single["probability"]])
            together = [single["shared"][output[of_points & here] == one].sum() for one in names_of]
            variance = (chance * (1 - chance)).sum() + np.square(together).sum()
            counts.append(
                DefectCount(
                    kind=count.name,
                    scope=scope,
                    found=len(first) + int(np.sum(single["probability"] >= CERTAIN)),
                    expected=float(chance.sum()),
                    standard_uncertainty=float(np.sqrt(variance)),
                )
            )
    return counts


def _place(rows: NDArray[np.void]) -> NDArray[np.void]:
    """What is counted once: a column or row of an output however many bad stretches it has."""
    place = rows[["output", "row", "column"]].copy()
    place["row"][np.char.endswith(rows["kind"], " column")] = 0
    place["column"][np.char.endswith(rows["kind"], " row")] = 0
    return place


def _findings(lacking: dict[str, str]) -> list[Finding]:
    """One finding for each sentence, with all the counts that it undecides."""
    return [
        Finding(
            severity="note",
            where="defects",
            seen=f"not counted: {', '.join(name for name in lacking if lacking[name] == sentence)}"
            f" ({sentence})",
            remedy="take the frames it needs, or leave the stage out of the recipe",
            undecides=tuple(name for name in lacking if lacking[name] == sentence),
        )
        for sentence in dict.fromkeys(lacking.values())
        if sentence != NOT_ASKED
    ]
