"""Devices taken as their frames become complete, while a bench goes on taking others."""

import time
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.frames.sources import FoundFile, checked_sources, files_below

EVERY = 2.0  # s between two looks at the sources

State = tuple[int, int, int]  # bytes, time of change, time of change of status


def completed(
    sources: Sequence[Path],
    find: Callable[[], Sequence[DeviceFrames]],
    *,
    marker: str | None = None,
    quiet: float = 60.0,
    every: float = EVERY,
    complain: Callable[[str], None],
) -> Iterator[tuple[DeviceFrames, ...]]:
    """Groups of devices that have just become complete; goes on until it is interrupted.

    Parameters
    ----------
    sources : sequence of Path
        Folders that are watched, as given to `find_devices`.
    find : callable
        Finds all devices that are there now; called only when files have become complete.
    marker : str, optional
        Name of a file that the bench puts into a device's folder, or one above it below the
        source, when all its frames are there.
    quiet : float
        Without a marker a device is complete when none of its files has changed, and none has
        come, for so long [s]. The clock is this program's own: that of the files may jump.
    every : float
        Time between two looks [s].
    complain : callable
        Told why ``find`` could not find devices; the watch goes on.

    Raises
    ------
    RequestError
        A source is missing or no folder.
    """
    checked_sources(sources)
    seen: dict[Path, tuple[State, float]] = {}
    given: dict[str, frozenset[tuple[Path, State]]] = {}
    tried: frozenset[tuple[Path, State]] = frozenset()
    while True:
        seen = _looked_at(sources, seen)
        ready = {
            path: state
            for path, (state, since) in seen.items()
            if _is_ready(path, since, sources, marker, quiet)
        }
        now = frozenset(ready.items())
        if now and now != tried:
            tried = now
            batch = []
            try:
                devices = find()
            except RequestError as error:  # more may come; a bench must not stand idle all night
                complain(str(error))
                devices = ()
            for device in devices:
                paths = [frame.path for frame in device.frames]
                if not all(path in ready for path in paths):
                    continue
                state = frozenset((path, ready[path]) for path in paths)
                if state and given.get(device.serial) != state:
                    given[device.serial] = state
                    batch.append(device)
            if batch:
                yield tuple(batch)
        time.sleep(every)


def _looked_at(
    sources: Sequence[Path], seen: dict[Path, tuple[State, float]]
) -> dict[Path, tuple[State, float]]:
    """Every candidate frame with its state, and since when that has been as it is."""
    moment = time.monotonic()
    found = {}
    for source in sources:
        for file in files_below(source, prefix=""):
            if isinstance(file, FoundFile):
                try:
                    status = file.path.stat()
                except OSError:
                    continue  # taken away between the two looks
                state = (status.st_size, status.st_mtime_ns, status.st_ctime_ns)
                before = seen.get(file.path)
                since = before[1] if before is not None and before[0] == state else moment
                found[file.path] = (state, since)
    return found


def _is_ready(
    path: Path, since: float, sources: Sequence[Path], marker: str | None, quiet: float
) -> bool:
    """Whether a file will not change any more, as far as one can tell."""
    if marker is None:
        return time.monotonic() - since >= quiet
    return any(
        (folder / marker).exists()
        for source in sources
        if path.is_relative_to(source)
        for folder in (path.parent, *path.parent.parents)
        if folder.is_relative_to(source)
    )
