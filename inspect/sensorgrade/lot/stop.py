"""Ctrl-C and SIGTERM: stop at a moment when nothing is half done."""

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from multiprocessing import resource_tracker
from types import FrameType


class Stop:
    """Turns SIGINT and SIGTERM into KeyboardInterrupt, but not inside `unbroken`."""

    def __init__(self) -> None:
        self._busy = False
        self._asked = False

    def ask(self, number: int, frame: FrameType | None) -> None:
        """Answer a signal: now, or at the end of what must not be broken."""
        if self._busy:
            self._asked = True
        else:
            raise KeyboardInterrupt

    @contextmanager
    def unbroken(self) -> Iterator[None]:
        """Keep a signal waiting until the block has ended."""
        self._busy = True
        try:
            yield
        finally:
            self._busy = False
        if self._asked:
            raise KeyboardInterrupt


@contextmanager
def stoppable() -> Iterator[Stop]:
    """Answer SIGINT and SIGTERM through a `Stop` while the block runs (in the main thread)."""
    stop = Stop()
    if threading.current_thread() is not threading.main_thread():
        yield stop
        return
    earlier = {
        number: signal.signal(number, stop.ask) for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield stop
    finally:
        for number, handler in earlier.items():
            signal.signal(number, handler)


@contextmanager
def uninterrupted() -> Iterator[None]:
    """Start processes that Ctrl-C never reaches, though it goes to the whole group of them.

    They inherit that it is held back, from their first instruction on. For this process it waits
    until the block has ended.
    """
    # Python before 3.13 lets signals through again whenever it starts this helper process.
    resource_tracker.ensure_running()
    earlier = signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
    try:
        yield
    finally:
        signal.pthread_sigmask(signal.SIG_SETMASK, earlier)
