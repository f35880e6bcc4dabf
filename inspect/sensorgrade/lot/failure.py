"""A device that could not be inspected, as the ledger keeps it."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Failure:
    """``reason`` is one sentence; ``trace`` says where the program was, if that was unexpected."""

    serial: str
    folder: str
    lot: str | None
    wafer: str | None
    die_row: int | None
    die_column: int | None
    reason: str
    trace: str | None = None
