"""How far a lot has come: a bar on a terminal, JSON lines for a program, nothing if quiet."""

import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import datetime, timedelta
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from sensorgrade.lot.progress import Progress, Report

LINE_EVERY = 1.0  # s between two lines for a program; the first and the last are always written


@contextmanager
def shown_progress(*, quiet: bool) -> "Iterator[Report]":
    """What to give to `run_lot` as ``report``; everything goes to standard error."""
    if quiet:
        yield lambda progress: None
    elif sys.stderr.isatty():
        with _bar() as report:
            yield report
    else:
        yield _lines()


def _lines() -> "Report":
    """A line of JSON at the start, at most once in a second, and when nothing is left."""
    from sensorgrade.lot.progress import progress_line

    due = 0.0

    def report(progress: "Progress") -> None:
        nonlocal due
        if time.monotonic() >= due or not progress.left:
            click.echo(progress_line(progress), err=True)
            due = time.monotonic() + LINE_EVERY

    return report


@contextmanager
def _bar() -> "Iterator[Report]":
    """A bar with what is done and failed, the rate and the expected end."""
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bar

    with Bar(
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TimeElapsedColumn(),
        console=Console(stderr=True),
        transient=True,
    ) as bar:
        task = bar.add_task("looking for devices", total=None)

        def report(progress: "Progress") -> None:
            bar.update(
                task,
                total=progress.total,
                completed=progress.total - progress.left,
                description=progress_text(progress),
            )

        yield report


def progress_text(progress: "Progress") -> str:
    """``"14 of 24 devices, 1 failed, 2.1 /s, end about 14:05"``, as far as it is known."""
    from sensorgrade.recipe.document import printable

    parts = [f"{progress.total - progress.left} of {progress.total} devices"]
    if progress.kept:
        parts.append(f"{progress.kept} of them from before")
    if progress.failed:
        parts.append(f"{progress.failed} not inspected")
    if progress.rate is not None and progress.left:
        parts.append(f"{progress.rate:.2g} /s")
        end = datetime.now() + timedelta(seconds=progress.seconds_left or 0.0)
        parts.append(f"end about {end:%H:%M}")
    if progress.stage is not None:
        parts.append(printable(progress.stage))
    return ", ".join(parts)
