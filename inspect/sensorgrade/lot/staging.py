"""Where devices are worked on, and how finished files come into their own folder."""

import os
import shutil
import tempfile
import time
from collections.abc import Iterable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from sensorgrade.atomic import UNFINISHED
from sensorgrade.errors import DeviceError

TRIES = 20  # to remove a folder into which a dying worker still writes


@contextmanager
def workplace(folder: Path) -> Iterator[Path]:
    """A folder inside ``folder`` for work in progress, gone afterwards.

    What killed runs left behind is removed first. A worker that outlived its run finds its
    place gone and can spoil nothing.
    """
    remove_strays(folder)
    place = Path(tempfile.mkdtemp(prefix=UNFINISHED, dir=folder)).resolve()
    try:
        yield place
    finally:
        _remove(place)


def remove_strays(folder: Path) -> None:
    """Remove the work in progress of runs that were killed; the caller holds the lock."""
    for stray in folder.glob(f"{UNFINISHED}*"):
        _remove(stray)


def settle(made: Path, folder: Path, *, stale: Iterable[str]) -> None:
    """Move every file below ``made`` into the device's ``folder`` and remove the ``stale`` ones.

    Each file appears whole under its name or not at all; other files there are left alone.

    Raises
    ------
    DeviceError
        ``folder`` is a link or no folder, so that the files would land somewhere else.
    """
    if folder.is_symlink() or (folder.exists() and not folder.is_dir()):
        raise DeviceError(
            f"{folder}: is a link or a file where the device's folder should be; move it away"
        )
    folder.mkdir(exist_ok=True)
    for path in sorted(made.iterdir()):
        if path.is_dir():
            settle(path, folder / path.name, stale=())
        else:
            path.replace(folder / path.name)
    _remove_stale(folder, stale)
    _flush(folder)
    _flush(folder.parent)


def clear(folder: Path, *, stale: Iterable[str]) -> None:
    """Remove the ``stale`` files from a device's folder, and the folder if nothing is left."""
    with suppress(OSError):  # the user's own files are there, or it never was, or is no folder
        _remove_stale(folder, stale)
        folder.rmdir()


def _remove_stale(folder: Path, stale: Iterable[str]) -> None:
    """Remove files by their names below ``folder``, and the folders they leave empty there."""
    inner = set()
    for name in stale:
        (folder / name).unlink(missing_ok=True)
        inner.add((folder / name).parent)
    for left in inner - {folder}:
        with suppress(OSError):  # it is not empty, or not there
            left.rmdir()


def _flush(folder: Path) -> None:
    """Have the folder's names on the disk before the ledger speaks of them."""
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def _remove(stray: Path) -> None:
    """Remove a file or a folder, also one into which something is still being written."""
    if not stray.is_dir() or stray.is_symlink():
        stray.unlink(missing_ok=True)
        return
    for _ in range(TRIES):
        shutil.rmtree(stray, ignore_errors=True)
        if not stray.exists():
            return
        time.sleep(0.1)
