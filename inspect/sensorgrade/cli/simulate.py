"""``sensorgrade simulate``: frames of a sensor whose truth is known."""

import json
from pathlib import Path

import click


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade simulate two-output-ccd --out frames/\n"
    "  sensorgrade simulate mine.yaml --out frames/ --devices 20 --seed 7\n"
    "  sensorgrade simulate two-output-ccd --show > mine.yaml\n\n"
    "Exit status: 0 written; 2 the model is wrong or the folder is in use."
)
@click.argument("model")
@click.option(
    "--out", "folder", type=click.Path(path_type=Path), help="New folder for the devices' frames."
)
@click.option("--devices", default=1, show_default=True, type=click.IntRange(1, 10_000))
@click.option("--seed", default=0, show_default=True, type=click.IntRange(min=0))
@click.option("--show", is_flag=True, help="Print the model as it stands, comments and all.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
def command(
    model: str,
    folder: Path | None,
    devices: int,
    seed: int,
    show: bool,
    as_json: bool,
    quiet: bool,
) -> None:
    """Write frames of simulated sensors as FITS files, with the truth about each.

    MODEL is a YAML file that describes sensor and frames, or the name of a ready model. Every
    device gets a folder: its frames, and truth.json with what is true of it. The same model and
    seed give the same frames.
    """
    from sensorgrade.errors import RequestError
    from sensorgrade.recipe.load import load_options
    from sensorgrade.simulate.lot import Simulation, find_model, write_lot

    path = find_model(model)
    if show:
        click.echo(path.read_text(encoding="utf-8"), nl=False)
        return
    if folder is None:
        raise RequestError("--out is missing: name the folder that shall hold the frames")
    simulation = load_options(path, Simulation)
    if folder.is_file() or (folder.is_dir() and any(folder.iterdir())):
        raise RequestError(f"{folder}: exists and is not empty; name a new folder")
    written = write_lot(simulation, folder, devices=devices, seed=seed)
    frames = sum(stack.frames for stack in simulation.plan.stacks)
    if as_json:
        click.echo(json.dumps({"devices": [str(path) for path in written], "frames": frames}))
    elif not quiet:
        click.echo(f"{devices} x {frames} frames in {folder}")
