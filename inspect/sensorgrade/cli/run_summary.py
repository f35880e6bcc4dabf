"""What an inspection prints at its end: a line for each device, then the lot."""

import json
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from sensorgrade.lot.engine import LotOutcome
    from sensorgrade.lot.summary import DeviceLine

DECISIONS = {
    "accept": "accepted",
    "reject": "rejected",
    "undecided": "undecided",
    "ungraded": "not graded",
    "failed": "not inspected",
}


LONGEST_REASON = 400  # characters
WIDTH = 110  # columns where the terminal does not say


def print_lot(lines: "list[DeviceLine]") -> None:
    """One row for each device: serial, decision, grade and the weightiest reason."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    from sensorgrade.recipe.document import printable

    width = None if sys.stdout.isatty() else WIDTH
    console = Console(width=width, highlight=False, markup=False)
    table = Table(box=None, pad_edge=False, header_style="bold")
    for title in ("device", "decision", "grade"):
        table.add_column(title, no_wrap=True)
    table.add_column("why", overflow="fold")
    for line in lines:
        table.add_row(
            Text(printable(line.serial)),
            DECISIONS[line.decision],
            Text(printable(line.grade or "-")),
            Text(printable(line.reason or "meets every limit", LONGEST_REASON)),
        )
    console.print(table)


def outcome_document(outcome: "LotOutcome", lines: "list[DeviceLine]", folder: Path) -> Any:
    """The same as plain data."""
    return {
        "out": str(folder),
        "inspected": outcome.inspected,
        "kept": outcome.kept,
        "failed": outcome.failed,
        "stopped": outcome.stopped,
        "exit_status": outcome.exit_status,
        "devices": [
            {
                "serial": line.serial,
                "folder": line.folder,
                "decision": line.decision,
                "grade": line.grade,
                "reason": line.reason,
            }
            for line in lines
        ],
    }


def tell_outcome(
    outcome: "LotOutcome", lines: "list[DeviceLine]", folder: Path, *, quiet: bool, as_json: bool
) -> None:
    """Print what came of a run, and where its pages are."""
    if as_json:
        document = outcome_document(outcome, lines, folder)
        click.echo(json.dumps(document, indent=1, ensure_ascii=False))
    elif not quiet:
        print_lot(lines)
        click.echo(f"{folder / 'lot.html'}: the lot; each device has its own page below")
    if outcome.stopped:
        click.echo(f"sensorgrade: {outcome.stopped}", err=True)
