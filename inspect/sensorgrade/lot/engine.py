"""Many devices inspected, on this machine or on a cluster; each recorded as soon as it is done."""

import sqlite3
import time
from collections.abc import Callable, Generator, Iterator, Sequence
from contextlib import ExitStack, closing, contextmanager, suppress
from dataclasses import dataclass, replace
from pathlib import Path

from sensorgrade.errors import DeviceError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot.attempt import FULL, Attempt, InspectOne, attempt
from sensorgrade.lot.capacity import Capacity, capacity
from sensorgrade.lot.cluster import connected
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.fingerprint import Fingerprint, contents, fingerprint
from sensorgrade.lot.ledger import Ledger, Tally, write_ledger
from sensorgrade.lot.lock import run_lock
from sensorgrade.lot.processes import Processes
from sensorgrade.lot.progress import Progress, Report
from sensorgrade.lot.staging import clear, remove_strays, settle, workplace
from sensorgrade.lot.stop import stoppable
from sensorgrade.recipe.document import printable
from sensorgrade.recipe.model import Recipe

LONGEST_REASON = 2000  # characters
TIME_LIMIT = 7200.0  # s for one device in a worker, unless the user says how long


@dataclass(frozen=True, slots=True, kw_only=True)
class LotOptions:
    """How a lot is to be worked through; None leaves the choice to the program.

    ``jobs`` devices at once; ``memory`` [bytes] for all of them; ``cluster`` address of a Dask
    scheduler; ``time_limit`` [s] for one device (without one, a lot that needs no second
    process has none); ``fresh`` inspects finished devices again.
    """

    jobs: int | None = None
    memory: float | None = None
    cluster: str | None = None
    time_limit: float | None = None
    fresh: bool = False


@dataclass(frozen=True, slots=True)
class LotOutcome:
    """What came of the devices asked for.

    ``tally`` counts these devices only. ``stopped`` says in a sentence why some were not
    reached, None if all were.
    """

    kept: int
    inspected: int
    failed: int
    tally: Tally
    seconds: float
    stopped: str | None

    @property
    def exit_status(self) -> int:
        """3 when some device failed or was not reached; else that of the tally."""
        return 3 if self.stopped else self.tally.exit_status


@contextmanager
def run_folder(folder: Path) -> Iterator[Ledger]:
    """The folder a run writes to, locked for this process, cleaned, with its ledger open.

    Raises
    ------
    RequestError
        Another run is at work there, it cannot be written, or its ledger is none.
    """
    with run_lock(folder):
        remove_strays(folder)
        with write_ledger(folder) as ledger:
            yield ledger


def run_lot(
    devices: Sequence[DeviceFrames],
    inspect_one: InspectOne,
    *,
    ledger: Ledger,
    recipe: Recipe,
    options: LotOptions,
    report: Report = lambda progress: None,
) -> LotOutcome:
    """Inspect every device that is not finished, and record each as soon as it is done.

    A device is finished when the ledger has its result from the same inputs, recipe and version.
    One that fails, hangs or dies is recorded with its reason and the others go on. Ctrl-C,
    SIGTERM and a full disk end the run with everything recorded that was done.

    Parameters
    ----------
    devices : sequence of DeviceFrames
        Their ``folder`` names are where the files go, below ``ledger.folder``.
    inspect_one : InspectOne
        Inspects one device; see there.
    ledger : Ledger
        From `run_folder`.
    recipe : Recipe
        The one that ``inspect_one`` works by.
    report : callable
        Called with a Progress when something has happened.

    Raises
    ------
    RequestError
        The options cannot be met: no such cluster, jobs or memory not positive.
    """
    work = _Work(devices, ledger, recipe, report)
    stopped: str | None = None
    with stoppable() as stop:
        try:
            todo = work.to_do(fresh=options.fresh)
            with workplace(ledger.folder) as place, ExitStack() as ending:
                room, answers = _answers(todo, inspect_one, place, options, ending, work.tell)
                ledger.begin(recipe, jobs=room.jobs, threads=room.threads)
                work.tell(None)
                ending.enter_context(closing(answers))
                for answer in answers:
                    if answer.full:
                        stopped = f"{ledger.folder}: no space is left on the disk"
                        break
                    with stop.unbroken():
                        work.keep(answer)
        except KeyboardInterrupt:
            stopped = "stopped on request"
        except sqlite3.OperationalError as error:
            stopped = f"{ledger.folder}: the ledger cannot be written ({error})"
        except OSError as error:
            stopped = f"{error.filename or ledger.folder}: {error.strerror}"
        with suppress(sqlite3.OperationalError):
            ledger.end("stopped" if stopped else "finished")
    return work.outcome(stopped)


def _answers(
    todo: dict[int, DeviceFrames],
    inspect_one: InspectOne,
    place: Path,
    options: LotOptions,
    ending: ExitStack,
    tell: Callable[[str | None], None],
) -> tuple[Capacity, Generator[Attempt, None, None]]:
    """An answer for each device: from the cluster, from worker processes, or from this one."""
    if options.cluster is not None and todo:
        cluster = ending.enter_context(connected(options.cluster, time_limit=options.time_limit))
        return Capacity(cluster.slots, 1), cluster.attempts(todo, inspect_one, place)
    room = capacity(list(todo.values()), jobs=options.jobs, memory=options.memory)
    if len(todo) > 1 or options.time_limit is not None:
        processes = Processes(room.jobs, room.threads, options.time_limit or TIME_LIMIT)
        return room, processes.attempts(todo, inspect_one, place)
    answers = (
        attempt(inspect_one, device, number, workplace=place, threads=room.threads, tell=tell)
        for number, device in todo.items()
    )
    return room, answers


class _Work:
    """The devices of one run, what has become of them so far, and where it is recorded."""

    def __init__(
        self, devices: Sequence[DeviceFrames], ledger: Ledger, recipe: Recipe, report: Report
    ) -> None:
        self._devices = devices
        self._ledger = ledger
        self._recipe = recipe
        self._report = report
        self._start = time.monotonic()
        self._prints: dict[int, Fingerprint] = {}
        self._progress = Progress(len(devices), 0, 0, 0, 0.0)

    def to_do(self, *, fresh: bool) -> dict[int, DeviceFrames]:
        """The devices that are not finished, by number."""
        todo = {}
        for number, device in enumerate(self._devices):
            now = fingerprint(device, recipe_sha256=self._recipe.sha256)
            self._prints[number] = now
            if fresh or not is_finished(device, now, self._ledger):
                todo[number] = device
        self._progress = replace(self._progress, kept=len(self._devices) - len(todo))
        return todo

    def keep(self, answer: Attempt) -> None:
        """Put the device's files in place and record it, or its failure."""
        device = self._devices[answer.number]
        failure, trace = answer.failure, answer.trace
        if answer.result is not None and answer.made is not None:
            try:
                made = answer.made
                files = sorted(
                    path.relative_to(made).as_posix() for path in made.rglob("*") if path.is_file()
                )
                stale = self._ledger.open_folder(device.folder, names=files)
                settle(made, self._ledger.folder / device.folder, stale=stale)
            except DeviceError as error:
                failure = str(error)
            except OSError as error:
                if error.errno in FULL:
                    raise
                failure = f"{error.filename}: {error.strerror}; its files cannot be put there"
            else:
                self._ledger.record(
                    answer.result,
                    fingerprint=self._prints[answer.number],
                    seconds=answer.seconds,
                    stages=answer.stages,
                    files=files,
                )
        if failure is not None:
            stale = self._ledger.open_folder(device.folder, names=())
            clear(self._ledger.folder / device.folder, stale=stale)
            self._ledger.record_failure(
                Failure(
                    serial=device.serial,
                    folder=device.folder,
                    lot=device.lot,
                    wafer=device.wafer,
                    die_row=device.die_row,
                    die_column=device.die_column,
                    # A file's name may hold bytes that are no text and that no ledger takes.
                    reason=printable(failure, LONGEST_REASON),
                    trace=trace and trace.encode(errors="backslashreplace").decode(),
                ),
                recipe=self._recipe,
                fingerprint=self._prints[answer.number],
                seconds=answer.seconds,
                stages=answer.stages,
            )
        self._progress = replace(
            self._progress,
            inspected=self._progress.inspected + (failure is None),
            failed=self._progress.failed + (failure is not None),
            device=device.serial,
        )
        self.tell(None)

    def tell(self, stage: str | None) -> None:
        """Report how far the run has come, and the stage at work."""
        seconds = time.monotonic() - self._start
        self._report(replace(self._progress, seconds=seconds, stage=stage))

    def outcome(self, stopped: str | None) -> LotOutcome:
        """What to tell at the end."""
        progress = self._progress
        if stopped is not None:
            stopped = (
                f"{stopped} with {progress.left} of {progress.total} devices left to do; what is"
                " done is kept, give the same command again to go on"
            )
        return LotOutcome(
            kept=progress.kept,
            inspected=progress.inspected,
            failed=progress.failed,
            tally=self._ledger.tally(device.folder for device in self._devices),
            seconds=time.monotonic() - self._start,
            stopped=stopped,
        )


def is_finished(device: DeviceFrames, now: Fingerprint, ledger: Ledger) -> bool:
    """Whether the ledger has this device's result, of the same inputs, recipe and version.

    Files whose times have changed are read and digested: only other contents count.
    """
    recorded = ledger.fingerprint_of(device.folder)
    if recorded is None or recorded.described != now.described:
        return False
    folder = ledger.folder / device.folder
    if not all((folder / name).is_file() for name in ledger.files_of(device.folder)):
        return False
    if recorded.state == now.state:
        return True
    known = ledger.contents_of(device.folder)
    if not now.state or known != contents(device):
        return False
    ledger.restate(device.folder, now.state)
    return True
