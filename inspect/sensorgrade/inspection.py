"""One device from raw frames to grade, mask and page; and a lot of them."""

import platform
import tempfile
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from importlib.metadata import version
from pathlib import Path

from sensorgrade import __version__
from sensorgrade.atomic import write_whole
from sensorgrade.defects.defect import Defects
from sensorgrade.defects.find import find_defects
from sensorgrade.defects.mask_file import write_defect_table, write_mask
from sensorgrade.defects.table import FINDERS
from sensorgrade.defects.trap_file import write_trap_table
from sensorgrade.errors import DeviceError, FrameError, NotMeasured, RequestError
from sensorgrade.frames.decode import decoded
from sensorgrade.frames.frame import DeviceFrames, Frame
from sensorgrade.frames.geometry import geometry
from sensorgrade.grading.grade import grade
from sensorgrade.lot.collector import collector_rests
from sensorgrade.lot.engine import LotOptions, LotOutcome, run_lot
from sensorgrade.lot.fingerprint import file_sha256
from sensorgrade.lot.ledger import Ledger
from sensorgrade.lot.lot_table import lot_columns, lot_csv
from sensorgrade.lot.progress import Report
from sensorgrade.lot.result import DeviceResult, InputFile, Provenance
from sensorgrade.lot.result_json import result_json
from sensorgrade.masters.audit import audited
from sensorgrade.masters.combine import combined_masters
from sensorgrade.masters.files import write_master
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.pocket_pumping import PocketPumpingResult
from sensorgrade.measure.stage import Inputs, StageResult
from sensorgrade.measurement import Finding
from sensorgrade.recipe.model import Recipe
from sensorgrade.report.device_page import device_page
from sensorgrade.report.lot_page import lot_page
from sensorgrade.report.notebook import notebook_html
from sensorgrade.stages import measuring_stages

LIBRARIES = ("numpy", "scipy", "astropy", "scikit-image", "numba")


@dataclass(frozen=True, slots=True)
class Inspection:
    """All that an inspection of one device yields: the result, and what its files are made of."""

    result: DeviceResult
    masters: Masters
    defects: Defects
    stages: dict[str, StageResult]

    def _repr_html_(self) -> str:
        return notebook_html(self.result)


def inspect_device(
    device: DeviceFrames,
    recipe: Recipe,
    *,
    threads: int | None = None,
    stage: Callable[[str], None] = lambda name: None,
) -> Inspection:
    """Inspect one device; nothing is written but scratch files for compressed frames.

    Parameters
    ----------
    device : DeviceFrames
        From `find_devices`, or made from arrays.
    recipe : Recipe
    threads : int, optional
        Cores to use, all by default; the result does not depend on it.
    stage : callable
        Told the name of each step when it begins.

    Raises
    ------
    DeviceError
        The device has no usable frames, or they do not fit the recipe's geometry.
    """
    stage("audit")
    with tempfile.TemporaryDirectory(prefix="sensorgrade-") as scratch:
        ready = decoded(device, scratch=Path(scratch)) if device.stacks else device
        if not ready.stacks:
            raise DeviceError(_no_frames(ready))
        shapes = {key: plane.shape for key, plane in ready.frames[0].planes.items()}
        try:
            layout = geometry(recipe.sensor, shapes, ready.frames[0].sections)
        except RequestError as error:
            raise DeviceError(f"{ready.frames[0].label}: {error}") from error
        ready = audited(ready, layout, recipe.sensor)
        if not ready.stacks:
            raise DeviceError(_no_frames(ready))
        # Digests need other bytes of the same files at the same time: both share the page cache.
        with ThreadPoolExecutor(1) as aside:
            inputs = aside.submit(_inputs, ready.frames)
            stage("frames")
            try:
                reduced = reduce_frames(ready, layout, recipe.sensor, threads=threads)
            except FrameError as error:
                raise DeviceError(str(error)) from error
            masters = combined_masters(reduced)
            given = Inputs(sensor=recipe.sensor, reduced=reduced, masters=masters, results={})
            not_measured = _measure(given, recipe, stage)
            stage("defects")
            finders = {one.name for one in FINDERS}
            wanted = {name: asked for name, asked in recipe.stages.items() if name in finders}
            defects = find_defects(given, wanted, recipe.zones, threads=threads)
            digests = inputs.result()
    stage("grade")
    measurements = tuple(
        one for measured in given.results.values() for one in measured.measurements
    )
    findings = (
        *ready.findings,
        *(one for measured in given.results.values() for one in measured.findings),
        *defects.findings,
        *(_lacking(name, sentence) for name, sentence in not_measured.items()),
    )
    graded = grade(measurements, defects.counts, findings, recipe=recipe)
    result = DeviceResult(
        serial=ready.serial,
        folder=ready.folder,
        lot=ready.lot,
        wafer=ready.wafer,
        die_row=ready.die_row,
        die_column=ready.die_column,
        findings=findings,
        measurements=measurements,
        defects=defects.counts,
        not_measured=not_measured,
        graded=graded,
        provenance=Provenance(
            recipe=recipe.name,
            recipe_sha256=recipe.sha256,
            inputs=digests,
            versions=versions(),
        ),
        taken=min((frame.time for frame in ready.frames if frame.time is not None), default=None),
        candidates=defects.candidates,
    )
    return Inspection(result, masters, defects, given.results)


def inspect_and_write(
    device: DeviceFrames,
    *,
    recipe: Recipe,
    into: Path,
    threads: int,
    stage: Callable[[str], None],
    figures: bool = False,
) -> DeviceResult:
    """Inspect one device and write all its files into the folder ``into``."""
    made = inspect_device(device, recipe, threads=threads, stage=stage)
    stage("files")
    write_inspection(made, recipe, into, threads=threads, figures=figures)
    return made.result


def write_inspection(
    made: Inspection,
    recipe: Recipe,
    into: Path,
    *,
    threads: int | None = None,
    figures: bool = False,
) -> None:
    """Write result, mask, masters, tables and page of one device into the folder ``into``.

    With ``figures`` the page's figures are also written as files, into ``into / "figures"``.

    Raises
    ------
    OSError
        A file cannot be written; those that were are whole.
    """
    serial = made.result.serial
    masters = [
        master
        for master in (made.masters.bias, made.masters.dark, made.masters.flat)
        if master is not None
    ]
    page = partial(
        device_page,
        made.result,
        masters=made.masters,
        defects=made.defects,
        stages=made.stages,
        recipe=recipe,
    )
    with ThreadPoolExecutor(threads) as pool:
        written = [
            pool.submit(write_master, into / f"master_{master.kind}.fits", master, serial=serial)
            for master in masters
        ]
        write_mask(into / "mask.fits", made.defects, serial=serial)
        write_defect_table(into / "defects.ecsv", made.defects)
        pumped = made.stages.get("pocket_pumping")
        if isinstance(pumped, PocketPumpingResult):
            write_trap_table(into / "traps.ecsv", pumped.traps)
        write_whole(into / "device.html", page())
        if figures:
            # matplotlib takes a second to import, and no other file needs it
            from sensorgrade.report.figure_files import write_figures

            write_figures(into / "figures", masters=made.masters, stages=made.stages, serial=serial)
        for one in written:
            one.result()
    write_whole(into / "result.json", result_json(made.result))


def inspect_lot(
    devices: Sequence[DeviceFrames],
    recipe: Recipe,
    *,
    ledger: Ledger,
    options: LotOptions,
    report: Report = lambda progress: None,
    figures: bool = False,
) -> LotOutcome:
    """Inspect devices into the ledger's folder, then write the lot's page and table.

    With ``figures`` the figures of the devices' pages are also written as files.
    """
    outcome = run_lot(
        devices,
        partial(inspect_and_write, recipe=recipe, figures=figures),
        ledger=ledger,
        recipe=recipe,
        options=options,
        report=report,
    )
    results, failures = ledger.results(in_short=True), ledger.failures()
    lots = {one.lot for one in results}
    name = (lots.pop() if len(lots) == 1 else None) or ledger.folder.name
    with collector_rests():
        table = lot_csv(lot_columns(results, failures))
        page = lot_page(results, failures=failures, recipe=recipe, name=name)
    try:
        write_whole(ledger.folder / "lot.csv", table)
        write_whole(ledger.folder / "lot.html", page)
    except OSError as error:
        sentence = (
            f"{ledger.folder}: lot.csv and lot.html cannot be written ({error.strerror}); every"
            " device that is done is kept, make room and give the same command again"
        )
        return replace(outcome, stopped=outcome.stopped or sentence)
    return outcome


def versions() -> dict[str, str]:
    """What the numbers depend on: this package, the libraries, Python."""
    return {
        "sensorgrade": __version__,
        **{name: version(name) for name in LIBRARIES},
        "python": platform.python_version(),
    }


def _measure(inputs: Inputs, recipe: Recipe, stage: Callable[[str], None]) -> dict[str, str]:
    """Run the measuring stages; their results go into ``inputs.results``.

    Returns what each stage that could not run lacked.
    """
    not_measured: dict[str, str] = {}
    for one in measuring_stages():
        if one.name not in recipe.stages:
            continue
        stage(one.name)
        try:
            inputs.results[one.name] = one.run(inputs, recipe.stages[one.name])
        except NotMeasured as lacking:
            not_measured[one.name] = str(lacking)
    return not_measured


def _lacking(stage: str, sentence: str) -> Finding:
    """A stage that could not run, as a finding; its limits have no reading, so none can pass."""
    return Finding(
        severity="note",
        where=f"stage {stage}",
        seen=f"not measured: {sentence}",
        remedy="take the frames it needs, or leave the stage out of the recipe",
    )


def _inputs(frames: Iterable[Frame]) -> tuple[InputFile, ...]:
    """Size and digest of every file used, in the order of their labels; none for arrays."""
    files = {
        frame.label: frame.path
        for frame in frames
        if any(plane.data is None for plane in frame.planes.values())
    }
    return tuple(
        InputFile(label=label, bytes=path.stat().st_size, sha256=file_sha256(path))
        for label, path in sorted(files.items())
    )


def _no_frames(device: DeviceFrames) -> str:
    """Why a device has no usable frames, from its findings."""
    errors = [one for one in device.findings if one.severity == "error"]
    if not errors:
        return f"{device.serial}: no usable frames; look at the recipe's rules for frames"
    first = errors[0]
    more = f" (and {len(errors) - 1} more)" if len(errors) > 1 else ""
    return f"{device.serial}: no usable frames: {first.where}: {first.seen}; {first.remedy}{more}"
