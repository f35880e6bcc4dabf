"""The defect table as the page carries it: the weightiest rows, in columns."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.defect import Defects
from sensorgrade.report.marks import KindMark, kind_marks
from sensorgrade.wording import doubt_text, name_text, number_text

MOST_ROWS = 3000
PRINTED_ROWS = 30  # rows that stand in the page before its script runs, and on paper


@dataclass(frozen=True, slots=True)
class PrintedDefect:
    """One row as text."""

    kind: str
    x: int
    y: int
    extent: str
    value: str
    significance: str
    probability: str
    output: str
    zone: str


@dataclass(frozen=True, slots=True)
class DefectRows:
    """``columns`` go to the script; ``total`` counts all defects, also those left out."""

    total: int
    kinds: tuple[KindMark, ...]
    columns: dict[str, Any]
    printed: tuple[PrintedDefect, ...]
    rows: NDArray[np.int32]
    column_places: NDArray[np.int32]


def defect_rows(defects: Defects) -> DefectRows:
    """The MOST_ROWS weightiest defects, every kind getting its share."""
    table = defects.table
    chosen = table[_order(table)[:MOST_ROWS]]
    names, index = np.unique(chosen["kind"], return_inverse=True)
    counts = {str(k): int(n) for k, n in zip(*np.unique(table["kind"], return_counts=True))}  # noqa: B905
    units, unit_index = np.unique(chosen["unit"], return_inverse=True)
    outputs, output_index = np.unique(chosen["output"], return_inverse=True)
    zones, zone_index = np.unique(chosen["zone"], return_inverse=True)
    columns: dict[str, Any] = {
        "kind": index.tolist(),
        "unit": unit_index.tolist(),
        "units": units.tolist(),
        "output": output_index.tolist(),
        "outputs": outputs.tolist(),
        "zone": zone_index.tolist(),
        "zones": zones.tolist(),
    }
    for name in ("row", "column", "row_start", "row_stop", "column_start", "column_stop", "pixels"):
        columns[name] = chosen[name].tolist()
    for name in ("value", "uncertainty", "significance", "probability"):
        columns[name] = [_short(value) for value in chosen[name].tolist()]
    return DefectRows(
        total=len(table),
        kinds=kind_marks([str(name) for name in names], counts),
        columns=columns,
        printed=tuple(_printed(row) for row in chosen[:PRINTED_ROWS]),
        rows=chosen["row"],
        column_places=chosen["column"],
    )


def _order(table: NDArray[np.void]) -> NDArray[np.intp]:
    """By rank within the own kind, then by significance: a rare kind is not crowded out."""
    significance = np.nan_to_num(np.abs(table["significance"]), posinf=1e300)
    by_weight = np.lexsort((table["column"], table["row"], -significance))
    _, kind = np.unique(table["kind"], return_inverse=True)
    rank = np.empty(len(table), dtype=np.int64)
    for one in range(int(kind.max(initial=-1)) + 1):
        members = by_weight[kind[by_weight] == one]
        rank[members] = np.arange(len(members))
    return np.lexsort((table["column"], table["row"], -significance, rank))


def _short(value: float) -> float | None:
    """Six significant digits; None for what JSON cannot hold."""
    return float(f"{value:.6g}") if np.isfinite(value) else None


def _printed(row: np.void) -> PrintedDefect:
    height = int(row["row_stop"] - row["row_start"])
    width = int(row["column_stop"] - row["column_start"])
    return PrintedDefect(
        kind=name_text(str(row["kind"])),
        x=int(row["column"]) + 1,
        y=int(row["row"]) + 1,
        extent="1 pixel" if height == width == 1 else f"{width} × {height}",
        value=doubt_text(float(row["value"]), float(row["uncertainty"]), str(row["unit"])),
        significance=number_text(float(row["significance"]), 3),
        probability=f"{100 * float(row['probability']):.3g} %",
        output=str(row["output"]),
        zone=str(row["zone"]),
    )
