"""Opening the ledger's SQLite file: its form, its version, and what to say when it is not one."""

import sqlite3
from pathlib import Path

from sensorgrade.errors import RequestError

NAME = "lot.sqlite"
SCHEMA = Path(__file__).with_name("schema")
VERSION = 2  # the newest script in schema/; script N takes a ledger from version N - 1 to N
BUSY = 30.0  # s to wait for another connection


def open_for_writing(folder: Path) -> sqlite3.Connection:
    """The ledger of ``folder``, made or brought up to date if need be.

    A commit is on the disk when it returns (WAL, synchronous FULL), so that a power cut takes
    away the device at work and nothing before it.

    Raises
    ------
    RequestError
        The folder cannot be written, or the file is no ledger or a newer one.
    """
    path = folder / NAME
    try:
        connection = sqlite3.connect(path, timeout=BUSY, isolation_level=None)
    except sqlite3.Error as error:
        raise RequestError(f"{path}: cannot be opened for writing ({error})") from error
    try:
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute("PRAGMA synchronous = FULL")
        connection.execute("PRAGMA foreign_keys = ON")
        for version in range(_version(connection, path) + 1, VERSION + 1):
            script = (SCHEMA / f"{version}.sql").read_text(encoding="utf-8")
            connection.executescript(
                f"BEGIN IMMEDIATE;\n{script}\nPRAGMA user_version = {version};\nCOMMIT;"
            )
    except sqlite3.Error as error:
        connection.close()
        raise RequestError(
            f"{path}: cannot be used as a ledger ({error}); check the disk and the permissions,"
            " or give another --out"
        ) from error
    except RequestError:
        connection.close()
        raise
    return connection


def open_for_reading(folder: Path) -> sqlite3.Connection:
    """The ledger of ``folder``, read only; a run may be writing it meanwhile.

    Raises
    ------
    RequestError
        There is no ledger, or not one that this version can read.
    """
    path = folder / NAME
    if not path.is_file():
        raise RequestError(f"{folder}: no {NAME} here; give the folder that a run wrote to")
    address = path.resolve().as_uri()
    try:
        # A connection that may not write leaves the files behind that WAL needs beside the ledger;
        # this one could and takes them away, but is told not to change anything.
        connection = _probed(f"{address}?mode=rw")
    except sqlite3.OperationalError:
        # Where the folder is read-only those files cannot be made, and nobody else writes.
        try:
            connection = _probed(f"{address}?mode=ro&immutable=1")
        except sqlite3.Error as error:
            raise RequestError(f"{path}: cannot be read as a ledger ({error})") from error
    except sqlite3.DatabaseError as error:
        raise RequestError(f"{path}: cannot be read as a ledger ({error})") from error
    try:
        version = _version(connection, path)
        if version == 0:
            raise RequestError(
                f"{path}: holds nothing yet; its run ended before it could begin, give the"
                " inspection again"
            )
        if version < VERSION:
            raise RequestError(
                f"{path}: ledger of form {version}, this program reads {VERSION}; run the"
                " inspection again, which brings it up to date"
            )
    except RequestError:
        connection.close()
        raise
    return connection


def _probed(address: str) -> sqlite3.Connection:
    """A connection that has read something, so that trouble shows at once."""
    connection = sqlite3.connect(address, uri=True, timeout=BUSY, isolation_level=None)
    try:
        connection.execute("PRAGMA query_only = ON")
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except sqlite3.Error:
        connection.close()
        raise
    return connection


def _version(connection: sqlite3.Connection, path: Path) -> int:
    """The ledger's version, 0 for a file just made."""
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    (tables,) = connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    (application,) = connection.execute("PRAGMA application_id").fetchone()
    if tables and application != APPLICATION:
        raise RequestError(
            f"{path}: another program's SQLite file; move it away or give another --out"
        )
    if version > VERSION:
        raise RequestError(
            f"{path}: written by a newer version of this program (form {version}, here {VERSION});"
            " update sensorgrade"
        )
    return int(version)


APPLICATION = 0x53475244  # "SGRD", as the first script in schema/ sets it
