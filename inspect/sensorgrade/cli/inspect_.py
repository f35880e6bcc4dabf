"""``sensorgrade inspect``: devices from raw frames to grades, masks and pages."""

from pathlib import Path

import click


@click.command(
    "inspect",
    epilog="\b\nExamples:\n"
    "  sensorgrade inspect frames/ --recipe two-output-ccd --out reports/lot7\n"
    "  sensorgrade inspect lot7/ lot8/ --recipe mine.yaml --jobs 2\n"
    "  sensorgrade inspect bench/ --recipe mine.yaml --watch --marker done.txt\n\n"
    "Exit status: 0 every device accepted; 1 some rejected or undecided; 2 the request is wrong;"
    " 3 some device could not be inspected.",
)
@click.argument(
    "sources", nargs=-1, required=True, metavar="SOURCE...", type=click.Path(path_type=Path)
)
@click.option("--recipe", "recipe_name", required=True, help="File, or name of a ready recipe.")
@click.option(
    "--out",
    "folder",
    type=click.Path(path_type=Path),
    help="Folder for what the run leaves; else reports/ and the name of the first SOURCE.",
)
@click.option("--jobs", type=click.IntRange(min=1), help="Devices at a time; else by the machine.")
@click.option("--memory", help="Memory for all of them, such as '8 GiB'; else 3/4 of what is free.")
@click.option("--cluster", metavar="ADDRESS", help="Run the devices on this Dask scheduler.")
@click.option(
    "--time-limit", type=click.FloatRange(min=1.0), help="Seconds that one device may take."
)
@click.option("--fresh", is_flag=True, help="Inspect finished devices again too.")
@click.option(
    "--figures",
    is_flag=True,
    help="Write the figures of each page as PNG and SVG too, into OUT/SERIAL/figures; those of"
    " finished devices with --fresh.",
)
@click.option("--watch", is_flag=True, help="Go on and take devices as they become complete.")
@click.option("--marker", help="With --watch: the file that says a device's folder is complete.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    sources: tuple[Path, ...],
    recipe_name: str,
    folder: Path | None,
    jobs: int | None,
    memory: str | None,
    cluster: str | None,
    time_limit: float | None,
    fresh: bool,
    figures: bool,
    watch: bool,
    marker: str | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Inspect every device below SOURCE by a recipe.

    SOURCE is the folder of one device, of many device folders, or of the frames of many devices
    told apart by serial. Devices that an earlier run into the same folder has finished are kept.
    """
    from sensorgrade.cli.progress import shown_progress
    from sensorgrade.cli.run_summary import tell_outcome
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.inspection import inspect_lot
    from sensorgrade.lot.engine import LotOptions, run_folder
    from sensorgrade.lot.stop import stoppable
    from sensorgrade.lot.summary import device_lines
    from sensorgrade.lot.watch import completed
    from sensorgrade.recipe.library import find_recipe
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.recipe.quantities import WrongQuantity, quantity
    from sensorgrade.stages import vocabulary

    if marker is not None and not watch:
        raise click.UsageError("--marker goes with --watch")
    try:
        bytes_allowed = None if memory is None else quantity(memory, "byte")
    except WrongQuantity as wrong:
        raise click.BadParameter(str(wrong), param_hint="--memory") from wrong
    recipe = load_recipe(find_recipe(recipe_name), vocabulary())
    options = LotOptions(
        jobs=jobs,
        memory=bytes_allowed,
        cluster=cluster,
        time_limit=time_limit,
        fresh=fresh,
    )
    if watch:
        batches = completed(
            sources,
            lambda: find_devices(sources, recipe),
            marker=marker,
            complain=lambda text: click.echo(f"sensorgrade: {text}", err=True),
        )
    else:
        batches = iter([find_devices(sources, recipe)])
    out = folder or Path("reports") / sources[0].resolve().name
    with stoppable(), run_folder(out) as ledger:
        try:
            for devices in batches:
                with shown_progress(quiet=quiet) as report:
                    outcome = inspect_lot(
                        devices,
                        recipe,
                        ledger=ledger,
                        options=options,
                        report=report,
                        figures=figures,
                    )
                tell_outcome(outcome, device_lines(ledger), out, quiet=quiet, as_json=as_json)
                status = outcome.exit_status
                if outcome.stopped:
                    break
        except KeyboardInterrupt:  # while no device was at work
            click.echo(
                f"sensorgrade: {'watch ' if watch else ''}stopped on request; what is done is"
                " kept, give the same command again to go on",
                err=True,
            )
            status = ledger.tally().exit_status if watch else 3
    ctx.exit(status)
