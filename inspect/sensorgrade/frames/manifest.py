"""The CSV manifest: a row for each frame, told apart by a column with its path."""

import csv
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from sensorgrade.errors import RequestError
from sensorgrade.frames.contents import Value
from sensorgrade.frames.sources import FoundFile, shown
from sensorgrade.measurement import Finding
from sensorgrade.recipe.document import printable

FILE_COLUMNS = ("file", "path", "filename", "name")
LARGEST = 256 << 20  # bytes


class Manifests:
    """The manifests of one source: each counts for its folder and those below."""

    def __init__(self, name: str | None, source: Path) -> None:
        self.name = name
        self.source = source
        self.rows: dict[Path, dict[str, dict[str, Value]] | None] = {}
        self.used: set[tuple[Path, str]] = set()

    def row(self, file: FoundFile) -> dict[str, Value] | None:
        """The row of a file in the nearest manifest above it, None without one.

        Raises
        ------
        RequestError
            There is no manifest up to the source, or it cannot be read.
        """
        if self.name is None:
            return None
        folder = file.path.parent
        while True:
            if folder not in self.rows:
                path = folder / self.name
                self.rows[folder] = manifest_rows(path) if path.is_file() else None
            rows = self.rows[folder]
            if rows is not None:
                below = file.path.relative_to(folder).as_posix()
                self.used.add((folder, below))
                return rows.get(below)
            if folder == self.source:
                raise RequestError(
                    f"{shown(self.source)}: has no manifest {self.name!r}, which frames.manifest"
                    f" names, for {file.label}"
                )
            folder = folder.parent

    def left_over(self) -> Iterator[Finding]:
        """A finding for each row that names no file."""
        for folder, rows in self.rows.items():
            for name in rows or ():
                if (folder, name) not in self.used:
                    yield Finding(
                        "warning",
                        printable(name, 200),
                        "is named in the manifest and is not there",
                        "add the file or remove the row",
                    )


def manifest_rows(path: Path) -> dict[str, dict[str, Value]]:
    """Values by column name (upper case), for each file's path below the manifest's folder.

    The path stands in the column ``file``, ``path``, ``filename`` or ``name``. Empty cells are
    left out.

    Raises
    ------
    RequestError
        Not readable as CSV in UTF-8, without such a column, or with a file named twice.
    """
    try:
        if path.stat().st_size > LARGEST:
            raise RequestError(
                f"{shown(path)}: is larger than {LARGEST} bytes, too large for a manifest"
            )
        with path.open(encoding="utf-8-sig", newline="") as file:
            return _rows(path, csv.reader(file, strict=True))
    except (csv.Error, UnicodeDecodeError) as error:
        raise RequestError(f"{shown(path)}: is not a CSV file in UTF-8 ({error})") from error
    except OSError as error:
        raise RequestError(f"{shown(path)}: cannot be read: {error.strerror}") from error


def _rows(path: Path, reader: Any) -> dict[str, dict[str, Value]]:
    columns = [name.strip() for name in next(reader, [])]
    lower = [name.lower() for name in columns]
    key = next((lower.index(name) for name in FILE_COLUMNS if name in lower), None)
    if key is None:
        raise RequestError(
            f"{shown(path)}:1: has no column {', '.join(FILE_COLUMNS)}; it has"
            f" {printable(', '.join(columns), 200)}"
        )
    rows: dict[str, dict[str, Value]] = {}
    for cells in reader:
        if not any(cell.strip() for cell in cells):
            continue
        if len(cells) != len(columns):
            raise RequestError(
                f"{shown(path)}:{reader.line_num}: has {len(cells)} cells, the first line has"
                f" {len(columns)} columns"
            )
        name = cells[key].strip().replace("\\", "/").removeprefix("./")
        if name in rows:
            raise RequestError(f"{shown(path)}:{reader.line_num}: names {name!r} a second time")
        rows[name] = {
            column.upper(): cell.strip()
            for column, cell in zip(columns, cells, strict=True)
            if cell.strip()
        }
    return rows
