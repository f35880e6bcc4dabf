"""Devices inspected by worker processes of this machine, through joblib."""

import os
import re
import threading
import time
import warnings
from collections.abc import Callable, Generator, Mapping
from concurrent.futures.process import BrokenProcessPool
from contextlib import closing, suppress
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import joblib

from sensorgrade.frames.frame import DeviceFrames, at_absolute_paths
from sensorgrade.lot.attempt import (
    Attempt,
    InspectOne,
    attempt,
    failure_in_note,
    last_stage,
    note_of,
)
from sensorgrade.lot.stop import uninterrupted

PARENT_CHECK = 0.5  # s between two looks at whether the parent still lives


@dataclass(frozen=True, slots=True)
class Processes:
    """How the worker processes are to run: how many, and with how many cores each."""

    jobs: int
    threads: int
    time_limit: float | None

    def attempts(
        self, devices: Mapping[int, DeviceFrames], inspect_one: InspectOne, workplace: Path
    ) -> Generator[Attempt, None, None]:
        """An answer for each device, in the order in which they are ready.

        When a worker dies, joblib gives up all that are at work. Those are then inspected one
        at a time, so that only a device whose worker dies again, alone, is held to be the
        cause; the others never notice.
        """
        run = partial(
            attempt,
            inspect_one,
            workplace=workplace,
            threads=self.threads,
            time_limit=self.time_limit,
        )
        left = dict(devices)
        while left:
            try:
                with closing(self._pool(run, left)) as answers:
                    for answer in answers:
                        del left[answer.number]
                        yield answer
            except BrokenProcessPool:
                for number in [one for one in left if note_of(workplace, one).exists()]:
                    yield self._alone(run, number, left.pop(number), workplace)

    def _alone(
        self, run: Callable[..., Attempt], number: int, device: DeviceFrames, workplace: Path
    ) -> Attempt:
        """The answer for a device that was at work when a worker died."""
        note = note_of(workplace, number)
        late = failure_in_note(note, self.time_limit)
        if late is not None:
            return Attempt(number, self.time_limit or 0.0, failure=late)
        note.unlink(missing_ok=True)
        try:
            (answer,) = self._pool(run, {number: device})
            return answer
        except BrokenProcessPool as error:
            late = failure_in_note(note, self.time_limit)
            codes = re.search(r"\{(.*)\}", str(error))
            how = f" ({codes[1]})" if codes else ""
            return Attempt(
                number,
                0.0,
                failure=late
                or f"its worker process died twice{how}{last_stage(note)}, as happens when memory"
                " runs out; give fewer --jobs, or a machine with more memory",
            )

    def _pool(
        self, run: Callable[..., Attempt], devices: Mapping[int, DeviceFrames]
    ) -> Generator[Attempt, None, None]:
        """Answers from joblib's workers; raises BrokenProcessPool when one dies."""
        # With one worker joblib would work in this process, which a dying device must not kill.
        count = max(2, min(self.jobs, len(devices)))
        with joblib.parallel_config(
            "loky",
            n_jobs=count,
            inner_max_num_threads=self.threads,
            initializer=_begin_worker,
            initargs=(os.getpid(),),
        ):
            parallel = joblib.Parallel(
                return_as="generator_unordered",
                batch_size=1,
                pre_dispatch=count if self.jobs > 1 else 1,
                max_nbytes=None,
            )
            # Workers outlive a run, and may have been started elsewhere.
            work = [
                joblib.delayed(run)(at_absolute_paths(device), number)
                for number, device in devices.items()
            ]
            with uninterrupted():
                answers = parallel(work)
        try:
            # "yield from" would have them closed before `finally` is reached.
            for answer in answers:  # noqa: UP028
                yield answer
        finally:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # that work was cut short is what was asked for
                answers.close()


def _begin_worker(parent: int) -> None:
    """End this worker soon after its parent was killed, whatever is at work then.

    When the machine runs out of memory, a worker is to be killed and not the parent.
    """
    with suppress(OSError):  # Linux only
        Path("/proc/self/oom_score_adj").write_text("500", encoding="ascii")

    def watch() -> None:
        while os.getppid() == parent:
            time.sleep(PARENT_CHECK)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()
