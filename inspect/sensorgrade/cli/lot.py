"""``sensorgrade lot``: what a run's ledger holds, on the screen and as tables."""

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from sensorgrade.lot.ledger import Run, Tally
    from sensorgrade.lot.summary import DeviceLine
    from sensorgrade.lot.wafer import LotPlaces


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade lot reports/lot7\n"
    "  sensorgrade lot reports/lot7 --csv lot7.csv --parquet lot7.parquet\n"
    "  sensorgrade lot reports/lot7 --wafers --reticle 2 3\n\n"
    "Exit status: 0 every device accepted; 1 some rejected or undecided; 2 the request is wrong;"
    " 3 some device could not be inspected."
)
@click.argument("run", type=click.Path(path_type=Path))
@click.option("--csv", "csv_file", type=click.Path(path_type=Path), help="Write a CSV table here.")
@click.option("--ecsv", "ecsv_file", type=click.Path(path_type=Path), help="Write ECSV here.")
@click.option(
    "--parquet", "parquet_file", type=click.Path(path_type=Path), help="Write Parquet here."
)
@click.option("--wafers", is_flag=True, help="Show wafer maps, yields by place and clustering.")
@click.option(
    "--reticle",
    type=(click.IntRange(min=1), click.IntRange(min=1)),
    metavar="ROWS COLUMNS",
    help="Dies that the reticle prints at once; with --wafers.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    run: Path,
    csv_file: Path | None,
    ecsv_file: Path | None,
    parquet_file: Path | None,
    wafers: bool,
    reticle: tuple[int, int] | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Show what the ledger of RUN holds, and write it out as tables.

    RUN is the folder an inspection wrote to; a run that is still going on can be looked at too.
    The tables have a row for each device and a column for each number.
    """
    from sensorgrade.lot.ledger import read_ledger
    from sensorgrade.lot.lock import held_by
    from sensorgrade.lot.summary import device_lines

    with read_ledger(run) as ledger:
        lines, tally, runs = device_lines(ledger), ledger.tally(), ledger.runs()
        if csv_file or ecsv_file or parquet_file:
            from sensorgrade.lot.lot_table import write_tables

            results, failures = ledger.results(in_short=True), ledger.failures()
            write_tables(results, failures, csv=csv_file, ecsv=ecsv_file, parquet=parquet_file)
    places = None
    if wafers or reticle:
        from sensorgrade.lot.wafer import lot_places

        places = lot_places(lines, reticle=reticle)
    if as_json:
        click.echo(json.dumps(_document(lines, tally, runs, places), ensure_ascii=False, indent=1))
    elif not quiet:
        if places is None:
            _print_lines(lines)
        else:
            from sensorgrade.cli.wafers import print_places

            print_places(places)
        _print_tally(tally, runs, held_by(run))
    ctx.exit(tally.exit_status)


def _print_lines(lines: "list[DeviceLine]") -> None:
    """One line for each device: a table on a terminal, else tabs."""
    from rich.console import Console
    from rich.table import Table
    from rich.text import Text

    from sensorgrade.recipe.document import printable

    heads = ("serial", "wafer", "die", "grade", "decision", "seconds", "reason")
    rows = [
        (
            printable(line.serial),
            printable(line.wafer or ""),
            "" if line.die_row is None else f"{line.die_row},{line.die_column}",
            printable(line.grade or ""),
            line.decision,
            f"{line.seconds:.1f}",
            printable(line.reason or "", 500),
        )
        for line in lines
    ]
    console = Console()
    if console.is_terminal:
        table = Table(*heads, box=None, header_style="bold")
        for row in rows:
            table.add_row(*map(Text, row))
        console.print(table)
    else:
        for row in (heads, *rows):
            click.echo("\t".join(row))


def _print_tally(tally: "Tally", runs: "list[Run]", holder: str | None) -> None:
    parts = [
        f"{count} {word}"
        for count, word in (
            (tally.accepted, "accepted"),
            (tally.rejected, "rejected"),
            (tally.undecided, "undecided"),
            (tally.ungraded, "ungraded"),
            (tally.failed, "not inspected"),
        )
        if count
    ]
    click.echo(f"{tally.devices} devices: {', '.join(parts) or 'none yet'}")
    if holder is not None:
        click.echo(f"A run is at work ({holder})")
    elif runs and runs[-1].ending != "finished":
        how = "was stopped" if runs[-1].ending else "was killed"
        click.echo(
            f"The last run (started {runs[-1].started}) {how}; the same inspection given again"
            " does what is left"
        )


def _document(
    lines: "list[DeviceLine]", tally: "Tally", runs: "list[Run]", places: "LotPlaces | None"
) -> dict[str, object]:
    from dataclasses import asdict

    return {
        "devices": [asdict(line) for line in lines],
        "tally": asdict(tally),
        "runs": [asdict(run) for run in runs],
        "places": None if places is None else asdict(places),
    }
