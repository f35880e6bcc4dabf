"""What a device page holds, gathered from one device's results."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from itertools import groupby
from typing import Any

from markupsafe import Markup

from sensorgrade.defects.defect import DefectCount, Defects
from sensorgrade.lot.result import DeviceResult, InputFile
from sensorgrade.masters.master import Master, Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Recipe
from sensorgrade.report.bars import LIMIT_AT, BarGroup, bar_groups, closest
from sensorgrade.report.defect_rows import DefectRows, PrintedDefect, defect_rows
from sensorgrade.report.figures import Figure, figure, plots
from sensorgrade.report.marks import KindMark
from sensorgrade.report.page import CAUTION, policy, static_text, told
from sensorgrade.report.picture import (
    CENTRE,
    NO_VALUE,
    STEPS,
    TILE,
    Picture,
    picture,
)
from sensorgrade.report.tiles import tiles_around
from sensorgrade.wording import doubt_text, name_text, number_text, unit_text


@dataclass(frozen=True, slots=True)
class MeasuredRow:
    """One quantity, with a text for each place it was measured at."""

    name: str
    values: tuple[tuple[str, str, int], ...]


@dataclass(frozen=True, slots=True)
class CountRow:
    """One kind of defect: for each part of the device the number found and the expected one."""

    kind: str
    cells: tuple[tuple[str, str], ...]

    @property
    def some(self) -> bool:
        """Whether any was found, or may be there."""
        return any(found not in ("", "0") or expected for found, expected in self.cells)


@dataclass(frozen=True, slots=True)
class PictureFrame:
    """What stands around a picture: title, stretch as text, alternative text, thumbnail."""

    title: str
    note: str
    low: str
    high: str
    unit: str
    alt: str
    thumbnail: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DevicePage:
    """Everything that the template device.html receives."""

    style: Markup = told("The style sheet, put into the page.")
    script: Markup = told("The script, put into the page.")
    policy: str = told("The content security policy that shuts out everything else.")
    version: str = told("The program's version, as provenance has it.")
    serial: str = told("The device's serial number, as it was found in the frames.")
    identity: tuple[tuple[str, str], ...] = told("Label and text of lot, wafer, die, recipe, date.")
    decision: str = told("accept, reject, undecided or ungraded.")
    verdict: str = told("The decision as a word for the plate on top.")
    grade: str = told("The grade met, or words saying that none was.")
    reason: str = told("The one sentence that the decision turns on.")
    more_reasons: tuple[str, ...] = told("The other reasons, weightiest first.")
    limit_groups: tuple[BarGroup, ...] = told("Every limit as a bar, grade by grade.")
    limit_at: float = told("Where the limit stands on every bar, in % of its width.")
    pictures: tuple[PictureFrame, ...] = told("The masters that there are, as pictures.")
    no_picture: tuple[str, ...] = told("A sentence for each master that could not be made.")
    kinds: tuple[KindMark, ...] = told("The kinds of defect in the table, with their marks.")
    count_scopes: tuple[str, ...] = told("The parts of the device that defects are counted in.")
    counts: tuple[CountRow, ...] = told("The counts of each kind there is, part by part.")
    none_found: tuple[str, ...] = told("The kinds that were looked for and surely not found.")
    printed_defects: tuple[PrintedDefect, ...] = told("The first rows of the defect table.")
    defect_total: int = told("How many defects the device has.")
    defects_left_out: int = told("How many of them are in defects.ecsv only.")
    figures: tuple[Figure, ...] = told("The plots of the stages that ran.")
    not_measured: tuple[tuple[str, str], ...] = told("Stages that could not run, and why.")
    measured: tuple[MeasuredRow, ...] = told("Every measurement with its doubt, place by place.")
    findings: tuple[Finding, ...] = told("What the audit noticed, gravest first.")
    inputs: tuple[InputFile, ...] = told("The raw files that were used.")
    recipe_text: str = told("The recipe as it was written.")
    recipe_sha256: str = told("The recipe's digest.")
    versions: tuple[tuple[str, str], ...] = told("Program and libraries with their versions.")
    caution: str = told("What a grade does not do, and what is dangerous at a bench.")
    data: dict[str, Any] = told("Pictures and defects in the form that the script reads.")


VERDICTS = {
    "accept": "Accepted",
    "reject": "Rejected",
    "undecided": "Undecided",
    "ungraded": "Not graded",
}
LEAST_DOUBT = 0.05  # of a count; what is surer is told without it
GRAVITY = {"error": 0, "warning": 1, "note": 2}


def device_data(
    result: DeviceResult,
    *,
    masters: Masters,
    defects: Defects,
    stages: Mapping[str, StageResult],
    recipe: Recipe,
) -> DevicePage:
    """The page's data; see `device_page.device_page`."""
    rows = defect_rows(defects)
    tiles = tiles_around(rows.rows, rows.column_places, defects.mask.shape)
    present = [one for one in (masters.bias, masters.dark, masters.flat) if one is not None]
    pictures = [
        picture(master.values, title=f"master {master.kind}", unit=master.unit, tiles=tiles)
        for master in present
    ]
    script = static_text("numbers.js", "pictures.js", "defects.js")
    graded = result.graded
    counts = _counts(result.defects)
    provenance = result.provenance
    return DevicePage(
        style=static_text("page.css"),
        script=script,
        policy=policy(script),
        version=provenance.versions.get("sensorgrade", ""),
        serial=result.serial,
        identity=_identity(result),
        decision=graded.decision,
        verdict=VERDICTS[graded.decision],
        grade=graded.grade or ("no grade met" if graded.limits else "no grade asked for"),
        reason=_reason(result),
        more_reasons=graded.reasons[1:],
        limit_groups=bar_groups(graded),
        limit_at=round(LIMIT_AT, 2),
        pictures=tuple(_frame(one, master) for one, master in zip(pictures, present, strict=True)),
        no_picture=_no_picture(masters),
        kinds=rows.kinds,
        count_scopes=tuple(dict.fromkeys(one.scope for one in result.defects)),
        counts=tuple(row for row in counts if row.some),
        none_found=tuple(row.kind for row in counts if not row.some),
        printed_defects=rows.printed,
        defect_total=rows.total,
        defects_left_out=rows.total - len(rows.rows),
        figures=tuple(figure(plot) for plot in plots(stages)),
        not_measured=tuple(
            (name_text(stage), sentence) for stage, sentence in result.not_measured.items()
        ),
        measured=_measured(result),
        findings=tuple(sorted(result.findings, key=lambda one: GRAVITY[one.severity])),
        inputs=provenance.inputs,
        recipe_text=recipe.text,
        recipe_sha256=provenance.recipe_sha256,
        versions=tuple(provenance.versions.items()),
        caution=CAUTION,
        data=_script_data(pictures, rows, tiles.tolist(), defects.mask.shape),
    )


def _identity(result: DeviceResult) -> tuple[tuple[str, str], ...]:
    """Label and text, only of what is known."""
    die = None
    if result.die_row is not None and result.die_column is not None:
        die = f"row {result.die_row}, column {result.die_column}"
    taken = None
    if result.taken is not None:
        taken = datetime.fromtimestamp(result.taken, UTC).strftime("%Y-%m-%d %H:%M UTC")
    known = {
        "Serial": result.serial,
        "Lot": result.lot,
        "Wafer": result.wafer,
        "Die": die,
        "Recipe": result.provenance.recipe,
        "First frame": taken,
    }
    return tuple((label, text) for label, text in known.items() if text is not None)


def _reason(result: DeviceResult) -> str:
    """The weightiest reason; at the top grade, what came closest to costing it."""
    if result.graded.reasons:
        return result.graded.reasons[0]
    nearest = closest(result.graded)
    if nearest is None:
        return "Nothing stands against this grade."
    return f"Every limit of {result.graded.grade} is met. The closest: {nearest.reason}"


def _frame(shown: Picture, master: Master) -> PictureFrame:
    low, high = number_text(shown.coding.low), number_text(shown.coding.high)
    unit = unit_text(shown.unit)
    scaled = f"Black is {low} {unit} and white {high} {unit}".replace("  ", " ")
    note = f"{len(master.stack.frames)} frames"
    if master.kind == "dark" and master.stack.exposure is not None:
        note += f" of {number_text(master.stack.exposure)} s"
    if master.kind == "flat":
        note += ", over its median"
    return PictureFrame(
        title=f"Master {master.kind}",
        note=note,
        low=low,
        high=high,
        unit=unit,
        alt=f"Master {master.kind} of {shown.columns} × {shown.rows} pixels, grey. {scaled};"
        " row 1 is at the bottom.",
        thumbnail=shown.thumbnail,
    )


def _no_picture(masters: Masters) -> tuple[str, ...]:
    lacking = {"bias": masters.bias, "dark": masters.dark, "flat": masters.flat}
    return tuple(
        f"There is no master {kind}: the set has no {kind} frames that make one."
        for kind, master in lacking.items()
        if master is None
    )


def _counts(counts: Sequence[DefectCount]) -> tuple[CountRow, ...]:
    """Counts by kind, with a cell for every part of the device that any kind is counted in."""
    scopes = tuple(dict.fromkeys(one.scope for one in counts))
    found = {(one.kind, one.scope): one for one in counts}
    return tuple(
        CountRow(
            name_text(kind),
            tuple(_count_cell(found.get((kind, scope))) for scope in scopes),
        )
        for kind in dict.fromkeys(one.kind for one in counts)
    )


def _count_cell(count: DefectCount | None) -> tuple[str, str]:
    """The number found, and what the probabilities add up to where that is not the same."""
    if count is None:
        return "", ""
    if count.standard_uncertainty < LEAST_DOUBT:
        return str(count.found), ""
    doubt = f"{number_text(count.expected, 4)} ± {number_text(count.standard_uncertainty, 2)}"
    return str(count.found), doubt


def _measured(result: DeviceResult) -> tuple[MeasuredRow, ...]:
    """Measurements of one name together, in the order of the stages."""
    order = {name: i for i, name in enumerate(dict.fromkeys(m.name for m in result.measurements))}
    ordered = sorted(result.measurements, key=lambda one: order[one.name])
    return tuple(
        MeasuredRow(
            name_text(name),
            tuple(
                (one.scope, doubt_text(one.value, one.standard_uncertainty, one.unit), one.n)
                for one in group
            ),
        )
        for name, group in groupby(ordered, key=lambda one: one.name)
    )


def _script_data(
    pictures: list[Picture], rows: DefectRows, tiles: list[list[int]], shape: tuple[int, int]
) -> dict[str, Any]:
    """Short names only where the same key comes again and again."""
    return {
        "rows": shape[0],
        "columns": shape[1],
        "tile": TILE,
        "tiles": tiles,
        "steps": STEPS,
        "centre": CENTRE,
        "noValue": NO_VALUE,
        "pictures": [
            {
                "title": one.title,
                "unit": unit_text(one.unit),
                "block": one.block,
                "median": one.coding.median,
                "spread": one.coding.spread,
                "low": one.coding.low,
                "high": one.coding.high,
                "overview": one.overview,
                "tiles": one.tiles,
            }
            for one in pictures
        ],
        "kinds": [
            {"name": name_text(one.kind), "path": one.path, "colour": one.colour}
            for one in rows.kinds
        ],
        "defects": {**rows.columns, "units": [unit_text(u) for u in rows.columns["units"]]},
    }
