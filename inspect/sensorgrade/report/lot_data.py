"""What a lot's page holds, gathered from the results of its devices."""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from markupsafe import Markup
from numpy.typing import NDArray

from sensorgrade.grading.decision import Graded
from sensorgrade.grading.interval import wilson
from sensorgrade.grading.lot_statistics import lot_decision, yields
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result import DeviceResult
from sensorgrade.lot.summary import DeviceLine
from sensorgrade.lot.wafer import (
    Clustering,
    PartYield,
    clustering,
    dies,
    radius_yields,
    wafer_yields,
)
from sensorgrade.recipe.model import Recipe
from sensorgrade.report.figures import Figure, figure
from sensorgrade.report.lot_limits import GradeCosts, grade_costs, tightest_bounds, what_if_data
from sensorgrade.report.lot_plots import course, distribution, limits_on
from sensorgrade.report.lot_rows import (
    PRINTED_ROWS,
    STATES,
    DeviceRow,
    device_lines,
    device_rows,
    page_address,
    script_rows,
    time_text,
)
from sensorgrade.report.lot_values import LotQuantity, lot_quantities
from sensorgrade.report.page import CAUTION, policy, static_text, told
from sensorgrade.report.wafer_map import WaferDrawing, wafer_drawings
from sensorgrade.wording import name_text, percent_text

ALWAYS = ("serial", "state", "reason")
WITHOUT_GRADE = ("reject", "undecided", "ungraded", "failed")


@dataclass(frozen=True, slots=True)
class Share:
    """One piece of the lot; ``look`` is its class in the style sheet."""

    label: str
    look: str
    devices: int
    percent: float


@dataclass(frozen=True, slots=True)
class QuantityFigures:
    """The plots of one quantity."""

    name: str
    distribution: Figure
    course: Figure | None


@dataclass(frozen=True, slots=True)
class WaferPart:
    """A part of the wafers with its yield, in words and in % for its bar."""

    part: str
    text: str
    percent: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LotPage:
    """Everything that the template lot.html receives."""

    style: Markup = told("The style sheet, put into the page.")
    script: Markup = told("The script, put into the page.")
    policy: str = told("The content security policy that shuts out everything else.")
    version: str = told("The program's version, as the first device's provenance has it.")
    name: str = told("The lot's name: that of its folder.")
    facts: tuple[tuple[str, str], ...] = told("Label and text: devices, lots, recipe, dates.")
    accepted: int = told("Devices that met a grade.")
    inspected: int = told("Devices that were inspected.")
    yield_text: str = told("The share accepted of the devices inspected.")
    interval_text: str = told("What the share says of the process, with 95 % confidence.")
    outcome: str = told("The lot's own decision by its sampling plan, plain without one.")
    lot_sentence: str = told("The sentence of that decision, empty without a plan.")
    shares: tuple[Share, ...] = told("The devices by grade, then those without one.")
    grade_yields: tuple[tuple[str, int, str, str], ...] = told(
        "Grade, devices that reach it or a better one, their share, its 95 % interval."
    )
    other_recipe: int = told("Devices whose grade comes from another recipe than this page's.")
    costs: tuple[GradeCosts, ...] = told("What each limit costs, grade by grade.")
    limited: tuple[QuantityFigures, ...] = told("Plots of the quantities that have limits.")
    unlimited: tuple[QuantityFigures, ...] = told("Plots of the other quantities.")
    wafers: tuple[WaferDrawing, ...] = told("The wafers, where die positions are known.")
    wafer_parts: tuple[WaferPart, ...] = told("Yield wafer by wafer.")
    rings: tuple[WaferPart, ...] = told("Yield in rings of equal area.")
    clustering: str = told("Whether failed dies stand together, in a sentence.")
    rows: tuple[DeviceRow, ...] = told("The first rows of the device table.")
    devices: int = told("How many devices there are, failed ones too.")
    columns: tuple[tuple[str, str], ...] = told("Key and heading of the table's columns.")
    recipe_text: str = told("The recipe as it was written.")
    recipe_sha256: str = told("The recipe's digest.")
    caution: str = told("What a grade does not do, and what is dangerous at a bench.")
    data: dict[str, Any] = told("Devices, numbers and limits in the form that the script reads.")


def lot_data(
    results: Sequence[DeviceResult], *, failures: Sequence[Failure], recipe: Recipe, name: str
) -> LotPage:
    """The page's data; see `lot_page.lot_page`."""
    lines = device_lines(results, failures)
    rows = device_rows(lines, results)
    quantities = lot_quantities(results)
    bounds = tightest_bounds(results, recipe)
    graded = [one.graded for one in results]
    decision = lot_decision([one.serial for one in results], graded, plan=recipe.lot)
    accepted = sum(one.decision == "accept" for one in graded)
    inspected = len(results)
    script = static_text("numbers.js", "lot_table.js", "lot_what_if.js", "lot_wafers.js")
    placed = sorted(dies(lines), key=lambda die: _numbered(die.wafer))
    taken = np.array([np.nan if one.taken is None else one.taken for one in results])
    figures = [
        (bool(limits_on(one.name, recipe.grades)), _figures(one, index, taken, recipe))
        for index, one in enumerate(quantities)
    ]
    return LotPage(
        style=static_text("page.css", "lot.css"),
        script=script,
        policy=policy(script),
        version=results[0].provenance.versions.get("sensorgrade", "") if results else "",
        name=name,
        facts=_facts(results, lines, recipe),
        accepted=accepted,
        inspected=inspected,
        yield_text=percent_text(accepted, inspected),
        interval_text=_interval_text(accepted, inspected),
        outcome="plain" if decision is None else decision.outcome,
        lot_sentence="" if decision is None else decision.sentence,
        shares=_shares(lines, [level.name for level in recipe.grades]),
        grade_yields=_yields(graded, recipe),
        other_recipe=sum(one.provenance.recipe_sha256 != recipe.sha256 for one in results),
        costs=grade_costs(bounds, recipe),
        limited=tuple(drawing for has_limits, drawing in figures if has_limits),
        unlimited=tuple(drawing for has_limits, drawing in figures if not has_limits),
        wafers=wafer_drawings(
            placed,
            grades=[level.name for level in recipe.grades],
            numbers={line.serial: index for index, line in enumerate(lines)},
            links={line.serial: page_address(line) for line in lines if page_address(line)},
        )
        if placed
        else (),
        wafer_parts=tuple(map(_part, wafer_yields(placed))),
        rings=tuple(map(_part, radius_yields(placed))),
        clustering=_clustered(clustering(placed)) if placed else "",
        rows=rows[:PRINTED_ROWS],
        devices=len(rows),
        columns=_columns(rows),
        recipe_text=recipe.text,
        recipe_sha256=recipe.sha256,
        caution=CAUTION,
        data={"devices": script_rows(rows, quantities), "whatIf": what_if_data(bounds, recipe)},
    )


def _facts(
    results: Sequence[DeviceResult], lines: Sequence[DeviceLine], recipe: Recipe
) -> tuple[tuple[str, str], ...]:
    """Label and text, only of what is known."""
    known = {"Devices": str(len(lines))}
    lots = sorted({line.lot for line in lines if line.lot is not None}, key=_numbered)
    if lots:
        known["Lot" if len(lots) == 1 else "Lots"] = _listed(lots)
    wafers = sorted({line.wafer for line in lines if line.wafer is not None}, key=_numbered)
    if wafers:
        known["Wafer" if len(wafers) == 1 else "Wafers"] = _listed(wafers)
    known["Recipe"] = recipe.name
    times = [one.taken for one in results if one.taken is not None]
    if times:
        known["First frame"] = f"{time_text(min(times))} UTC"
        known["Last device"] = f"{time_text(max(times))} UTC"
    return tuple(known.items())


def _numbered(name: str) -> list[tuple[int, str]]:
    """A name's place in order, numbers in it by their values: W9 comes before W10."""
    return [
        (int(part) if index % 2 else 0, part)
        for index, part in enumerate(re.split("([0-9]{1,18})", name))
    ]


def _listed(names: Sequence[str]) -> str:
    """A few names, or how many there are."""
    return ", ".join(names) if len(names) <= 6 else f"{len(names)}, {names[0]} to {names[-1]}"


def _interval_text(accepted: int, inspected: int) -> str:
    if not inspected:
        return "No device was inspected."
    interval = wilson(accepted, inspected)
    low, high = (f"{100 * one:.1f}" for one in (interval.low, interval.high))
    return (
        f"{accepted} of {inspected} inspected. If they stand for a process, its yield lies between"
        f" {low} and {high} % (95 % confidence)."
    )


def _shares(lines: Sequence[DeviceLine], grades: Sequence[str]) -> tuple[Share, ...]:
    """Pieces of the whole lot in order: grades from the best, then what has none."""
    by_grade = Counter(line.grade for line in lines if line.decision == "accept")
    by_decision = Counter(line.decision for line in lines)
    names = [*grades, *(str(name) for name in by_grade if name not in grades)]
    pieces = [
        (name, f"accept g{min(rank, 3)}", by_grade[name]) for rank, name in enumerate(names)
    ] + [(STATES[decision], decision, by_decision[decision]) for decision in WITHOUT_GRADE]
    return tuple(
        Share(label, look, number, round(100 * number / len(lines), 3))
        for label, look, number in pieces
        if number
    )


def _yields(graded: Sequence[Graded], recipe: Recipe) -> tuple[tuple[str, int, str, str], ...]:
    """Yield grade by grade; a grade that this recipe does not have, of another run, is none."""
    names = {level.name for level in recipe.grades}
    here = [one if one.grade in names else replace(one, grade=None) for one in graded]
    return tuple(
        (
            one.grade,
            one.reached,
            percent_text(one.reached, one.devices),
            f"{100 * one.wilson.low:.1f} to {100 * one.wilson.high:.1f} %",
        )
        for one in (yields(here, recipe=recipe) if here else ())
    )


def _figures(
    quantity: LotQuantity, index: int, taken: NDArray[np.float64], recipe: Recipe
) -> QuantityFigures:
    over_time = course(quantity, recipe.grades, taken=taken, key=f"time-{index}")
    return QuantityFigures(
        name_text(quantity.name),
        figure(distribution(quantity, recipe.grades, key=f"spread-{index}")),
        None if over_time is None else figure(over_time),
    )


def _part(one: PartYield) -> WaferPart:
    share = one.accepted / one.dies
    return WaferPart(
        one.part,
        f"{one.accepted} of {one.dies}, {percent_text(one.accepted, one.dies)}",
        round(100 * share, 2),
    )


def _clustered(found: Clustering) -> str:
    """Whether failed dies keep together, with what chance would give."""
    if found.expected == 0:
        return "Too few dies without a grade to say whether they stand together."
    text = (
        f"{found.pairs} {'pair' if found.pairs == 1 else 'pairs'} of neighbouring dies without a"
        " grade; chance would give"
        f" {found.expected:.1f} ± {found.spread:.1f}"
    )
    if found.probability < 0.01:
        return (
            f"{text} (probability {found.probability:.2g}): they stand together, look for a cause."
        )
    return f"{text} (probability {found.probability:.2g}): no sign that they stand together."


def _columns(rows: Sequence[DeviceRow]) -> tuple[tuple[str, str], ...]:
    """Columns that tell devices apart; the lot is among the facts on top where all share it."""
    every = (
        ("serial", "Device"),
        ("lot", "Lot"),
        ("wafer", "Wafer"),
        ("die", "Die (row, column)"),
        ("grade", "Grade"),
        ("state", "Decision"),
        ("reason", "Weightiest reason"),
        ("taken", "First frame (UTC)"),
    )
    return tuple(
        (key, heading)
        for key, heading in every
        if len({getattr(row, key) for row in rows}) > 1 or key in ALWAYS
    )
