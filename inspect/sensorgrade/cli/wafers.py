"""Wafer maps and yields by place, as text."""

from collections import defaultdict
from collections.abc import Sequence
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from sensorgrade.lot.wafer import Die, LotPlaces, PartYield

SIGNS = {"accept": "A", "reject": "R", "undecided": "U", "ungraded": "-", "failed": "F"}


def print_places(places: "LotPlaces") -> None:
    """Print each wafer's map, then yields by wafer, radius and reticle place, then clustering."""
    from sensorgrade.recipe.document import printable

    wafers: defaultdict[str, list[Die]] = defaultdict(list)
    for die in places.dies:
        wafers[die.wafer].append(die)
    click.echo("A accepted, R rejected, U undecided, - ungraded, F not inspected")
    for name, group in wafers.items():
        click.echo(f"Wafer {printable(name)}")
        _print_map(group)
    _print_yields("wafer", places.wafers)
    _print_yields("radius", places.rings)
    _print_yields("place in the reticle", places.reticle)
    found = places.clustering
    chance = "at most 0.0001" if found.probability <= 1e-4 else f"{found.probability:.2g}"
    click.echo(
        f"Neighbouring pairs of dies not accepted: {found.pairs}; chance gives"
        f" {found.expected:.1f} ± {found.spread:.1f}, as many or more with probability {chance}"
    )


def _print_map(group: "Sequence[Die]") -> None:
    """One line for each row of dies, the least row on top; a space where there is no device."""
    signs = {(die.row, die.column): SIGNS[die.decision] for die in group}
    rows = [die.row for die in group]
    columns = [die.column for die in group]
    across = range(min(columns), max(columns) + 1)
    click.echo(f"  column {min(columns)} to {max(columns)}")
    for row in range(min(rows), max(rows) + 1):
        click.echo(
            f"  row {row:4}  {' '.join(signs.get((row, at), ' ') for at in across)}".rstrip()
        )


def _print_yields(label: str, parts: "tuple[PartYield, ...]") -> None:
    from sensorgrade.recipe.document import printable

    if parts:
        click.echo(f"Yield by {label}, with its 95 % interval")
    for part in parts:
        click.echo(
            f"  {printable(part.part)}: {part.accepted} of {part.dies},"
            f" {100 * part.accepted / part.dies:.1f} %"
            f" ({100 * part.interval.low:.1f} to {100 * part.interval.high:.1f} %)"
        )
