"""What a run's ledger holds of every device, as grading wants it: no frame is touched."""

import sqlite3
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from sensorgrade.defects.candidates import Candidates
from sensorgrade.defects.defect import DefectCount
from sensorgrade.errors import RequestError
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.lot.candidate_rows import select_candidates
from sensorgrade.lot.database import open_for_reading
from sensorgrade.lot.rows import decoded_names
from sensorgrade.measurement import Finding, Measurement


@dataclass(frozen=True, slots=True)
class StoredLot:
    """The inspected devices in order of serial, with grade and decision as they were.

    ``folders`` are the devices' own, where their files lie; ``failed`` are the serials of devices
    that could not be inspected.
    ``candidates`` are the pixels kept for other thresholds, None where there are none.
    """

    devices: tuple[DeviceReadings, ...]
    folders: tuple[Path, ...]
    grades: tuple[str | None, ...]
    decisions: tuple[str, ...]
    failed: tuple[str, ...]
    candidates: tuple[Candidates | None, ...]


def stored_lot(
    folder: Path, *, names: Iterable[str] | None = None, with_candidates: bool = False
) -> StoredLot:
    """Read the ledger of a run.

    Parameters
    ----------
    folder : Path
        Where the run wrote to.
    names : iterable of str, optional
        Measurements and counts to read; all of them when not given.
    with_candidates : bool
        Whether to read the pixels too that were kept for other thresholds.

    Raises
    ------
    RequestError
        There is no ledger.
    """
    connection = open_for_reading(folder)
    try:
        rows = connection.execute(
            "SELECT device, serial, folder, grade, decision FROM devices"
            " WHERE outcome = 'inspected' ORDER BY serial, device"
        ).fetchall()
        failed = connection.execute(
            "SELECT serial FROM devices WHERE outcome = 'failed' ORDER BY serial"
        ).fetchall()
        measurements = _measurements(connection, names)
        counts = _counts(connection, names)
        findings = _findings(connection)
        candidates = select_candidates(connection) if with_candidates else {}
    finally:
        connection.close()
    return StoredLot(
        devices=tuple(
            DeviceReadings(
                serial,
                tuple(measurements.get(device, ())),
                tuple(counts.get(device, ())),
                tuple(findings.get(device, ())),
            )
            for device, serial, _, _, _ in rows
        ),
        folders=tuple(folder / name for _, _, name, _, _ in rows),
        grades=tuple(grade for _, _, _, grade, _ in rows),
        decisions=tuple(decision for _, _, _, _, decision in rows),
        failed=tuple(serial for (serial,) in failed),
        candidates=tuple(candidates.get(device) for device, *_ in rows),
    )


def last_recipe(folder: Path) -> tuple[str, str]:
    """Path and text of the recipe of a ledger's last run.

    Raises
    ------
    RequestError
        There is no ledger, or it holds no run.
    """
    connection = open_for_reading(folder)
    try:
        run = connection.execute(
            "SELECT recipe, recipe_text FROM runs ORDER BY run DESC LIMIT 1"
        ).fetchone()
    finally:
        connection.close()
    if run is None:
        raise RequestError(f"{folder}: the ledger holds no run yet; inspect devices first")
    path, text = run
    return path, text


def _measurements(
    connection: sqlite3.Connection, names: Iterable[str] | None
) -> dict[int, list[Measurement]]:
    clause, wanted = _among("name", names)
    found: dict[int, list[Measurement]] = {}
    for device, *values in connection.execute(
        "SELECT device, name, scope, value, standard_uncertainty, unit, n FROM measurements"
        f"{clause} ORDER BY device, place",
        wanted,
    ):
        found.setdefault(device, []).append(Measurement(*values))
    return found


def _counts(
    connection: sqlite3.Connection, names: Iterable[str] | None
) -> dict[int, list[DefectCount]]:
    clause, wanted = _among("kind", names)
    found: dict[int, list[DefectCount]] = {}
    for device, *values in connection.execute(
        "SELECT device, kind, scope, found, expected, standard_uncertainty FROM defect_counts"
        f"{clause} ORDER BY device, place",
        wanted,
    ):
        found.setdefault(device, []).append(DefectCount(*values))
    return found


def _findings(connection: sqlite3.Connection) -> dict[int, list[Finding]]:
    """Findings that undecide something; the others do not matter to grading."""
    found: dict[int, list[Finding]] = {}
    for device, severity, where, seen, remedy, undecides in connection.execute(
        'SELECT device, severity, "where", seen, remedy, undecides FROM findings'
        " WHERE undecides <> '[]' ORDER BY device, place"
    ):
        names = decoded_names(undecides)
        found.setdefault(device, []).append(Finding(severity, where, seen, remedy, names))
    return found


def _among(column: str, names: Iterable[str] | None) -> tuple[str, list[str]]:
    """A WHERE clause that keeps the names asked for."""
    if names is None:
        return "", []
    wanted = sorted(set(names))
    return f" WHERE {column} IN ({', '.join('?' * len(wanted))})", wanted
