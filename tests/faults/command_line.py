"""The command line run in this process, as a user sees it."""

import io
import sys
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass

import click

from sensorgrade.cli.main import main


@dataclass(frozen=True)
class Answer:
    """Exit status, what went to stdout and to stderr."""

    status: int
    out: str
    err: str


def run(*arguments: str) -> Answer:
    """Run one command; an error that is not a user's mistake is raised as it is."""
    out, err = io.StringIO(), io.StringIO()
    status = 0
    with redirect_stdout(out), redirect_stderr(err):
        try:
            main(list(arguments))
        except SystemExit as leave:
            status = leave.code if isinstance(leave.code, int) else 1
        except click.exceptions.Exit as leave:
            status = leave.exit_code
    sys.stdout.flush()
    return Answer(status, out.getvalue(), err.getvalue())
