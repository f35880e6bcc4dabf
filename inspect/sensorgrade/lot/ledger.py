"""The ledger of a run: every device's result, where it came from and how long it took.

One process writes it, the one that was started by the user; any number may read meanwhile.
"""

import json
import os
import socket
import sqlite3
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from types import TracebackType
from typing import Any, Literal, Self

from sensorgrade import __version__
from sensorgrade.lot.collector import collector_rests
from sensorgrade.lot.database import open_for_reading, open_for_writing
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.fingerprint import Fingerprint
from sensorgrade.lot.result import DeviceResult
from sensorgrade.lot.rows import insert_details, insert_rows, select_failures, select_results
from sensorgrade.recipe.model import Recipe


@dataclass(frozen=True, slots=True)
class Run:
    """One time the program worked on the folder; ``ending`` is None if it was killed or goes on."""

    started: str
    ended: str | None
    ending: str | None
    version: str
    recipe: str
    recipe_sha256: str
    host: str
    process: int
    jobs: int
    threads: int


@dataclass(frozen=True, slots=True)
class Tally:
    """How many devices the ledger holds of each outcome."""

    accepted: int
    rejected: int
    undecided: int
    ungraded: int
    failed: int

    @property
    def devices(self) -> int:
        """All of them."""
        return self.accepted + self.rejected + self.undecided + self.ungraded + self.failed

    @property
    def exit_status(self) -> Literal[0, 1, 3]:
        """3 when some device failed, 1 when one was rejected or left undecided, else 0."""
        if self.failed:
            return 3
        return 1 if self.rejected or self.undecided else 0


class Ledger:
    """An open ledger; use it in a ``with`` statement, from `write_ledger` or `read_ledger`."""

    def __init__(self, connection: sqlite3.Connection, folder: Path) -> None:
        self.folder = folder
        self._connection = connection
        self._run: int | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self._connection.close()

    def begin(self, recipe: Recipe, *, jobs: int, threads: int) -> None:
        """Start a run; what is recorded from now on belongs to it."""
        added = self._connection.execute(
            "INSERT INTO runs (started, version, recipe, recipe_sha256, recipe_text, host, process,"
            " jobs, threads) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
            (
                _now(),
                __version__,
                recipe.path,
                recipe.sha256,
                recipe.text,
                socket.gethostname(),
                os.getpid(),
                jobs,
                threads,
            ),
        )
        self._run = added.lastrowid

    def end(self, ending: Literal["finished", "stopped"]) -> None:
        """Say how the run that was begun came to its end."""
        self._connection.execute(
            "UPDATE runs SET ended = ?, ending = ? WHERE run = ?", (_now(), ending, self._run)
        )

    def open_folder(self, folder: str, *, names: Sequence[str]) -> tuple[str, ...]:
        """Take a device out before files move into its folder, and note which ones will.

        Returns the names that an earlier inspection left there and that are not among
        ``names``; they no longer belong to the device.
        """
        with self._connection:
            self._connection.execute("BEGIN IMMEDIATE")
            earlier = self._connection.execute(
                "SELECT name FROM files JOIN devices USING (device) WHERE folder = ?"
                " UNION SELECT name FROM moving WHERE folder = ?",
                (folder, folder),
            ).fetchall()
            self._connection.execute("DELETE FROM devices WHERE folder = ?", (folder,))
            self._connection.executemany(
                "INSERT OR IGNORE INTO moving VALUES (?, ?)",
                [(folder, name) for name in {*names, *(name for (name,) in earlier)}],
            )
        return tuple(name for (name,) in earlier if name not in names)

    def record(
        self,
        result: DeviceResult,
        *,
        fingerprint: Fingerprint,
        seconds: float,
        stages: Sequence[tuple[str, float]] = (),
        files: Sequence[str] = (),
    ) -> None:
        """Keep a device's result in place of any earlier one, all of it or nothing.

        ``stages`` are names with seconds taken, ``files`` the names in the device's folder.
        """
        with self._connection:
            self._connection.execute("BEGIN IMMEDIATE")
            device = self._insert_device(
                result,
                fingerprint,
                seconds,
                {
                    "outcome": "inspected",
                    "grade": result.graded.grade,
                    "decision": result.graded.decision,
                    "recipe": result.provenance.recipe,
                    "recipe_sha256": result.provenance.recipe_sha256,
                    "versions": json.dumps(result.provenance.versions),
                    "taken": result.taken,
                },
            )
            insert_details(self._connection, device, result)
            insert_rows(self._connection, "stage_times", device, stages)
            insert_rows(self._connection, "files", device, [(name,) for name in files])

    def record_failure(
        self,
        failure: Failure,
        *,
        recipe: Recipe,
        fingerprint: Fingerprint,
        seconds: float,
        stages: Sequence[tuple[str, float]] = (),
    ) -> None:
        """Keep why a device could not be inspected, in place of any earlier result."""
        with self._connection:
            self._connection.execute("BEGIN IMMEDIATE")
            device = self._insert_device(
                failure,
                fingerprint,
                seconds,
                {
                    "outcome": "failed",
                    "failure": failure.reason,
                    "trace": failure.trace,
                    "recipe": recipe.name,
                    "recipe_sha256": recipe.sha256,
                    "versions": json.dumps({"sensorgrade": __version__}),
                },
            )
            insert_rows(self._connection, "stage_times", device, stages)

    def _insert_device(
        self,
        item: DeviceResult | Failure,
        fingerprint: Fingerprint,
        seconds: float,
        columns: dict[str, str | float | None],
    ) -> int:
        self._connection.execute("DELETE FROM devices WHERE folder = ?", (item.folder,))
        self._connection.execute("DELETE FROM moving WHERE folder = ?", (item.folder,))
        row: dict[str, str | float | None] = {
            "run": self._run,
            "serial": item.serial,
            "folder": item.folder,
            "lot": item.lot,
            "wafer": item.wafer,
            "die_row": item.die_row,
            "die_column": item.die_column,
            "described": fingerprint.described,
            "state": fingerprint.state,
            "finished": _now(),
            "seconds": seconds,
        } | columns
        added = self._connection.execute(
            f"INSERT INTO devices ({', '.join(row)}) VALUES ({', '.join('?' * len(row))})",
            tuple(row.values()),
        )
        return int(added.lastrowid or 0)

    def fingerprint_of(self, folder: str) -> Fingerprint | None:
        """What a device's recorded result depended on; None if it was not inspected."""
        row = self._connection.execute(
            "SELECT described, state FROM devices WHERE folder = ? AND outcome = 'inspected'",
            (folder,),
        ).fetchone()
        return None if row is None else Fingerprint(*row)

    def contents_of(self, folder: str) -> dict[str, str]:
        """SHA-256 of a device's recorded inputs, by label."""
        return dict(
            self._connection.execute(
                "SELECT label, sha256 FROM inputs JOIN devices USING (device) WHERE folder = ?",
                (folder,),
            )
        )

    def files_of(self, folder: str) -> tuple[str, ...]:
        """Names of the files that a device's folder held when it was recorded."""
        rows = self._connection.execute(
            "SELECT name FROM files JOIN devices USING (device) WHERE folder = ? ORDER BY place",
            (folder,),
        )
        return tuple(name for (name,) in rows)

    def restate(self, folder: str, state: str) -> None:
        """Note a device's new file times, after its contents were found unchanged."""
        self._connection.execute("UPDATE devices SET state = ? WHERE folder = ?", (state, folder))

    def results(self, *, in_short: bool = False) -> list[DeviceResult]:
        """Every inspected device in order of serial, as it was recorded.

        ``in_short`` leaves out its inputs and the outcome of each limit, which are half of it.
        """
        with _snapshot(self._connection):
            return select_results(self._connection, in_short=in_short)

    def failures(self) -> list[Failure]:
        """Every device that could not be inspected, in order of serial."""
        return select_failures(self._connection)

    def runs(self) -> list[Run]:
        """Every run, oldest first."""
        return [
            Run(*values)
            for values in self._connection.execute(
                "SELECT started, ended, ending, version, recipe, recipe_sha256, host, process,"
                " jobs, threads FROM runs ORDER BY run"
            )
        ]

    def tally(self, folders: Iterable[str] | None = None) -> Tally:
        """Devices by outcome: all of them, or those whose folders are given."""
        wanted = None if folders is None else set(folders)
        found = Counter(
            outcome
            for folder, outcome in self._connection.execute(
                "SELECT folder, coalesce(decision, outcome) FROM devices"
            )
            if wanted is None or folder in wanted
        )
        return Tally(
            *(found[key] for key in ("accept", "reject", "undecided", "ungraded", "failed"))
        )

    def select(self, question: str) -> Iterator[tuple[Any, ...]]:
        """The rows that answer a question in SQL; the tables are described in schema/."""
        return iter(self._connection.execute(question))


@contextmanager
def _snapshot(connection: sqlite3.Connection) -> Iterator[None]:
    """A read transaction: several SELECTs see one state of the ledger, whoever writes meanwhile."""
    with collector_rests():
        connection.execute("BEGIN")
        try:
            yield
        finally:
            connection.execute("ROLLBACK")


def write_ledger(folder: Path) -> Ledger:
    """The ledger of ``folder`` for the one process that writes; made if need be.

    Raises
    ------
    RequestError
        The folder cannot be written, or its lot.sqlite is no ledger or a newer one.
    """
    return Ledger(open_for_writing(folder), folder)


def read_ledger(folder: Path) -> Ledger:
    """The ledger of ``folder``, read only, also while a run writes it.

    Raises
    ------
    RequestError
        There is no ledger, or not one that this version can read.
    """
    return Ledger(open_for_reading(folder), folder)


def _now() -> str:
    """UTC, ISO 8601, to the millisecond."""
    return datetime.now(UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
