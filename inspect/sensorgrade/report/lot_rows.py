"""The table of a lot's devices, as the page's script and as its first rows in print."""

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any
from urllib.parse import quote

import numpy as np

from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result import DeviceResult
from sensorgrade.lot.summary import DeviceLine
from sensorgrade.report.lot_values import LotQuantity
from sensorgrade.report.packing import packed_numbers
from sensorgrade.wording import name_text, unit_text

PRINTED_ROWS = 40  # rows that stand in the page before its script runs, and on paper
MET = "meets every limit of this grade"
STATES = {
    "accept": "accepted",
    "reject": "rejected",
    "undecided": "undecided",
    "ungraded": "not graded",
    "failed": "not inspected",
}


@dataclass(frozen=True, slots=True)
class DeviceRow:
    """One device as text; ``link`` is the address of its page, "" where it has none."""

    serial: str
    link: str
    lot: str
    wafer: str
    die: str
    grade: str
    decision: str
    state: str
    reason: str
    taken: str


def device_lines(results: Sequence[DeviceResult], failures: Sequence[Failure]) -> list[DeviceLine]:
    """Devices that were inspected in the order given, then those that could not be."""
    return [
        DeviceLine(
            serial=one.serial,
            folder=one.folder,
            lot=one.lot,
            wafer=one.wafer,
            die_row=one.die_row,
            die_column=one.die_column,
            grade=one.graded.grade,
            decision=one.graded.decision,
            seconds=0.0,
            reason=one.graded.reasons[0] if one.graded.reasons else None,
        )
        for one in results
    ] + [
        DeviceLine(
            serial=one.serial,
            folder=one.folder,
            lot=one.lot,
            wafer=one.wafer,
            die_row=one.die_row,
            die_column=one.die_column,
            grade=None,
            decision="failed",
            seconds=0.0,
            reason=one.reason,
        )
        for one in failures
    ]


def page_address(line: DeviceLine) -> str:
    """Where the device's page lies, from the lot's page; "" for one that was not inspected."""
    return "" if line.decision == "failed" else f"{quote(line.folder, safe='')}/device.html"


def device_rows(
    lines: Sequence[DeviceLine], results: Sequence[DeviceResult]
) -> tuple[DeviceRow, ...]:
    """Every device as text, in the order of ``lines``."""
    times = [one.taken for one in results] + [None] * (len(lines) - len(results))
    return tuple(
        DeviceRow(
            serial=line.serial,
            link=page_address(line),
            lot=line.lot or "",
            wafer=line.wafer or "",
            die=f"{line.die_row}, {line.die_column}" if _placed(line) else "",
            grade=line.grade or "",
            decision=line.decision,
            state=STATES[line.decision],
            reason=line.reason or (MET if line.decision == "accept" else ""),
            taken="" if taken is None else time_text(taken),
        )
        for line, taken in zip(lines, times, strict=True)
    )


def time_text(taken: float) -> str:
    """A time [s since 1970] to the minute, UTC."""
    return datetime.fromtimestamp(taken, UTC).strftime("%Y-%m-%d %H:%M")


def _placed(line: DeviceLine) -> bool:
    return line.die_row is not None and line.die_column is not None


def script_rows(rows: Sequence[DeviceRow], quantities: Sequence[LotQuantity]) -> dict[str, Any]:
    """The rows in columns, and every number of the inspected ones (they come first) as float32."""
    texts: dict[str, Any] = {
        name: [getattr(row, name) for row in rows] for name in ("serial", "link", "die", "taken")
    }
    for name in ("lot", "wafer", "grade", "decision", "state", "reason"):
        words, index = np.unique([getattr(row, name) for row in rows], return_inverse=True)
        texts[name] = {"words": words.tolist(), "index": index.ravel().tolist()}
    return {
        **texts,
        "quantities": [
            {
                "name": name_text(quantity.name),
                "unit": unit_text(quantity.unit),
                "scope": place.scope,
                "values": packed_numbers(place.values, "<f4"),
            }
            for quantity in quantities
            for place in quantity.places
        ],
    }
