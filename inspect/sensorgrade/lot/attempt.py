"""One device inspected in a worker process: whatever happens there becomes an answer."""

import errno
import faulthandler
import shutil
import tempfile
import time
import traceback
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Protocol

from sensorgrade.errors import SensorgradeError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot.result import DeviceResult

FULL = (errno.ENOSPC, errno.EDQUOT)
TIMED_OUT = "Timeout ("  # how faulthandler begins


class InspectOne(Protocol):
    """What inspects one device; it must pickle, as a module's function or a partial of one."""

    def __call__(
        self,
        device: DeviceFrames,
        *,
        into: Path,
        threads: int,
        stage: Callable[[str], None],
    ) -> DeviceResult:
        """Inspect ``device`` with ``threads`` cores and write its files into ``into``.

        ``into`` is empty and private; its files are moved to the device's own folder once they
        are complete. Call ``stage(name)`` when a stage begins. A SensorgradeError says in its
        message why the device cannot be inspected.
        """
        ...


@dataclass(frozen=True, slots=True)
class Attempt:
    """What came of one device: ``result`` with files in ``made``, or ``failure``.

    ``full`` says that no space was left on the disk, which concerns every device.
    """

    number: int
    seconds: float
    stages: tuple[tuple[str, float], ...] = ()
    result: DeviceResult | None = None
    made: Path | None = None
    failure: str | None = None
    trace: str | None = None
    full: bool = False


@dataclass(slots=True)
class StageClock:
    """Keeps when each stage began, and writes it down for whoever finds the worker dead."""

    note: Path
    tell: Callable[[str], None] | None
    began: list[tuple[str, float]] = field(default_factory=list)

    def __call__(self, name: str) -> None:
        """A stage begins."""
        self.began.append((name, time.monotonic()))
        with self.note.open("ab") as file:
            file.write(f"{name}\n".encode())
        if self.tell is not None:
            self.tell(name)

    def stages(self, end: float) -> tuple[tuple[str, float], ...]:
        """Names with the seconds until the next one began."""
        stops = [start for _, start in self.began[1:]] + [end]
        return tuple(
            (name, stop - start) for (name, start), stop in zip(self.began, stops, strict=True)
        )


def note_of(workplace: Path, number: int) -> Path:
    """The file that exists while a device is worked on: its stages, line by line."""
    return workplace / f"{number}.note"


def attempt(
    inspect_one: InspectOne,
    device: DeviceFrames,
    number: int,
    *,
    workplace: Path,
    threads: int,
    time_limit: float | None = None,
    tell: Callable[[str], None] | None = None,
) -> Attempt:
    """Inspect one device in a folder of its own; every error becomes part of the answer.

    With ``time_limit`` [s] the process is ended from outside Python when time is up, because a
    hanging read or loop cannot be asked to stop; where it hung is then in the note.
    """
    note = note_of(workplace, number)
    if note.exists() and (late := failure_in_note(note, time_limit)) is not None:
        return Attempt(number, time_limit or 0.0, failure=late)
    start = time.monotonic()
    clock = StageClock(note, tell)
    made: Path | None = None
    try:
        made = Path(tempfile.mkdtemp(prefix=f"{number}-", dir=workplace))
        with _ended_after(time_limit, note):
            result = inspect_one(device, into=made, threads=threads, stage=clock)
        answer = Attempt(number, 0.0, result=result, made=made)
    # The one place where any error is caught: a lot of thousands must not end with one
    # device, and the trace is kept in the ledger for whoever mends the program.
    except Exception as error:
        if made is not None:
            shutil.rmtree(made, ignore_errors=True)
        answer = _failed(number, error)
    end = time.monotonic()
    note.unlink(missing_ok=True)
    return replace(answer, seconds=end - start, stages=clock.stages(end))


@contextmanager
def _ended_after(time_limit: float | None, note: Path) -> Iterator[None]:
    """End this process when time is up, with where it hung at the end of the note."""
    with note.open("ab") as file:
        if time_limit is not None:
            faulthandler.dump_traceback_later(time_limit, exit=True, file=file)
        try:
            yield
        finally:
            if time_limit is not None:
                faulthandler.cancel_dump_traceback_later()


def failure_in_note(note: Path, time_limit: float | None) -> str | None:
    """What a note says of a device that ran out of time; None if it did not."""
    try:
        text = note.read_text(encoding="utf-8", errors="replace")
    except OSError:
        return None
    if TIMED_OUT not in text:
        return None
    return (
        f"did not end within the limit of {time_limit:g} s{_last_stage(text)}; look at its files,"
        " or raise --time-limit"
    )


def last_stage(note: Path) -> str:
    """``" (in stage dark)"`` from the note of a dead worker, or nothing."""
    try:
        return _last_stage(note.read_text(encoding="utf-8", errors="replace"))
    except OSError:
        return ""


def _last_stage(text: str) -> str:
    stages = text.partition(TIMED_OUT)[0].split("\n")[:-1]
    return f" (in stage {stages[-1]})" if stages else ""


def _failed(number: int, error: Exception) -> Attempt:
    """The sentence for an error, with the trace when nobody foresaw it."""
    if isinstance(error, SensorgradeError):
        return Attempt(number, 0.0, failure=str(error))
    if isinstance(error, MemoryError):
        sentence = "needs more memory than there is; give fewer --jobs, or a machine with more"
        return Attempt(number, 0.0, failure=sentence)
    if isinstance(error, OSError) and error.errno in FULL:
        return Attempt(number, 0.0, failure="no space is left on the disk", full=True)
    if isinstance(error, OSError):
        where = f"{error.filename}: " if error.filename else ""
        reason = f"{where}{error.strerror or error}; look at the file, its disk and permissions"
        return Attempt(number, 0.0, failure=reason, trace=_trace(error))
    return Attempt(
        number,
        0.0,
        failure=f"the program failed unexpectedly ({type(error).__name__}: {error}); the ledger"
        " keeps where, please report it",
        trace=_trace(error),
    )


def _trace(error: Exception) -> str:
    return "".join(traceback.format_exception(error))
