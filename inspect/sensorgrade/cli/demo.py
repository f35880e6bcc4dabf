"""``sensorgrade demo``: a small simulated lot, inspected end to end and held against its truth."""

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from sensorgrade.lot.engine import LotOutcome
    from sensorgrade.lot.summary import DeviceLine
    from sensorgrade.recipe.model import Recipe

NOT_INSPECTED = 3


@click.command(
    epilog="\b\nExamples:\n  sensorgrade demo\n  sensorgrade demo --recipe wafer-probe\n\n"
    "Exit status: 0 every grade is what the simulated truth says it should be (with --recipe: every"
    " device was inspected); 1 some is not; 3 some device could not be inspected."
)
@click.option(
    "--recipe",
    "recipe_name",
    default="demo",
    show_default=True,
    help="Ready recipe to show, with simulated devices of its kind.",
)
@click.option(
    "--out",
    "folder",
    type=click.Path(path_type=Path),
    help="Folder for frames and results.  [default: reports/RECIPE]",
)
@click.option("--seed", type=int, default=0, show_default=True, help="Another lot of its kind.")
@click.option("--jobs", type=click.IntRange(min=1), help="Devices at a time; else by the machine.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    recipe_name: str,
    folder: Path | None,
    seed: int,
    jobs: int | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Make a small lot of simulated devices, inspect it, and compare the grades with the truth.

    The frames are written as a bench would, then read back as anybody's would be. With --recipe,
    devices of another kind are made and inspected; 'screening' makes them before and after a test.
    """
    from sensorgrade.api import load_recipe
    from sensorgrade.cli.run_summary import tell_outcome

    recipe = load_recipe(recipe_name)
    folder = folder or Path("reports") / recipe_name

    def run(part: str) -> "tuple[LotOutcome, list[DeviceLine]]":
        results = folder / f"results{part}"
        outcome, lines = _inspected(
            recipe, folder / f"frames{part}", results, jobs=jobs, quiet=quiet
        )
        tell_outcome(outcome, lines, results, quiet=quiet, as_json=as_json)
        return outcome, lines

    if recipe_name == "demo":
        ctx.exit(_held_against_truth(run, folder, seed=seed, as_json=as_json, quiet=quiet))
    ctx.exit(_of_a_kind(run, recipe_name, folder, seed=seed, as_json=as_json, quiet=quiet))


def _inspected(
    recipe: "Recipe", frames: Path, results: Path, *, jobs: int | None, quiet: bool
) -> "tuple[LotOutcome, list[DeviceLine]]":
    from sensorgrade.cli.progress import shown_progress
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.inspection import inspect_lot
    from sensorgrade.lot.engine import LotOptions, run_folder
    from sensorgrade.lot.summary import device_lines

    devices = find_devices([frames], recipe)
    results.mkdir(parents=True, exist_ok=True)
    with run_folder(results) as ledger, shown_progress(quiet=quiet) as report:
        outcome = inspect_lot(
            devices, recipe, ledger=ledger, options=LotOptions(jobs=jobs), report=report
        )
        return outcome, device_lines(ledger)


Run = Callable[[str], "tuple[LotOutcome, list[DeviceLine]]"]


def _held_against_truth(run: Run, folder: Path, *, seed: int, as_json: bool, quiet: bool) -> int:
    """The demonstration's own lot; its exit status."""
    from sensorgrade.simulate.demo import demo_lot, write_demo

    lot = demo_lot()
    if not quiet and not as_json:
        click.echo(f"Simulating {len(lot)} devices into {folder / 'frames'} ...", err=True)
    write_demo(lot, folder / "frames", seed=seed)
    outcome, lines = run("")
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
    return NOT_INSPECTED if outcome.stopped or outcome.failed else int(bool(wrong))


def _of_a_kind(
    run: Run, recipe_name: str, folder: Path, *, seed: int, as_json: bool, quiet: bool
) -> int:
    """Devices of the recipe's model, and of the model after a test where there is one."""
    from sensorgrade.errors import RequestError
    from sensorgrade.recipe.load import load_options
    from sensorgrade.simulate.lot import Simulation, find_model, model_names, write_lot

    if recipe_name not in model_names():
        raise RequestError(
            f"--recipe {recipe_name}: no simulated devices belong to it; there are some for demo,"
            f" {', '.join(name for name in model_names() if not name.endswith('-after'))}"
        )
    parts = [""] + ["-after"] * (f"{recipe_name}-after" in model_names())
    for part in parts:
        simulation = load_options(find_model(recipe_name + part), Simulation)
        frames = folder / f"frames{part}"
        if not quiet and not as_json:
            click.echo(f"Simulating {simulation.devices} devices into {frames} ...", err=True)
        write_lot(simulation, frames, devices=simulation.devices, seed=seed)
        outcome, _ = run(part)
        if outcome.stopped or outcome.failed:
            return NOT_INSPECTED
    if len(parts) == 2 and not quiet:
        click.echo(
            "see what changed with:"
            f" sensorgrade compare {folder / 'results'} {folder / 'results-after'}",
            err=as_json,
        )
    return 0
