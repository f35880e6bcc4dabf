"""Python's garbage collector, kept from walking a whole lot again and again."""

import gc
from collections.abc import Iterator
from contextlib import contextmanager


@contextmanager
def collector_rests() -> Iterator[None]:
    """Let the collector rest where a million small records are made, none of them in a cycle.

    It would walk all that are there each time their number has grown by a quarter.
    """
    collecting = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if collecting:
            gc.enable()
