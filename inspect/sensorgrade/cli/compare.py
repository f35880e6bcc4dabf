"""``sensorgrade compare``: the same devices before and after, or on several benches."""

import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    import numpy as np

    from sensorgrade.lot.compare_runs import BenchStudy, DefectsCompared, RunsCompared


LISTED = 20  # new or gone defects of a device that are printed without --all


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade compare reports/before reports/after\n"
    "  sensorgrade compare --repeat a=reports/a1 a=reports/a2 b=reports/b1 b=reports/b2\n\n"
    "Exit status: 0 nothing changed beyond the doubt; 1 something did, or the bench's scatter is"
    " more than the uncertainties state; 2 the request is wrong."
)
@click.argument("runs", nargs=-1, required=True, metavar="RUN RUN...")
@click.option("--repeat", is_flag=True, help="Runs are repeats of the same: each BENCH=RUN.")
@click.option("--recipe", "recipe_name", help="Whose limits the bench is held against.")
@click.option(
    "--reach",
    default=0,
    show_default=True,
    type=click.IntRange(min=0),
    help="Pixels by which a defect's position may differ.",
)
@click.option("--all", "every", is_flag=True, help="Print what did not change as well.")
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    runs: tuple[str, ...],
    repeat: bool,
    recipe_name: str | None,
    reach: int,
    every: bool,
    as_json: bool,
    quiet: bool,
) -> None:
    """Compare two runs of the same devices, before and after; or study benches with --repeat.

    Devices are matched by serial, defects by kind and position. A change counts when chance
    would show one so large, among all that are compared, in fewer than one comparison in twenty.
    """
    if repeat:
        _repeat(ctx, runs, recipe_name, as_json, quiet)
        return
    from sensorgrade.errors import RequestError
    from sensorgrade.lot.compare_runs import compare_runs

    if len(runs) != 2:
        raise RequestError(f"compare takes two runs, found {len(runs)}; more of them need --repeat")
    found = compare_runs(Path(runs[0]), Path(runs[1]), reach=reach)
    if as_json:
        click.echo(json.dumps(_document(found), indent=1))
    elif not quiet:
        _print_changes(found, every)
    moved = any(change.significant for change in found.numbers.changes)
    sure = any(
        set(one.change.new) - set(one.change.doubtful_new)
        or set(one.change.gone) - set(one.change.doubtful_gone)
        for one in found.defects
    )
    ctx.exit(int(moved or sure))


def _repeat(
    ctx: click.Context,
    runs: tuple[str, ...],
    recipe_name: str | None,
    as_json: bool,
    quiet: bool,
) -> None:
    from sensorgrade.api import load_recipe
    from sensorgrade.lot.compare_runs import bench_study

    recipe = None
    if recipe_name is not None:
        recipe = load_recipe(recipe_name)
    named = [text.partition("=") for text in runs]
    studies = bench_study(
        [(name, Path(path)) if equals else ("bench", Path(name)) for name, equals, path in named],
        recipe=recipe,
    )
    if as_json:
        click.echo(json.dumps([asdict(study) for study in studies], indent=1))
    elif not quiet:
        for study in studies:
            _print_study(study)
    ctx.exit(int(any((study.study.stated_ratio_low or 0.0) > 1.0 for study in studies)))


def _print_changes(found: "RunsCompared", every: bool) -> None:
    from sensorgrade.wording import doubt_text, name_text, number_text, unit_text

    numbers = found.numbers
    for label, serials in (("before", numbers.only_before), ("after", numbers.only_after)):
        if serials:
            click.echo(f"Only {label}: {', '.join(serials)}")
    for serial, was, now in found.regraded:
        click.echo(f"{serial}: {was} -> {now}")
    shown = [change for change in numbers.changes if every or change.significant]
    click.echo(f"{sum(c.significant for c in shown)} of {len(numbers.changes)} numbers changed")
    for change in shown:
        place = "" if change.scope == "device" else f" of {change.scope}"
        unit = f" {unit_text(change.unit)}".rstrip()
        deviation = ""
        if change.deviation is not None:
            deviation = f" ({change.deviation:+.1f} uncertainties)".replace("-", "−")
        click.echo(
            f"  {change.serial}: {name_text(change.name)}{place}"
            f" {number_text(change.before, 5)} -> {number_text(change.after, 5)}{unit}, by"
            f" {doubt_text(change.difference, change.standard_uncertainty, '')}{unit}{deviation}"
        )
    for one in found.defects:
        _print_defects(one, every)
    click.echo("Agreement over all devices and places")
    for name in numbers.agreements:
        unit = f" {unit_text(name.unit)}".rstrip()
        explained = "" if name.deviation is None else f"; {name.deviation:.2f} of the stated doubt"
        click.echo(
            f"  {name_text(name.name)}: {doubt_text(name.bias, name.bias_uncertainty, '')}{unit} on"
            f" average, 95 % of differences from"
            f" {number_text(name.low, 3)} to {number_text(name.high, 3)}{unit}{explained}"
        )


def _print_defects(one: "DefectsCompared", every: bool) -> None:
    change = one.change
    if not (change.new or change.gone or every):
        return
    click.echo(
        f"  {one.serial}: defects: {len(change.kept)} kept, {len(change.new)} new"
        f" ({len(change.doubtful_new)} doubtful), {len(change.gone)} gone"
        f" ({len(change.doubtful_gone)} doubtful)"
    )
    for label, table, rows, doubtful in (
        ("new", one.after, change.new, change.doubtful_new),
        ("gone", one.before, change.gone, change.doubtful_gone),
    ):
        for row in rows if every else rows[:LISTED]:
            hedge = ", near its threshold" if row in doubtful else ""
            click.echo(
                f"    {label}: {table['kind'][row]} at x {table['column'][row] + 1},"
                f" y {table['row'][row] + 1}{hedge}"
            )
        if len(rows) > LISTED and not every:
            click.echo(f"    {label}: {len(rows) - LISTED} more; --all or --json tells them all")


def _print_study(study: "BenchStudy") -> None:
    from sensorgrade.grading.sentence import allowed
    from sensorgrade.wording import name_text, unit_text

    unit = f" {unit_text(study.unit)}".rstrip()
    place = "" if study.scope == "device" else f" of {study.scope}"
    found = study.study
    click.echo(
        f"{name_text(study.name)}{place}, {study.devices} devices, mean {study.mean:.5g}{unit}"
    )
    click.echo(
        f"  repeatability {found.repeatability:.3g}{unit}, between benches"
        f" {found.reproducibility:.3g}{unit}, together {found.together:.3g}{unit}; devices differ"
        f" by {found.devices:.3g}{unit}"
    )
    click.echo(
        f"  {found.share_of_variation:.3g} % of the variation; {found.categories} groups of devices"
        " can be told apart"
    )
    if found.stated_ratio is not None:
        low, high = found.stated_ratio_low or 0.0, found.stated_ratio_high or 0.0
        covers = "more than" if low > 1.0 else "less than" if high < 1.0 else "as"
        click.echo(
            f"  the scatter found is {found.stated_ratio:.2f} ({low:.2f} to {high:.2f}) times the"
            f" stated uncertainty: {covers} stated"
        )
    for limit, share in study.shares:
        click.echo(f"  takes {share:.3g} % of the tolerance of {allowed(limit)}")


def _document(found: "RunsCompared") -> dict[str, object]:
    return {
        "regraded": [
            {"serial": serial, "before": was, "after": now} for serial, was, now in found.regraded
        ],
        "only_before": found.numbers.only_before,
        "only_after": found.numbers.only_after,
        "changes": [asdict(change) for change in found.numbers.changes],
        "agreements": [asdict(one) for one in found.numbers.agreements],
        "defects": [
            {
                "serial": one.serial,
                "kept": len(one.change.kept),
                "new": [_position(one.after[row]) for row in one.change.new],
                "gone": [_position(one.before[row]) for row in one.change.gone],
            }
            for one in found.defects
        ],
    }


def _position(defect: "np.void") -> dict[str, object]:
    """A defect as JSON has it; x and y as FITS counts them."""
    return {
        "kind": str(defect["kind"]),
        "x": int(defect["column"]) + 1,
        "y": int(defect["row"]) + 1,
        "probability": float(defect["probability"]),
    }
