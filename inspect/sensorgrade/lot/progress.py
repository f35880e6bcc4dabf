"""How far a lot has come, for people and for programs."""

import json
from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Progress:
    """Devices of this run: ``total`` = ``kept`` + ``inspected`` + ``failed`` + `left`.

    ``kept`` were finished by an earlier run. ``seconds`` since the start; ``device`` is the
    serial that was finished just now, ``stage`` what is at work where one device is inspected
    at a time; each None where it does not apply.
    """

    total: int
    kept: int
    inspected: int
    failed: int
    seconds: float
    device: str | None = None
    stage: str | None = None

    @property
    def left(self) -> int:
        """Devices still to do."""
        return self.total - self.kept - self.inspected - self.failed

    @property
    def rate(self) -> float | None:
        """Devices per second of this run; None before the first."""
        done = self.inspected + self.failed
        return done / self.seconds if done and self.seconds > 0 else None

    @property
    def seconds_left(self) -> float | None:
        """Expected time to the end at this rate [s]."""
        return None if self.rate is None else self.left / self.rate


Report = Callable[[Progress], None]


def progress_line(progress: Progress) -> str:
    """One JSON object on one line, for programs that follow a run."""
    return json.dumps(
        {
            "total": progress.total,
            "kept": progress.kept,
            "inspected": progress.inspected,
            "failed": progress.failed,
            "left": progress.left,
            "seconds": round(progress.seconds, 1),
            "devices_per_second": None if progress.rate is None else round(progress.rate, 3),
            "seconds_left": None if progress.seconds_left is None else round(progress.seconds_left),
            "device": progress.device,
            "stage": progress.stage,
        }
    )
