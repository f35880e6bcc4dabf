"""Every benchmark in one run: ``python tests/benchmarks/run.py`` writes reports/performance.md.

Ratios are taken against a read of the same bytes in the same run, in turn, so that a slow or busy
machine slows both. ``--quick`` uses small frames, to try the script itself.
"""

import argparse
import json
import os
import platform
import re
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from bench_frames import write_device

HERE = Path(__file__).parent
REPORT = HERE.parents[1] / "reports" / "performance.md"
REPEATS = 5
AGREE = 4.0  # standard uncertainties between two answers to one question

RECIPE = """
name: benchmark
sensor: {technology: cmos, pixel_pitch: 10 um, adc_bits: 16}
frames: {kind: IMAGETYP, exposure: EXPTIME, temperature: CCD-TEMP, serial: SERIAL}
stages:
  bias_level: {}
  photon_transfer: {}
  read_noise: {}
  temporal_noise: {}
  saturation: {}
  linearity: {}
  dark_current: {}
  dark_uniformity: {}
  response_uniformity: {}
  pixels: {}
  lines: {}
  clusters: {}
grades:
  usable: {read_noise: <= 8 electron, hot_pixels: <= 100000}
"""


def read_once(paths: list[Path]) -> float:
    """Seconds to read all bytes once with readinto into one buffer."""
    buffer = bytearray(max(path.stat().st_size for path in paths))
    start = time.perf_counter()
    for path in paths:
        with path.open("rb", buffering=0) as file:
            file.readinto(buffer)
    return time.perf_counter() - start


def digest_once(paths: list[Path]) -> float:
    """Seconds to take the SHA-256 of every file, which every inspection records."""
    from sensorgrade.lot.fingerprint import file_sha256

    start = time.perf_counter()
    for path in paths:
        file_sha256(path)
    return time.perf_counter() - start


def reduce_once(folder: Path, recipe_file: Path) -> float:
    """Seconds to reduce every frame of one device."""
    from sensorgrade.frames.geometry import geometry
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.masters.reduction import reduce_frames
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.stages import vocabulary

    recipe = load_recipe(recipe_file, vocabulary())
    (device,) = find_devices([folder], recipe)
    layout = geometry(recipe.sensor, {"": device.frames[0].planes[""].shape})
    start = time.perf_counter()
    reduce_frames(device, layout, recipe.sensor)
    return time.perf_counter() - start


def inspect_once(folder: Path, recipe_file: Path, out: Path) -> float:
    """Seconds from the folder of frames to every file written, in this process."""
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.inspection import inspect_and_write
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.stages import vocabulary

    recipe = load_recipe(recipe_file, vocabulary())
    out.mkdir(parents=True, exist_ok=True)
    start = time.perf_counter()
    (device,) = find_devices([folder], recipe)
    one = partial(inspect_and_write, recipe=recipe)
    one(device, into=out, threads=os.cpu_count() or 1, stage=lambda name: None)
    return time.perf_counter() - start


def peak_memory(folder: Path, recipe_file: Path, out: Path) -> int:
    """Largest resident memory [bytes] of a process that inspects the folder."""
    program = (
        "import sys, resource; sys.path.insert(0, sys.argv[1]); from pathlib import Path;"
        "import run; run.inspect_once(*map(Path, sys.argv[2:]));"
        "print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024)"
    )
    found = subprocess.run(
        [sys.executable, "-c", program, str(HERE), str(folder), str(recipe_file), str(out)],
        check=True,
        capture_output=True,
        text=True,
    )
    return int(found.stdout)


def lot_rate(
    source: Path, recipe_file: Path, out: Path, jobs: int, copies: int = 1
) -> tuple[float, float]:
    """Devices per second over the whole run, and in steady state (the first ones left out).

    Each device found is inspected ``copies`` times, under as many serial numbers.
    """
    from sensorgrade.frames.inventory import find_devices
    from sensorgrade.inspection import inspect_lot
    from sensorgrade.lot.engine import LotOptions, run_folder
    from sensorgrade.recipe.load import load_recipe
    from sensorgrade.stages import vocabulary

    recipe = load_recipe(recipe_file, vocabulary())
    done: list[float] = []
    out.mkdir(parents=True, exist_ok=True)
    start = time.perf_counter()
    devices = [
        replace(device, serial=f"{device.serial}-{copy}", folder=f"{device.folder}-{copy}")
        for device in find_devices([source], recipe)
        for copy in range(copies)
    ]
    with run_folder(out) as ledger:
        inspect_lot(
            devices,
            recipe,
            ledger=ledger,
            options=LotOptions(jobs=jobs),
            report=lambda progress: done.append(time.perf_counter()),
        )
    total = time.perf_counter() - start
    steady = done[2 * jobs :]
    return len(devices) / total, (len(steady) - 1) / (steady[-1] - steady[0])


def spread(values: list[float]) -> str:
    """Median with the range."""
    return f"{np.median(values):.2f} ({min(values):.2f} to {max(values):.2f})"


def exponent(sizes: Sequence[float], seconds: list[float]) -> float:
    """Slope of log time against log size."""
    return float(np.polyfit(np.log(sizes), np.log(seconds), 1)[0])


def best_of(measure: Callable[[], float], repeats: int = 3) -> float:
    """Least of a few runs: the one the machine disturbed least."""
    return min(measure() for _ in range(repeats))


def single_device(work: Path, recipe_file: Path, size: int) -> list[str]:
    """One large device: reductions and the whole inspection against one read; the plain script."""
    folder = write_device(
        work / "large", size, bias=25, darks=25, pairs=20, flats=10, serial="LARGE"
    )
    paths = sorted(folder.glob("*.fits"))
    read_once(paths), reduce_once(folder, recipe_file)
    inspect_once(folder, recipe_file, work / "out")
    reads, reductions, whole, digests = [], [], [], []
    for _ in range(REPEATS):
        reads.append(best_of(partial(read_once, paths)))
        reductions.append(reduce_once(folder, recipe_file) / reads[-1])
        reads.append(best_of(partial(read_once, paths)))
        whole.append(inspect_once(folder, recipe_file, work / "out") / reads[-1])
        digests.append(digest_once(paths) / reads[-1])
    start = time.perf_counter()
    program = [sys.executable, str(HERE / "plain_script.py"), str(folder)]
    plain = json.loads(subprocess.run(program, check=True, capture_output=True, text=True).stdout)
    plain_seconds = time.perf_counter() - start
    seconds = float(np.median(whole)) * float(np.median(reads))
    result = json.loads((work / "out" / "result.json").read_text())
    megabytes = sum(path.stat().st_size for path in paths) / 1e6
    return [
        f"## One device of {size} x {size}, 100 frames of 16 bits ({megabytes:.0f} MB)",
        "",
        "| figure | found | wanted |",
        "|---|---|---|",
        f"| one read of all bytes [s] | {spread(reads)} | |",
        f"| reductions over one read | {spread(reductions)} | 2.5 at most |",
        f"| whole inspection over one read | {spread(whole)} | 6 at most |",
        f"| SHA-256 of all bytes on one core over one read | {spread(digests)} | |",
        f"| plain script over whole inspection | {plain_seconds / seconds:.1f} | 25 at least |",
        "",
        *same_answers(plain, result),
    ]


def same_answers(plain: dict[str, float], result: dict[str, Any]) -> list[str]:
    """The plain script's numbers beside ours; they must agree.

    Raises
    ------
    RuntimeError
        They differ by more than AGREE standard uncertainties, or count other defects.
    """
    found = {one["name"]: one for one in result["measurements"]}
    lines = ["| quantity | inspection | plain script | apart by |", "|---|---|---|---|"]
    for name, value in plain.items():
        if name in found:
            one = found[name]
            doubt = one["standard_uncertainty"]
            apart = abs(one["value"] - value) / doubt
            lines.append(
                f"| {name} [{one['unit']}] | {one['value']:.5g} ± {doubt:.2g} | {value:.5g}"
                f" | {apart:.1f} u |"
            )
        else:
            apart = abs(result["defects"][name] - value) * AGREE
            lines.append(f"| {name} | {result['defects'][name]} | {value:.0f} | |")
        if apart > AGREE:
            raise RuntimeError(f"{name}: the plain script finds another value\n" + lines[-1])
    return [*lines, ""]


def memory(work: Path, recipe_file: Path, size: int) -> list[str]:
    """Peak memory for 50 and for 200 frames of one size."""
    peaks = {}
    for frames, counts in {50: (12, 12, 10, 6), 200: (50, 50, 40, 20)}.items():
        bias, darks, pairs, flats = counts
        folder = write_device(
            work / "memory", size, bias=bias, darks=darks, pairs=pairs, flats=flats, serial="M"
        )
        peaks[frames] = peak_memory(folder, recipe_file, work / "out-memory")
    few, many = peaks[50] / 2**20, peaks[200] / 2**20
    return [
        f"## Memory, one device of {size} x {size}",
        "",
        f"Peak resident memory {few:.0f} MiB with 50 frames, {many:.0f} MiB with 200:"
        f" {100 * (many / few - 1):+.1f} % (wanted: 1536 MiB at most, within 5 %).",
        "",
    ]


def small_devices(work: Path, recipe_file: Path) -> list[str]:
    """24 small devices, on one core and on two."""
    source = work / "small"
    for number in range(24):
        write_device(
            source / f"S{number:02d}",
            256,
            bias=8,
            darks=6,
            pairs=6,
            flats=4,
            serial=f"S{number:02d}",
        )
    rates = [lot_rate(source, recipe_file, work / f"lot-{i}", jobs=2) for i in range(3)]
    single = [lot_rate(source, recipe_file, work / f"lot-one-{i}", jobs=1) for i in range(3)]
    return [
        "## 24 devices of 256 x 256, 30 frames each",
        "",
        "| figure | found | wanted |",
        "|---|---|---|",
        f"| devices per second in steady state, 2 jobs | {spread([b for _, b in rates])} | 10 |",
        f"| the same, with start and lot page | {spread([a for a, _ in rates])} | |",
        f"| devices per second in steady state, 1 job | {spread([b for _, b in single])} | |",
        "",
    ]


def growth(work: Path, recipe_file: Path, size: int) -> list[str]:
    """Exponents of cost against pixels, frames and devices, over a factor of 16 each."""
    seconds: list[float] = []
    sides = [size // 4, size // 2, size]
    for side in sides:
        folder = write_device(work / "g", side, bias=8, darks=8, pairs=8, flats=4, serial="G")
        one = partial(inspect_once, folder, recipe_file, work / "out-g")
        seconds.append(best_of(one))
    by_pixels = exponent([side**2 for side in sides], seconds)
    frames, seconds = [40, 160, 640], []
    for count in frames:
        quarter = count // 4
        folder = write_device(
            work / "g", size // 2, bias=quarter, darks=quarter, pairs=count // 8,
            flats=quarter, serial="G",
        )  # fmt: skip
        seconds.append(best_of(partial(reduce_once, folder, recipe_file)))
    by_frames = exponent(frames, seconds)
    copies, seconds = [2, 8, 32], []
    for number in copies:
        whole, _ = lot_rate(work / "small", recipe_file, work / f"lot-x{number}", 2, number)
        seconds.append(number / whole)
    return [
        "## Growth of the cost",
        "",
        "| over a factor of 16 in | exponent | wanted |",
        "|---|---|---|",
        f"| pixels ({sides[0]}² to {size}², whole inspection) | {by_pixels:.2f} | 1.0 ± 0.05 |",
        f"| frames (40 to 640 of {size // 2}², reductions) | {by_frames:.2f} | 1.0 ± 0.05 |",
        f"| devices (48 to 768 small ones, whole lot) | {exponent(copies, seconds):.2f}"
        " | 1.0 ± 0.05 |",
        "",
        "Less than 1 is cost that does not grow: start-up, and images made once for each stack.",
        "",
    ]


def main() -> None:
    """Run everything and write the page."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="small frames, to try the script")
    quick = parser.parse_args().quick
    size = 512 if quick else 4096
    with tempfile.TemporaryDirectory(prefix="benchmark-") as name:
        work = Path(name)
        recipe_file = work / "recipe.yaml"
        recipe_file.write_text(RECIPE)
        sections = [
            *single_device(work, recipe_file, size),
            *memory(work, recipe_file, size),
            *small_devices(work, recipe_file),
            *growth(work, recipe_file, size),
        ]
    for script in ("lot_scaling.py", "ledger_scale.py", "pages.py"):
        program = [sys.executable, str(HERE / script), *(["--quick"] if quick else [])]
        done = subprocess.run(program, check=True, stdout=subprocess.PIPE, text=True)
        sections += [*done.stdout.splitlines(), ""]
    versions = ", ".join(f"{n} {__import__(n).__version__}" for n in ("numpy", "numba", "scipy"))
    head = [
        "# Performance",
        "",
        "Written by `python tests/benchmarks/run.py`. Figures are medians with their",
        "range; ratios are taken within one run, frames in the page cache, kernels compiled.",
        "",
        f"Machine: {os.cpu_count()} cores, {platform.machine()}, Python"
        f" {platform.python_version()}, {versions}; peak of this run"
        f" {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**10:.0f} MiB.",
        "",
    ]
    text = re.sub("\n{3,}", "\n\n", "\n".join([*head, *sections]))
    if quick:
        print(text)
    else:
        REPORT.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
