"""One run at a time in one folder."""

import fcntl
import os
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

from sensorgrade.errors import RequestError

NAME = "lot.lock"
TRIES, PAUSE = 5, 0.05  # s; someone who only looks (`held_by`) holds it for an instant


@contextmanager
def run_lock(folder: Path) -> Iterator[None]:
    """Hold ``folder`` (made if need be) for this process; the lock dies with the process.

    Raises
    ------
    RequestError
        Another run holds it, named by process, host and start; or it cannot be written.
    """
    path = folder / NAME
    try:
        folder.mkdir(parents=True, exist_ok=True)
        handle = _held(path)
    except BlockingIOError:
        raise RequestError(
            f"{folder}: in use by another run ({_holder(path)}); wait until it has ended, or give"
            " another --out"
        ) from None
    except OSError as error:
        raise RequestError(
            f"{folder}: cannot be written ({error.strerror}); give another --out, or free space"
            " and permissions"
        ) from error
    try:
        started = datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
        os.write(handle, f"process {os.getpid()} on {socket.gethostname()}, {started}".encode())
        yield
    finally:
        path.unlink(missing_ok=True)
        os.close(handle)


def held_by(folder: Path) -> str | None:
    """The run that is at work in ``folder``, as it names itself; None if there is none."""
    path = folder / NAME
    try:
        handle = os.open(path, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return None
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return _holder(path)
    finally:
        os.close(handle)
    return None


def _held(path: Path) -> int:
    """A locked handle of the file that has this name now."""
    tries = 0
    while True:
        handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            # The run that ended just now may have removed the file between open and lock.
            if path.exists() and path.stat().st_ino == os.fstat(handle).st_ino:
                os.ftruncate(handle, 0)
                return handle
        except BlockingIOError:
            tries += 1
            if tries == TRIES:
                os.close(handle)
                raise
            time.sleep(PAUSE)
        except OSError:
            os.close(handle)
            raise
        os.close(handle)


def _holder(path: Path) -> str:
    """What the run that holds the lock says of itself."""
    try:
        return path.read_text(encoding="utf-8", errors="replace")[:200] or "just started"
    except OSError:
        return "just ended"
