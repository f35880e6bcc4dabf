"""``sensorgrade plan``: how many frames each limit needs to be decided."""

import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from sensorgrade.grading.expected_uncertainty import ExpectedDevice, FrameSet
    from sensorgrade.grading.plan import LimitPlan


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade plan --recipe two-output-ccd --bias 10 --darks 5 --exposure 60\n"
    '  sensorgrade plan --recipe mine.yaml --like reports/lot7 --expect "read_noise=4 electron"\n\n'
    "Exit status: 0 the given frames decide every limit that can be foretold; 1 some need more;"
    " 2 the request is wrong."
)
@click.option("--recipe", "recipe_name", required=True, help="Recipe file, or a ready recipe.")
@click.option(
    "--like", type=click.Path(path_type=Path), help="Run of like devices, for what to expect."
)
@click.option("--expect", multiple=True, metavar="NAME=VALUE", help="What to expect instead.")
@click.option("--bias", default=10, show_default=True, type=click.IntRange(min=0))
@click.option("--darks", default=5, show_default=True, type=click.IntRange(min=0))
@click.option(
    "--exposure",
    default=60.0,
    show_default=True,
    type=click.FloatRange(min=0, min_open=True),
    help="Of the darks [s].",
)
@click.option(
    "--pairs",
    default=1,
    show_default=True,
    type=click.IntRange(min=0),
    help="Flat pairs at each level of light.",
)
@click.option("--levels", default=8, show_default=True, type=click.IntRange(min=0))
@click.option(
    "--flats",
    default=10,
    show_default=True,
    type=click.IntRange(min=0),
    help="Flats for the master, at half saturation.",
)
@click.option(
    "--distance",
    default=10.0,
    show_default=True,
    type=click.FloatRange(min=0, min_open=True),
    help="How far inside each limit the device lies [% of the limit].",
)
@click.option(
    "--power",
    default=90.0,
    show_default=True,
    type=click.FloatRange(50, 99.99),
    help="Chance with which it is to be decided [%].",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    recipe_name: str,
    like: Path | None,
    expect: tuple[str, ...],
    bias: int,
    darks: int,
    exposure: float,
    pairs: int,
    levels: int,
    flats: int,
    distance: float,
    power: float,
    as_json: bool,
    quiet: bool,
) -> None:
    """Say how many frames each limit of a recipe needs to be decided.

    A device that lies a stated distance inside a limit is to be accepted with the recipe's
    confidence. The plan says what the given frames can decide, and the fewest that would do.
    What the device is like comes from the recipe's limits, from an earlier run, or from --expect.
    """
    from sensorgrade.api import load_recipe
    from sensorgrade.errors import RequestError
    from sensorgrade.grading.expected_device import expected_device
    from sensorgrade.grading.expected_uncertainty import FrameSet
    from sensorgrade.grading.plan import frame_plan
    from sensorgrade.lot.stored import stored_lot

    if unsplit := [text for text in expect if "=" not in text]:
        raise RequestError(f'--expect {unsplit[0]}: expected NAME=VALUE, "read_noise=4 electron"')
    recipe = load_recipe(recipe_name)
    device = expected_device(
        recipe,
        like=stored_lot(like).devices if like is not None else (),
        stated={name: value for name, _, value in (text.partition("=") for text in expect)},
    )
    given = FrameSet(
        bias=bias, darks=darks, dark_exposure=exposure, pairs=pairs, levels=levels, flats=flats
    )
    plans = frame_plan(recipe, device, given=given, distance=distance, power=power)
    if as_json:
        click.echo(
            json.dumps(
                {
                    "expected": asdict(device),
                    "given": asdict(given),
                    "limits": [asdict(plan) for plan in plans],
                },
                indent=1,
            )
        )
    elif not quiet:
        _print_device(device)
        if not plans:
            click.echo("The recipe has no limits, so there is nothing to plan for")
        for plan in plans:
            click.echo(_line(plan, given, power))
    ctx.exit(int(any(plan.given is not None and plan.given > plan.needed for plan in plans)))


def _print_device(device: "ExpectedDevice") -> None:
    from dataclasses import fields

    click.echo("Expected of an output; state others with --expect:")
    for field in fields(device):
        declared = field.metadata["declared"]
        value = f"{getattr(device, field.name):.6g} {declared.unit or ''}".rstrip()
        click.echo(f"  {field.name:16} {value:20} {declared.help}")


def _line(plan: "LimitPlan", given: "FrameSet", power: float) -> str:
    """One limit's plan in one paragraph."""
    from sensorgrade.grading.sentence import percent, stated
    from sensorgrade.wording import number_text, unit_text

    unit = f" {unit_text(plan.limit.unit)}".rstrip()
    head = f"{plan.grade}: {stated(plan.limit)}"
    if plan.given is None and plan.enough is None:
        return f"{head}\n  {plan.note}"
    text = f"{head}\n  needs u = {number_text(plan.needed, 2)}{unit} to decide"
    text += f" {number_text(plan.distance, 3)}{unit} inside"
    if plan.given is None or plan.chance is None:
        text += "; the given frames cannot measure it"
    else:
        text += (
            f"; the given frames reach {number_text(plan.given, 2)}{unit}, decide it with"
            f" {percent(plan.chance)} chance, and anything"
            f" {number_text(plan.decidable or 0.0, 3)}{unit} inside with {power:g} %"
        )
    if plan.enough is None:
        return f"{text}\n  {plan.note}"
    changes = [
        f"{name.replace('_', ' ')} {now:g} -> {then:g}"
        for name, now in asdict(given).items()
        if (then := getattr(plan.enough, name)) != now
    ]
    return f"{text}\n  take {', '.join(changes)}" if changes else f"{text}: enough"
