"""``sensorgrade check``: which frames are there, what is wrong with them, what they can decide."""

import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from sensorgrade.masters.check import Checked


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade check frames/ --recipe two-output-ccd\n"
    "  sensorgrade check frames/ --recipe mine.yaml --json\n\n"
    "Exit status: 0 no finding stands against a limit; 1 some limit cannot be decided or some"
    " frame was left out; 2 the request is wrong; 3 some device has no usable frames."
)
@click.argument(
    "sources", nargs=-1, required=True, metavar="SOURCE...", type=click.Path(path_type=Path)
)
@click.option("--recipe", "recipe_name", required=True, help="File, or name of a ready recipe.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context, sources: tuple[Path, ...], recipe_name: str, as_json: bool, quiet: bool
) -> None:
    """Say which frames are in SOURCE and what is wrong or missing.

    SOURCE is the folder of one device, of many device folders, or of the frames of many devices
    told apart by serial. A sample of rows of every frame is read; nothing is measured and nothing
    is written.
    """
    from sensorgrade.api import load_recipe
    from sensorgrade.masters.check import checked

    recipe = load_recipe(recipe_name)
    devices = []
    for one in checked(sources, recipe):
        devices.append(one)
        if not quiet and not as_json:
            _print_device(one)
    if as_json:
        click.echo(json.dumps([_document(one) for one in devices], indent=1, ensure_ascii=False))
    elif not quiet:
        findings = sum(len(one.device.findings) for one in devices)
        click.echo(f"{len(devices)} device(s), {findings} finding(s)")
    ctx.exit(max(map(_status, devices)))


def _status(one: "Checked") -> int:
    if not one.device.stacks:
        return 3
    errors = any(finding.severity == "error" for finding in one.device.findings)
    return int(errors or any(outlook.decidable is False for outlook in one.outlooks))


def _print_device(one: "Checked") -> None:
    device = one.device
    click.echo(device.serial)
    for stack in device.stacks:
        click.echo(f"  {len(stack.frames):4} x {stack.name}")
    if not device.stacks:
        click.echo("  no usable frames")
    for finding in device.findings:
        click.echo(f"  {finding.severity}: {finding.where}: {finding.seen}; {finding.remedy}")
        if finding.undecides:
            click.echo(f"    cannot be decided: {', '.join(finding.undecides)}")
    decidable = [outlook.name for outlook in one.outlooks if outlook.decidable]
    if decidable:
        click.echo(f"  limits that can be decided: {', '.join(decidable)}")
    for outlook in one.outlooks:
        if outlook.decidable is False:
            click.echo(f"  limit on {outlook.name} cannot be decided: {outlook.lacking}")
        elif outlook.decidable is None:
            click.echo(f"  limit on {outlook.name}: shown only by an inspection")


def _document(one: "Checked") -> dict[str, Any]:
    device = one.device
    return {
        "serial": device.serial,
        "stacks": [
            {
                "kind": stack.kind,
                "name": stack.name,
                "exposure": stack.exposure,
                "temperature": stack.temperature,
                "level": stack.level,
                "wavelength": stack.wavelength,
                "frames": [frame.label for frame in stack.frames],
            }
            for stack in device.stacks
        ],
        "findings": [asdict(finding) for finding in device.findings],
        "limits": [asdict(outlook) for outlook in one.outlooks],
    }
