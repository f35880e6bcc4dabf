"""A lot as one table, a row for each device: CSV, ECSV and Parquet."""

import io
import math
from collections.abc import Iterable, Sequence
from csv import writer as csv_writer
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from astropy.table import MaskedColumn, Table

from sensorgrade.atomic import write_whole
from sensorgrade.errors import RequestError
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result import DeviceResult
from sensorgrade.recipe.document import printable

Cell = str | int | float | None

# A spreadsheet takes text that begins like this for a formula and runs it.
FORMULA = ("=", "+", "-", "@", "＝", "＋", "－", "＠")
LONGEST = 32_000  # characters that a spreadsheet keeps of one cell


@dataclass(frozen=True, slots=True)
class Column:
    """One column: ``kind`` is str, int or float, ``unit`` an astropy unit string or ``""``."""

    name: str
    kind: type
    unit: str
    cells: tuple[Cell, ...]


def lot_columns(results: Sequence[DeviceResult], failures: Sequence[Failure]) -> tuple[Column, ...]:
    """Identity, grade and weightiest reason of each device, then every number with its doubt.

    Devices stand in order of serial, failed ones among them with decision ``failed`` and the
    failure as reason. A measurement has two columns, ``name (scope)`` and ``u(name) (scope)``;
    a count has the number found on the whole device. What was not measured is None.
    """
    devices: list[DeviceResult | Failure] = sorted(
        [*results, *failures], key=lambda device: device.serial
    )
    columns = [
        _column("serial", str, (device.serial for device in devices)),
        _column("lot", str, (device.lot for device in devices)),
        _column("wafer", str, (device.wafer for device in devices)),
        _column("die_row", int, (device.die_row for device in devices)),
        _column("die_column", int, (device.die_column for device in devices)),
        _column("grade", str, (_graded(device)[0] for device in devices)),
        _column("decision", str, (_graded(device)[1] for device in devices)),
        _column("reason", str, (_graded(device)[2] for device in devices)),
    ]
    numbers: dict[tuple[str, str, str], dict[int, tuple[float, float]]] = {}
    counts: dict[str, dict[int, int]] = {}
    for row, device in enumerate(devices):
        if isinstance(device, DeviceResult):
            for each in device.measurements:
                key = (each.name, each.scope, each.unit)
                numbers.setdefault(key, {})[row] = (each.value, each.standard_uncertainty)
            for count in device.defects:
                if count.scope == "device":
                    counts.setdefault(count.kind, {})[row] = count.found
    rows = range(len(devices))
    for (name, scope, unit), found in numbers.items():
        place = "" if scope == "device" else f" ({scope})"
        for part, label in enumerate((name, f"u({name})")):
            cells = (found[row][part] if row in found else None for row in rows)
            columns.append(_column(f"{label}{place}", float, cells, unit))
    for kind, tally in counts.items():
        columns.append(_column(kind, int, (tally.get(row) for row in rows)))
    return tuple(columns)


def _graded(device: DeviceResult | Failure) -> tuple[str | None, str, str | None]:
    """Grade, decision and the one reason to show."""
    if isinstance(device, Failure):
        return None, "failed", device.reason
    graded = device.graded
    return graded.grade, graded.decision, graded.reasons[0] if graded.reasons else None


def _column(name: str, kind: type, cells: Iterable[Cell], unit: str = "") -> Column:
    return Column(name, kind, unit, tuple(cells))


def lot_csv(columns: Sequence[Column]) -> str:
    """The table as CSV (RFC 4180, but lines end as on this system's other files, with LF).

    Units stand in the header in brackets. Text that a spreadsheet would run as a formula gets
    an apostrophe before it, which spreadsheets hide.
    """
    text = io.StringIO()
    writer = csv_writer(text, lineterminator="\n")
    writer.writerow(
        safe_text(f"{column.name} [{column.unit}]" if column.unit else column.name)
        for column in columns
    )
    for row in zip(*(column.cells for column in columns), strict=True):
        writer.writerow(safe_text(cell) if isinstance(cell, str) else cell for cell in row)
    return text.getvalue()


def safe_text(text: str) -> str:
    """Text that no spreadsheet takes for a formula, control characters written out."""
    clean = printable(text, LONGEST)
    return f"'{clean}" if clean.lstrip().startswith(FORMULA) else clean


def lot_ecsv(columns: Sequence[Column]) -> str:
    """The table as ECSV, with units and types; astropy's Table reads it."""
    text = io.StringIO()
    Table(
        [
            MaskedColumn(
                data=np.array([_filled(column, cell) for cell in column.cells], dtype=column.kind),
                mask=[cell is None for cell in column.cells],
                name=column.name,
                unit=column.unit or None,
            )
            for column in columns
        ]
    ).write(text, format="ascii.ecsv")
    return text.getvalue()


def _filled(column: Column, cell: Cell) -> Cell:
    """Something of the column's type where nothing is."""
    if cell is not None:
        return cell
    gap: dict[type, Cell] = {str: "", int: 0, float: math.nan}
    return gap[column.kind]


def lot_parquet(columns: Sequence[Column]) -> bytes:
    """The table as Parquet; units are in the fields' metadata under ``unit``.

    Raises
    ------
    RequestError
        pyarrow is not installed.
    """
    try:
        import pyarrow
        import pyarrow.parquet
    except ImportError:
        raise RequestError(
            "Parquet needs pyarrow; install it with: pip install 'sensorgrade[parquet]'"
        ) from None
    kinds = {str: pyarrow.string(), int: pyarrow.int64(), float: pyarrow.float64()}
    schema = pyarrow.schema(
        [
            pyarrow.field(
                column.name,
                kinds[column.kind],
                metadata={"unit": column.unit} if column.unit else None,
            )
            for column in columns
        ]
    )
    table = pyarrow.table([list(column.cells) for column in columns], schema=schema)
    stream = io.BytesIO()
    pyarrow.parquet.write_table(table, stream)
    return stream.getvalue()


def write_tables(
    results: Sequence[DeviceResult],
    failures: Sequence[Failure],
    *,
    csv: Path | None = None,
    ecsv: Path | None = None,
    parquet: Path | None = None,
) -> None:
    """Write the tables asked for, each whole or not at all.

    Raises
    ------
    RequestError
        A file cannot be written, or Parquet is asked for without pyarrow.
    """
    columns = lot_columns(results, failures)
    for path, made in ((csv, lot_csv), (ecsv, lot_ecsv), (parquet, lot_parquet)):
        if path is not None:
            try:
                write_whole(path, made(columns))
            except OSError as error:
                raise RequestError(
                    f"{path}: cannot be written ({error.strerror}); name a file in a folder that"
                    " can be written"
                ) from error
