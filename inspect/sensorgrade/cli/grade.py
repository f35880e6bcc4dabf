"""``sensorgrade grade``: stored measurements against other limits, and what the limits cost."""

import json
from dataclasses import asdict, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from sensorgrade.grading.what_if import YieldCurve, YieldGrid
    from sensorgrade.lot.regrade import Regraded, WhatIf


LISTED = 10  # outliers of a limit that are printed; --json has them all


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade grade reports/lot7 --limits tighter.yaml\n"
    "  sensorgrade grade reports/lot7 --limits recipe.yaml --accept 180 --json\n"
    "  sensorgrade grade reports/lot7 --limits recipe.yaml --vary read_noise --vary hot_pixels\n\n"
    "Exit status: 0 every device accepted; 1 some rejected or undecided; 2 the request is wrong."
)
@click.argument("run", type=click.Path(path_type=Path))
@click.option(
    "--limits",
    "limits_name",
    required=True,
    help="Recipe (a file, or a ready one), or a file of grades, decision, lot and thresholds"
    " (stages: pixels) alone.",
)
@click.option("--grade", "grade_name", help="Grade to examine; the lowest if not given.")
@click.option(
    "--accept", type=click.IntRange(min=1), help="Find what to concede so that so many reach it."
)
@click.option(
    "--vary",
    multiple=True,
    metavar="NAME",
    help="Show the yield against this limit's bound; give two for one against the other.",
)
@click.option(
    "--statistics",
    is_flag=True,
    help="Show how the lot stands to each limit: spread, capability, outliers.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing; the exit status tells.")
@click.pass_context
def command(
    ctx: click.Context,
    run: Path,
    limits_name: str,
    grade_name: str | None,
    accept: int | None,
    vary: tuple[str, ...],
    statistics: bool,
    as_json: bool,
    quiet: bool,
) -> None:
    """Grade the devices of RUN again, without touching a frame.

    RUN is the folder an inspection wrote to. It is left as it is; the answer is printed: yields
    with 95 % intervals, devices whose grade changes, what each limit costs.
    """
    from sensorgrade.errors import RequestError
    from sensorgrade.lot.regrade import regrade, what_if, yield_against
    from sensorgrade.recipe.library import find_recipe
    from sensorgrade.stages import vocabulary

    if len(vary) > 2:
        raise RequestError("--vary: yields are shown against one limit or two, not more")
    regraded = regrade(run, limits=find_recipe(limits_name), vocabulary=vocabulary())
    recipe = regraded.recipe
    examined = shown = None
    if recipe.grades:
        examined = what_if(
            regraded.devices,
            recipe=recipe,
            grade_name=grade_name or recipe.grades[-1].name,
            wanted=accept,
        )
        shown = yield_against(examined.tightest, vary, recipe=recipe)
    if as_json:
        document = _document(regraded, examined, shown)
        click.echo(json.dumps(document, indent=1, ensure_ascii=False))
    elif not quiet:
        _print_grades(regraded)
        if examined is not None:
            _print_costs(examined, accept)
            if statistics:
                _print_statistics(examined)
            _print_yields(shown)
    done = all(one.decision in ("accept", "ungraded") for one in regraded.graded)
    ctx.exit(0 if done else 1)


def _print_grades(regraded: "Regraded") -> None:
    from sensorgrade.lot.recounting import moved_text

    if regraded.moved:
        moved = ", ".join(moved_text(regraded.recipe, regraded.moved))
        click.echo(f"Counted again from the pixels that were kept: {moved}")
    devices = len(regraded.graded)
    undecided = sum(one.decision == "undecided" for one in regraded.graded)
    rejected = sum(one.decision == "reject" for one in regraded.graded)
    click.echo(f"{devices} devices, {rejected} rejected, {undecided} undecided")
    for of_grade in regraded.yields:
        wilson, exact = of_grade.wilson, of_grade.clopper_pearson
        click.echo(
            f"  {of_grade.grade} or better: {of_grade.reached}"
            f" ({_percent(of_grade.reached / devices if devices else 0)},"
            f" 95 % interval {_percent(wilson.low)} to {_percent(wilson.high)} by Wilson,"
            f" {_percent(exact.low)} to {_percent(exact.high)} by Clopper and Pearson)"
        )
    if regraded.lot is not None:
        click.echo(f"Lot: {regraded.lot.outcome}. {regraded.lot.sentence}")
    changed = regraded.changed
    click.echo(f"{len(changed)} devices change")
    for at in changed:
        now = regraded.graded[at]
        before = regraded.stored.grades[at] or regraded.stored.decisions[at]
        serial = regraded.stored.devices[at].serial
        reason = f"  {now.reasons[0]}" if now.reasons else ""
        click.echo(f"  {serial}: {before} -> {now.grade or now.decision}{reason}")


def _print_costs(examined: "WhatIf", accept: int | None) -> None:
    from sensorgrade.grading.sentence import stated
    from sensorgrade.wording import number_text

    click.echo(f"Limits of {examined.grade}, the dearest first")
    for cost in examined.costs:
        if cost.missed:
            parts = [f"missed by {cost.missed} device{'s' if cost.missed > 1 else ''}"]
            if cost.alone:
                parts.append(f"{cost.alone} of them by this alone")
            if cost.undecidable:
                parts.append(f"{cost.undecidable} for want of a value")
            click.echo(f"  {stated(cost.limit)}: {', '.join(parts)}")
    if accept is None:
        return
    if examined.concessions is None:
        devices = len(examined.tightest.serials)
        why = "too many lack a measurement" if accept <= devices else f"there are {devices}"
        click.echo(f"No easing accepts {accept} devices: {why}")
        return
    if not examined.concessions.eased:
        click.echo(f"{examined.concessions.accepted} devices are accepted as the limits stand")
        return
    click.echo(f"To accept {accept} devices, concede")
    for eased in examined.concessions.eased:
        click.echo(
            f"  {stated(replace(eased.limit, bound=eased.bound))}"
            f" in place of {number_text(eased.limit.bound)}"
        )
    click.echo(
        f"  which accepts {examined.concessions.accepted}, gaining"
        f" {', '.join(examined.concessions.gained)}"
    )


def _print_statistics(examined: "WhatIf") -> None:
    from sensorgrade.grading.sentence import stated
    from sensorgrade.wording import number_text, unit_text

    click.echo(f"The lot against the limits of {examined.grade}")
    for one in examined.statistics:
        unit = f" {unit_text(one.limit.unit)}".rstrip()
        click.echo(
            f"  {stated(one.limit)}: median {number_text(one.median)}, robust spread"
            f" {number_text(one.robust_spread, 3)}, from {number_text(one.least)} to"
            f" {number_text(one.largest)}{unit} in {one.values} values"
        )
        if one.capability is not None:
            index, doubt = one.capability.index, one.capability.standard_uncertainty
            click.echo(f"    Cpk {index:.2f} ± {doubt:.2f}")
        if one.outliers:
            places = ", ".join(
                f"{each.serial}{'' if each.scope == 'device' else ' ' + each.scope}"
                f" {number_text(each.value)}"
                for each in one.outliers[:LISTED]
            )
            more = len(one.outliers) - LISTED
            click.echo(f"    outliers: {places}{f', and {more} more' if more > 0 else ''}")


def _print_yields(shown: "YieldCurve | YieldGrid | None") -> None:
    from sensorgrade.grading.sentence import varied
    from sensorgrade.grading.what_if import YieldCurve
    from sensorgrade.wording import number_text

    if shown is None:
        return
    if isinstance(shown, YieldCurve):
        click.echo(f"Devices accepted, {varied(shown.limit)}")
        for bound, accepted in zip(shown.bounds, shown.accepted, strict=True):
            mark = "  as the limit stands" if bound == shown.limit.bound else ""
            click.echo(f"  {number_text(bound):>10}  {accepted:>6}{mark}")
        return
    click.echo(f"Devices accepted, down {varied(shown.first)}, across {varied(shown.second)}")
    heads = "".join(f"{number_text(bound):>10}" for bound in shown.second_bounds)
    click.echo(f"  {'':>10}{heads}")
    for bound, row in zip(shown.first_bounds, shown.accepted, strict=True):
        cells = "".join(f"{accepted:>10}" for accepted in row)
        click.echo(f"  {number_text(bound):>10}{cells}")


def _percent(share: float) -> str:
    return f"{100 * share:.1f} %"


def _listed(record: dict[str, Any]) -> dict[str, Any]:
    """Arrays as lists, for JSON."""
    return {name: getattr(value, "tolist", lambda v=value: v)() for name, value in record.items()}


def _document(
    regraded: "Regraded", examined: "WhatIf | None", shown: "YieldCurve | YieldGrid | None"
) -> dict[str, Any]:
    return {
        "moved": list(regraded.moved),
        "devices": [
            {
                "serial": device.serial,
                "grade": now.grade,
                "decision": now.decision,
                "reasons": list(now.reasons),
                "grade_before": before,
                "decision_before": decision,
            }
            for device, now, before, decision in zip(
                regraded.stored.devices,
                regraded.graded,
                regraded.stored.grades,
                regraded.stored.decisions,
                strict=True,
            )
        ],
        "yields": [asdict(one) for one in regraded.yields],
        "yields_against": None if shown is None else _listed(asdict(shown)),
        "lot": None if regraded.lot is None else asdict(regraded.lot),
        "examined": None
        if examined is None
        else {
            "grade": examined.grade,
            "costs": [asdict(one) for one in examined.costs],
            "statistics": [asdict(one) for one in examined.statistics],
            "concessions": None if examined.concessions is None else asdict(examined.concessions),
        },
    }
