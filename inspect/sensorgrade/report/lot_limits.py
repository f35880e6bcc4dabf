"""What each limit costs a lot, and what yields would be if it stood elsewhere."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from sensorgrade.grading.held import DeviceReadings
from sensorgrade.grading.what_if import Tightest, costs, tightest
from sensorgrade.lot.result import DeviceResult
from sensorgrade.recipe.model import Limit, Recipe
from sensorgrade.report.packing import packed_numbers
from sensorgrade.wording import name_text, number_text, unit_text


@dataclass(frozen=True, slots=True)
class CostRow:
    """One limit's cost; ``missed_share`` and ``alone_share`` are in % of the devices inspected."""

    name: str
    limit: str
    missed: int
    alone: int
    undecidable: int
    missed_share: float
    alone_share: float


@dataclass(frozen=True, slots=True)
class GradeCosts:
    """The limits of one grade that cost devices, the dearest first, and the number that do not."""

    grade: str
    rows: tuple[CostRow, ...]
    free: int


def tightest_bounds(results: Sequence[DeviceResult], recipe: Recipe) -> tuple[Tightest, ...]:
    """For each grade of the recipe, the tightest bounds that would accept each device."""
    devices = [
        DeviceReadings(one.serial, one.measurements, one.defects, one.findings) for one in results
    ]
    return tuple(tightest(devices, level=level, recipe=recipe) for level in recipe.grades)


def grade_costs(bounds: Sequence[Tightest], recipe: Recipe) -> tuple[GradeCosts, ...]:
    """The ranking of reasons, grade by grade."""
    made = []
    for lot, level in zip(bounds, recipe.grades, strict=True):
        devices = max(len(lot.serials), 1)
        found = costs(lot)
        rows = tuple(
            CostRow(
                name=limit_place(one.limit),
                limit=limit_text(one.limit),
                missed=one.missed,
                alone=one.alone,
                undecidable=one.undecidable,
                missed_share=round(100 * one.missed / devices, 2),
                alone_share=round(100 * one.alone / devices, 2),
            )
            for one in sorted(found, key=lambda cost: (-cost.missed, -cost.alone))
            if one.missed
        )
        made.append(GradeCosts(level.name, rows, len(found) - len(rows)))
    return tuple(made)


def limit_place(limit: Limit) -> str:
    """The quantity and where the limit holds: ``read noise, worst``."""
    parts = [name_text(limit.name)]
    if limit.scope:
        parts.append(limit.scope)
    if limit.zone:
        parts.append(f"zone {limit.zone}")
    if limit.of != "every":
        parts.append(limit.of)
    return ", ".join(parts)


def limit_text(limit: Limit) -> str:
    """``≤ 5 electron at −100 °C``."""
    text = "≤" if limit.relation == "<=" else "≥"
    text = f"{text} {number_text(limit.bound, 6)} {unit_text(limit.unit)}".rstrip()
    if limit.temperature is not None:
        text += f" at {number_text(limit.temperature)} °C"
    return text


def what_if_data(bounds: Sequence[Tightest], recipe: Recipe) -> dict[str, Any]:
    """Bounds (C, D) and, for each grade, its limits with the row of ``bounds`` they look at.

    Grades that differ in their bounds only share a row.
    """
    rows: list[str] = []
    known: dict[tuple[object, ...], int] = {}
    grades = []
    for lot, level in zip(bounds, recipe.grades, strict=True):
        limits = []
        for index, limit in enumerate(level.limits):
            asked = (
                limit.name,
                limit.relation,
                limit.of,
                limit.scope,
                limit.zone,
                limit.temperature,
                limit.rule,
            )
            column = lot.bounds[:, index]
            if asked not in known:
                known[asked] = len(rows)
                rows.append(packed_numbers(column, "<f8"))
            finite = column[np.isfinite(column)]
            limits.append(
                {
                    "name": limit_place(limit),
                    "upward": limit.relation == "<=",
                    "bound": limit.bound,
                    "unit": unit_text(limit.unit),
                    "held": "" if limit.temperature is None else f"{limit.temperature:g} °C",
                    "row": known[asked],
                    "whole": bool(finite.size) and not (finite % 1).any() and not limit.unit,
                }
            )
        grades.append({"name": level.name, "limits": limits})
    return {
        "grades": grades,
        "bounds": rows,
        "devices": len(bounds[0].serials) if bounds else 0,
    }
