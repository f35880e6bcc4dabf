"""``sensorgrade demo``: a small simulated lot, inspected end to end and held against its truth."""

from pathlib import Path

import click


@click.command(
    epilog="\b\nExample:\n  sensorgrade demo\n\n"
    "Exit status: 0 every grade is what the simulated truth says it should be; 1 some is not;"
    " 3 some device could not be inspected."
)
@click.option(
    "--out",
    "folder",
    type=click.Path(path_type=Path),
    default=Path("reports/demo"),
    show_default=True,
    help="Folder for frames and results.",
)
@click.option("--seed", type=int, default=0, show_default=True, help="Another lot of its kind.")
@click.option("--jobs", type=click.IntRange(min=1), help="Devices at a time; else by the machine.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context, folder: Path, seed: int, jobs: int | None, as_json: bool, quiet: bool
) -> None:
    """Make a small lot of simulated devices, inspect it, and compare the grades with the truth.

    The frames are written as a bench would, then read back as anybody's would be.
    """
    from sensorgrade.cli.progress import shown_progress
    from sensorgrade.cli.run_summary import tell_outcome
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.inspection import inspect_lot
    from sensorgrade.lot.engine import LotOptions, run_folder
    from sensorgrade.lot.summary import device_lines
    from sensorgrade.recipe.library import find_recipe
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.simulate.demo import demo_lot, write_demo
    from sensorgrade.stages import vocabulary

    recipe = load_recipe(find_recipe("demo"), vocabulary())
    lot = demo_lot()
    if not quiet and not as_json:
        click.echo(f"Simulating {len(lot)} devices into {folder / 'frames'} ...", err=True)
    write_demo(lot, folder / "frames", seed=seed)
    devices = find_devices([folder / "frames"], recipe)
    results = folder / "results"
    results.mkdir(parents=True, exist_ok=True)
    with run_folder(results) as ledger, shown_progress(quiet=quiet) as report:
        outcome = inspect_lot(
            devices, recipe, ledger=ledger, options=LotOptions(jobs=jobs), report=report
        )
        lines = device_lines(ledger)
    tell_outcome(outcome, lines, results, quiet=quiet, as_json=as_json)
    found = {line.serial: line.grade for line in lines}
    wrong = [one for one in lot if found.get(one.serial) != one.expected]
    if not quiet:
        for one in wrong:
            click.echo(
                f"{one.serial}: graded {found.get(one.serial)}, but by its truth it is"
                f" {one.expected}: {one.why}",
                err=True,
            )
        click.echo(
            f"{len(lot) - len(wrong)} of {len(lot)} grades are what the simulated truth says",
            err=as_json,
        )
    ctx.exit(3 if outcome.stopped or outcome.failed else int(bool(wrong)))
