"""Results to rows of the ledger and back; the tables are in schema/."""

import json
import sqlite3
import sys
from collections import defaultdict
from collections.abc import Callable, Iterable, Sequence
from dataclasses import fields
from functools import cache
from typing import Any, TypeVar

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.decision import Graded, LimitResult
from sensorgrade.lot.candidate_rows import insert_candidates
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result import DeviceResult, InputFile, Provenance
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Limit

T = TypeVar("T")

LIMIT_COLUMNS = tuple(field.name for field in fields(Limit))


def insert_details(connection: sqlite3.Connection, device: int, result: DeviceResult) -> None:
    """Everything of a result but the device's own row."""
    provenance, graded = result.provenance, result.graded
    rows: dict[str, Iterable[tuple[Any, ...]]] = {
        "inputs": ((file.label, file.bytes, file.sha256) for file in provenance.inputs),
        "measurements": (
            (each.name, each.scope, each.value, each.standard_uncertainty, each.unit, each.n)
            for each in result.measurements
        ),
        "defect_counts": (
            (count.kind, count.scope, count.found, count.expected, count.standard_uncertainty)
            for count in result.defects
        ),
        "limit_results": (
            (
                each.grade,
                _limit_number(connection, each.limit),
                each.scope,
                each.value,
                each.standard_uncertainty,
                each.margin,
                each.margin_in_uncertainties,
                each.probability,
                each.outcome,
                each.reason,
            )
            for each in graded.limits
        ),
        "reasons": ((reason,) for reason in graded.reasons),
        "findings": (
            (each.severity, each.where, each.seen, each.remedy, json.dumps(each.undecides))
            for each in result.findings
        ),
        "not_measured": iter(result.not_measured.items()),
    }
    for table, entries in rows.items():
        insert_rows(connection, table, device, list(entries))
    if result.candidates is not None:
        insert_candidates(connection, device, result.candidates)


def insert_rows(
    connection: sqlite3.Connection, table: str, device: int, entries: Sequence[tuple[Any, ...]]
) -> None:
    """Rows of one device into one of the tables that have (device, place) as key."""
    if entries:
        marks = ", ".join("?" * (2 + len(entries[0])))
        connection.executemany(
            f"INSERT INTO {table} VALUES ({marks})",
            [(device, place, *entry) for place, entry in enumerate(entries)],
        )


def _limit_number(connection: sqlite3.Connection, limit: Limit) -> int:
    """The number of the limit's row, made when it is new."""
    values = tuple(getattr(limit, column) for column in LIMIT_COLUMNS)
    same = " AND ".join(f"{column} IS ?" for column in LIMIT_COLUMNS)
    row = connection.execute(f'SELECT "limit" FROM limits WHERE {same}', values).fetchone()
    if row is None:
        marks = ", ".join("?" * len(values))
        added = connection.execute(
            f"INSERT INTO limits ({', '.join(LIMIT_COLUMNS)}) VALUES ({marks})", values
        )
        return int(added.lastrowid or 0)
    return int(row[0])


def select_results(connection: sqlite3.Connection, *, in_short: bool) -> list[DeviceResult]:
    """Every inspected device in order of serial, as it was recorded; see `Ledger.results`."""
    limits = {
        number: Limit(*values)
        for number, *values in connection.execute(
            f'SELECT "limit", {", ".join(LIMIT_COLUMNS)} FROM limits'
        )
    }
    inputs: defaultdict[int, list[InputFile]] = defaultdict(list)
    held: defaultdict[int, list[LimitResult]] = defaultdict(list)
    if not in_short:
        inputs = _by_device(connection, "inputs", InputFile)
        held = _by_device(
            connection,
            "limit_results",
            lambda grade, limit, scope, *rest: LimitResult(
                sys.intern(grade), limits[limit], sys.intern(scope), *rest
            ),
        )
    measurements = _by_device(
        connection,
        "measurements",
        lambda name, scope, value, uncertainty, unit, n: Measurement(
            sys.intern(name), sys.intern(scope), value, uncertainty, sys.intern(unit), n
        ),
    )
    counts = _by_device(
        connection,
        "defect_counts",
        lambda kind, scope, *numbers: DefectCount(sys.intern(kind), sys.intern(scope), *numbers),
    )
    reasons = _by_device(connection, "reasons", lambda reason: reason)
    findings = _by_device(
        connection,
        "findings",
        lambda severity, where, seen, remedy, undecides: Finding(
            severity, where, seen, remedy, decoded_names(undecides)
        ),
    )
    not_measured = _by_device(connection, "not_measured", lambda stage, lacked: (stage, lacked))
    return [
        DeviceResult(
            serial=serial,
            folder=folder,
            lot=lot,
            wafer=wafer,
            die_row=die_row,
            die_column=die_column,
            findings=tuple(findings[device]),
            measurements=tuple(measurements[device]),
            defects=tuple(counts[device]),
            not_measured=dict(not_measured[device]),
            graded=Graded(grade, decision, tuple(reasons[device]), tuple(held[device])),
            provenance=Provenance(
                recipe, recipe_sha256, tuple(inputs[device]), json.loads(versions)
            ),
            taken=taken,
        )
        for (
            device,
            serial,
            folder,
            lot,
            wafer,
            die_row,
            die_column,
            taken,
            grade,
            decision,
            recipe,
            recipe_sha256,
            versions,
        ) in connection.execute(
            "SELECT device, serial, folder, lot, wafer, die_row, die_column, taken, grade,"
            " decision, recipe, recipe_sha256, versions FROM devices"
            " WHERE outcome = 'inspected' ORDER BY serial"
        )
    ]


@cache
def decoded_names(text: str) -> tuple[str, ...]:
    """The names in one cell; a lot has few sets of them."""
    return tuple(json.loads(text))


def select_failures(connection: sqlite3.Connection) -> list[Failure]:
    """Every device that could not be inspected, in order of serial."""
    return [
        Failure(*values)
        for values in connection.execute(
            "SELECT serial, folder, lot, wafer, die_row, die_column, failure, trace FROM devices"
            " WHERE outcome = 'failed' ORDER BY serial"
        )
    ]


def _by_device(
    connection: sqlite3.Connection, table: str, make: Callable[..., T]
) -> defaultdict[int, list[T]]:
    """What a table says, device by device, in the order in which it was said."""
    found: defaultdict[int, list[T]] = defaultdict(list)
    for device, _, *values in connection.execute(f"SELECT * FROM {table} ORDER BY device, place"):
        found[device].append(make(*values))
    return found
