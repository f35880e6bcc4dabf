"""The files below a source, each once: loops, pipes and devices are told, never opened."""

import os
import re
import stat
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.frames.readers import BESIDE_FRAMES, reader_of
from sensorgrade.measurement import Finding
from sensorgrade.recipe.document import printable

DEEPEST = 32  # folders below the source
DIGITS = re.compile(r"([0-9]{1,18})")
LEDGER = "lot.sqlite"  # marks a folder that a run has written


@dataclass(frozen=True, slots=True)
class FoundFile:
    """A file that a reader can try: where it is, and its place below the source."""

    path: Path
    label: str
    source: Path
    size: int
    inode: tuple[int, int]


@dataclass(frozen=True, slots=True)
class Remark:
    """A finding about something below a source, before its device is known."""

    folder: Path
    source: Path
    finding: Finding


def shown(path: Path | str) -> str:
    """A path fit to print: control characters and stray bytes escaped."""
    return printable(str(path), 4096)


def checked_sources(sources: Sequence[Path]) -> tuple[Path, ...]:
    """The sources, each an existing folder and none inside another.

    Raises
    ------
    RequestError
        A source is missing, no folder, not readable, given twice or inside another.
    """
    if not sources:
        raise RequestError("no source given; name the folder that holds the frames")
    resolved: dict[Path, Path] = {}
    for source in sources:
        try:
            real = source.resolve(strict=True)
            mode = real.stat().st_mode
        except (OSError, RuntimeError, ValueError) as error:
            raise RequestError(
                f"{shown(source)}: no such source; name an existing folder of frames"
            ) from error
        if not stat.S_ISDIR(mode):
            raise RequestError(f"{shown(source)}: is no folder; name the folder of the frames")
        if not os.access(real, os.R_OK | os.X_OK):
            raise RequestError(f"{shown(source)}: may not be read; ask for permission to read it")
        for other, name in resolved.items():
            if real == other or real in other.parents or other in real.parents:
                raise RequestError(
                    f"{shown(source)}: overlaps the source {shown(name)}; give each folder once"
                )
        resolved[real] = source
    return tuple(sources)


def files_below(source: Path, *, prefix: str) -> Iterator[FoundFile | Remark]:
    """Every candidate frame below a source in natural order, and remarks on all that is odd.

    ``prefix`` goes before each label. Names that start with a dot or have none, and files that
    plainly are no frames (`BESIDE_FRAMES`), are passed over.
    """
    real = source.resolve()
    seen = {_inode(real.stat())}
    yield from _walk(source, source, prefix, seen, depth=0)


def _walk(
    folder: Path, source: Path, prefix: str, seen: set[tuple[int, int]], *, depth: int
) -> Iterator[FoundFile | Remark]:
    try:
        with os.scandir(folder) as entries:
            found = sorted(entries, key=lambda entry: natural(entry.name))
    except OSError as error:
        told = _remark(folder, source, prefix, "error", _why(error), "make it readable")
        yield replace(told, folder=folder)  # it may be the very folder of a device
        return
    if any(entry.name == LEDGER for entry in found):
        seen_text = "holds the results of a run, not raw frames; passed over"
        yield _remark(folder, source, prefix, "note", seen_text, "keep results apart from frames")
        return
    for entry in found:
        if entry.name.startswith("."):
            continue
        path = Path(entry.path)
        try:
            status = entry.stat()
        except OSError as error:
            yield _remark(path, source, prefix, "warning", _why(error), "repair or remove it")
            continue
        if stat.S_ISDIR(status.st_mode):
            if _inode(status) in seen:
                seen_text = "is a link to a folder that was looked at already; not followed"
                yield _remark(path, source, prefix, "note", seen_text, "remove the link")
            elif depth >= DEEPEST:
                seen_text = f"lies more than {DEEPEST} folders deep; not looked at"
                yield _remark(path, source, prefix, "warning", seen_text, "name it as a source")
            else:
                seen.add(_inode(status))
                yield from _walk(path, source, prefix, seen, depth=depth + 1)
        elif not stat.S_ISREG(status.st_mode):
            seen_text = "is a pipe, socket or device and not a file; never opened"
            yield _remark(path, source, prefix, "warning", seen_text, "take it out of the folder")
        elif reader_of(entry.name) is not None:
            yield FoundFile(
                path, _label(path, source, prefix), source, status.st_size, _inode(status)
            )
        elif "." in entry.name and not entry.name.lower().endswith(BESIDE_FRAMES):
            seen_text = "has a name that no frame format has; passed over"
            yield _remark(path, source, prefix, "note", seen_text, "rename it if it is a frame")


def natural(name: str) -> tuple[list[tuple[int, int, str]], str]:
    """Sort key that puts ``frame10`` after ``frame9``."""
    parts = DIGITS.split(name)
    key = [
        (0, int(part), "") if index % 2 else (1, 0, part)
        for index, part in enumerate(parts)
        if part
    ]
    return key, name


def _inode(status: os.stat_result) -> tuple[int, int]:
    return status.st_dev, status.st_ino


def _why(error: OSError) -> str:
    return f"cannot be read: {(error.strerror or 'unknown reason').lower()}"


def _label(path: Path, source: Path, prefix: str) -> str:
    return shown(prefix + path.relative_to(source).as_posix())


def _remark(path: Path, source: Path, prefix: str, severity: str, seen: str, remedy: str) -> Remark:
    finding = Finding(severity, _label(path, source, prefix), seen, remedy)  # type: ignore[arg-type]
    return Remark(path.parent if path != source else source, source, finding)
