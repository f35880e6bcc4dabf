"""What a year's ledger costs: ``python ledger_scale.py`` prints a section of Markdown.

The demonstration's twelve devices are really inspected; the other rows of a ledger of 10,000 are
made from theirs, with numbers spread anew. Every command is a process of its own. ``--quick``
stops at 300 devices, to try the script itself.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

DEVICES = 10_000
PER_WAFER = 100
COMMAND = "from sensorgrade.cli.main import main; main()"
PAGE = """
import sys
from pathlib import Path
from sensorgrade.lot.ledger import read_ledger
from sensorgrade.recipe.library import find_recipe
from sensorgrade.recipe.load import load_recipe
from sensorgrade.report.lot_page import lot_page
from sensorgrade.stages import vocabulary
recipe = load_recipe(find_recipe("demo"), vocabulary())
with read_ledger(Path(sys.argv[1])) as ledger:
    results, failures = ledger.results(in_short=True), ledger.failures()
page = lot_page(results, failures=failures, recipe=recipe, name="year")
Path(sys.argv[1], "lot.html").write_text(page)
"""


def measured(program: str, *arguments: object) -> tuple[float, float, float]:
    """Seconds, of them of processor, and peak memory [MiB] of a Python program of its own."""
    start = time.perf_counter()
    process = subprocess.Popen(
        [sys.executable, "-c", program, *map(str, arguments)],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )
    _, status, usage = os.wait4(process.pid, 0)
    if os.waitstatus_to_exitcode(status) not in (0, 1):
        raise RuntimeError(f"{arguments} failed")
    seconds = time.perf_counter() - start
    return seconds, usage.ru_utime + usage.ru_stime, usage.ru_maxrss / 1024


def filled(folder: Path, inspected: Path, devices: int) -> float:
    """Record so many devices after those of the ledger ``inspected``; seconds for each."""
    import numpy as np

    from sensorgrade.lot.fingerprint import Fingerprint
    from sensorgrade.lot.ledger import read_ledger, write_ledger
    from sensorgrade.lot.stored import stored_lot
    from sensorgrade.recipe.library import find_recipe
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.stages import vocabulary

    recipe = load_recipe(find_recipe("demo"), vocabulary())
    with read_ledger(inspected) as source:
        patterns = source.results()
    kept = stored_lot(inspected, with_candidates=True).candidates
    rng = np.random.default_rng(1)
    folder.mkdir()
    with write_ledger(folder) as ledger:
        ledger.begin(recipe, jobs=1, threads=1)
        start = time.perf_counter()
        for number in range(devices):
            pattern = patterns[number % len(patterns)]
            place = number % PER_WAFER
            serial = f"HRN-{number:05d}"
            result = replace(
                pattern,
                serial=serial,
                folder=serial,
                wafer=f"W{number // PER_WAFER:03d}",
                die_row=place // 10,
                die_column=place % 10,
                candidates=kept[number % len(patterns)],
                measurements=tuple(
                    replace(
                        one,
                        value=one.value + rng.normal(0, abs(one.standard_uncertainty)),
                    )
                    for one in pattern.measurements
                ),
            )
            files = [path.name for path in (inspected / pattern.folder).iterdir()]
            same = Fingerprint("d" * 64, "s" * 64)
            times = [(stage, 0.1) for stage in recipe.stages]
            ledger.record(result, fingerprint=same, seconds=1.0, stages=times, files=files)
        seconds = time.perf_counter() - start
        ledger.end("finished")
    return seconds / devices


def section(devices: int) -> list[str]:
    """Times and memory of what reads the whole ledger."""
    with tempfile.TemporaryDirectory(prefix="benchmark-") as name:
        work = Path(name)
        measured(COMMAND, "demo", "--out", work / "demo")
        year = work / "year"
        fill = [sys.executable, __file__, "--fill", year, work / "demo" / "results", str(devices)]
        record = float(subprocess.run(fill, check=True, capture_output=True, text=True).stdout)
        size = (year / "lot.sqlite").stat().st_size
        recipe = Path(__file__).parents[2] / "recipes" / "demo.yaml"
        moved = work / "moved.yaml"
        moved.write_text("stages: {pixels: {hot: 3 electron/s}}\n")
        rows = [
            ("lot page", "10 s, 1024 MiB", measured(PAGE, year)),
            ("`grade`", "5 s, 1024 MiB", measured(COMMAND, "grade", year, "--limits", recipe)),
            (
                "`grade`, hot threshold moved",
                "5 s, 1024 MiB",
                measured(COMMAND, "grade", year, "--limits", moved),
            ),
            ("`lot`", "", measured(COMMAND, "lot", year)),
            ("`lot --wafers`", "", measured(COMMAND, "lot", year, "--wafers")),
            ("`lot --csv`", "", measured(COMMAND, "lot", year, "--csv", work / "lot.csv")),
            ("`--help`", "0.4 s", measured(COMMAND, "--help")),
        ]
        page = (year / "lot.html").stat().st_size
        inspected = json.loads((work / "demo/results/HRN-101/result.json").read_text())
    return [
        f"## A ledger of {devices} devices",
        "",
        f"Each has {len(inspected['measurements'])} measurements and"
        f" {len(inspected['provenance']['inputs'])} input files. The ledger takes"
        f" {size / devices / 1000:.1f} kB"
        f" a device, the lot page {page / devices / 1000:.2f} kB; recording one takes"
        f" {1000 * record:.1f} ms.",
        "",
        "| figure | seconds | of them processor | peak memory [MiB] | wanted, at most |",
        "|---|---|---|---|---|",
        *(
            f"| {label} | {seconds:.2f} | {busy:.2f} | {peak:.0f} | {wanted} |"
            for label, wanted, (seconds, busy, peak) in rows
        ),
        "",
    ]


def main() -> None:
    """Print the section, or fill a ledger for it.

    A process counts the memory of the one that started it as its own: this one must stay small.
    """
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="few devices, to try the script")
    parser.add_argument("--fill", nargs=3, help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.fill:
        folder, inspected, devices = given.fill
        print(filled(Path(folder), Path(inspected), int(devices)))
    else:
        print("\n".join(section(300 if given.quick else DEVICES)))


if __name__ == "__main__":
    main()
