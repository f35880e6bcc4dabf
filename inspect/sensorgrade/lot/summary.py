"""The ledger in short: one line for each device, read without its measurements."""

from dataclasses import dataclass

from sensorgrade.lot.ledger import Ledger


@dataclass(frozen=True, slots=True)
class DeviceLine:
    """``decision`` may be ``failed``; ``reason`` is the weightiest one, or why it failed."""

    serial: str
    folder: str
    lot: str | None
    wafer: str | None
    die_row: int | None
    die_column: int | None
    grade: str | None
    decision: str
    seconds: float
    reason: str | None


def device_lines(ledger: Ledger) -> list[DeviceLine]:
    """Every device in order of serial."""
    return [
        DeviceLine(*row)
        for row in ledger.select(
            "SELECT serial, folder, lot, wafer, die_row, die_column, grade,"
            " coalesce(decision, outcome), seconds, coalesce(failure, reason)"
            " FROM devices LEFT JOIN reasons"
            " ON reasons.device = devices.device AND reasons.place = 0 ORDER BY serial"
        )
    ]
