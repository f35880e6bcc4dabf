"""A device and a lot made up for the pages: plausible numbers, known defects, no frames."""

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from sensorgrade.defects.defect import DEFECT, DefectCount, Defects
from sensorgrade.frames.frame import Frame, Stack
from sensorgrade.grading.grade import grade
from sensorgrade.lot.result import DeviceResult, InputFile, Provenance
from sensorgrade.masters.master import Master, Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import (
    DecisionRule,
    FrameRules,
    Grade,
    Limit,
    OutputOptions,
    Recipe,
    Section,
    Sensor,
)

OUTPUTS = ("left", "right")
RECIPE_TEXT = """name: two-output CCD
sensor: {technology: ccd, pixel_pitch: 15 um}
grades:
  science: {read_noise: <= 5 electron, hot_pixels: <= 40}
"""


@dataclass(frozen=True)
class Sample:
    result: DeviceResult
    masters: Masters
    defects: Defects
    stages: dict[str, StageResult]
    recipe: Recipe

    @property
    def parts(self):
        return {
            "masters": self.masters,
            "defects": self.defects,
            "stages": self.stages,
            "recipe": self.recipe,
        }


def limit(name, relation, bound, unit, **more):
    return Limit(name, relation, bound, unit, 3, **more)


def recipe(shape=(160, 200)):
    rows, columns = shape
    half = columns // 2
    outputs = {
        "left": OutputOptions(image=Section(0, rows, 0, half)),
        "right": OutputOptions(image=Section(0, rows, half, columns)),
    }
    levels = (("science", 5.0, 40, 0.02), ("engineering", 8.0, 400, 0.1))
    grades = tuple(
        Grade(
            name,
            (
                limit("read_noise", "<=", noise, "electron"),
                limit("dark_current", "<=", dark, "electron / s"),
                limit("prnu", "<=", 1.2, "%"),
                limit("linearity_error", "<=", 0.8, "%"),
                limit("saturation_capacity", ">=", 90000.0, "electron"),
                limit("dynamic_range", ">=", 80.0, "dB"),
                limit("cti_serial", "<=", 1e-5, ""),
                limit("hot_pixels", "<=", hot, ""),
                limit("bad_columns", "<=", 0, ""),
            ),
        )
        for name, noise, hot, dark in levels
    )
    return Recipe(
        name="two-output CCD",
        sensor=Sensor(technology="ccd", pixel_pitch=15.0, outputs=outputs, adc_bits=16),
        frames=FrameRules(),
        stages={},
        zones={},
        decision=DecisionRule(kind="non-binary", confidence=95.0),
        grades=grades,
        path="two-output-ccd.yaml",
        text=RECIPE_TEXT,
        sha256="7f" * 32,
    )


def stack(kind, frames, *, exposure=None):
    made = tuple(
        Frame(Path(f"{kind}_{i:03}.fits"), f"{kind}_{i:03}.fits", kind, {}, time=1.7e9 + 60 * i)
        for i in range(frames)
    )
    return Stack(kind, made, exposure=exposure, temperature=-90.0 if kind == "dark" else None)


def pictures(shape, rng):
    """Master bias, dark and flat with the usual shapes in them, as float32."""
    rows, columns = shape
    y, x = np.mgrid[0:rows, 0:columns].astype(np.float32)
    bias = rng.normal(0, 1.1, shape).astype(np.float32) + 1.5 * np.sin(x / 23)
    dark = rng.gamma(2.0, 1.5, shape).astype(np.float32) + 6 * np.exp(-(x**2 + y**2) / columns**2)
    radius = ((x - columns / 2) ** 2 + (y - rows / 2) ** 2) / (columns / 2) ** 2
    flat = (1 - 0.09 * radius + rng.normal(0, 0.008, shape)).astype(np.float32)
    bias[:, columns // 2 :] += 2
    return bias.astype(np.float32), dark.astype(np.float32), flat


def defect_row(kind, row, column, *, extent=(1, 1), value=1.0, doubt=0.1, unit="", columns=200):
    height, width = extent
    return (
        kind,
        row,
        column,
        row if height == 1 else 0 if height > 60 else row,
        (row if height == 1 else 0 if height > 60 else row) + height,
        column,
        column + width,
        height * width,
        value,
        doubt,
        unit,
        abs(value) / doubt,
        0.999,
        "left" if column < columns // 2 else "right",
        "centre" if 0.25 < column / columns < 0.75 else "border",
    )


def defects(shape, rng, masters, *, hot=60):
    """Defects set into the masters where the table says they are."""
    bias, dark, flat = masters
    rows, columns = shape
    table = []
    mask = np.zeros(shape, dtype=np.uint16)
    for kind, count, image, unit in (
        ("hot", hot, dark, "electron / s"),
        ("dead", 6, flat, ""),
        ("dim", 14, flat, ""),
        ("telegraph", 8, bias, "electron"),
    ):
        for _ in range(count):
            row, column = int(rng.integers(2, rows - 2)), int(rng.integers(2, columns - 2))
            value = (
                float(rng.gamma(2, 30) + 40) if image is not flat else float(rng.uniform(0, 0.6))
            )
            image[row, column] = value
            doubt = max(value * 0.03, 0.01)
            table.append(
                defect_row(kind, row, column, value=value, doubt=doubt, unit=unit, columns=columns)
            )
            mask[row, column] |= 1
    column = columns // 3
    flat[:, column] *= 0.96
    table.append(
        defect_row(
            "dim column",
            rows // 2,
            column,
            extent=(rows, 1),
            value=0.96,
            doubt=0.001,
            columns=columns,
        )
    )
    flat[20:24, 30:35] *= 0.7
    table.append(
        defect_row("cluster", 21, 30, extent=(4, 5), value=0.7, doubt=0.01, columns=columns)
    )
    counts = (
        DefectCount("hot_pixels", "device", hot, hot - 1.3, 2.6),
        DefectCount("dead_pixels", "device", 6, 6.0, 0.1),
        DefectCount("bad_columns", "device", 1, 1.0, 0.0),
        DefectCount("clusters", "device", 1, 1.0, 0.0),
    )
    return Defects(np.array(table, dtype=DEFECT), mask, counts, ())


def measurements(rng, *, noise=4.4, spread=1.0):
    made = []
    for output in OUTPUTS:
        scope = f"output {output}"
        jitter = spread * rng.normal(0, 1, 8)
        made += [
            Measurement(
                "conversion_gain", scope, 1.52 + 0.01 * jitter[0], 0.0031, "electron / DN", 9000
            ),
            Measurement("read_noise", scope, noise + 0.2 * jitter[1], 0.021, "electron", 40000),
            Measurement(
                "dark_current", scope, 0.0131 + 0.001 * jitter[2], 0.0006, "electron / s", 25
            ),
            Measurement("prnu", scope, 0.81 + 0.02 * jitter[3], 0.012, "%", 20000),
            Measurement("dsnu", scope, 3.1 + 0.1 * jitter[4], 0.05, "electron", 20000),
            Measurement("linearity_error", scope, 0.71 + 0.04 * jitter[5], 0.035, "%", 12),
            Measurement(
                "saturation_capacity", scope, 104000 + 900 * jitter[6], 520.0, "electron", 12
            ),
            Measurement("dynamic_range", scope, 87.4 + 0.1 * jitter[7], 0.05, "dB", 12),
            Measurement("cti_serial", scope, 3.1e-6, 4.4e-7, "", 400),
        ]
    return tuple(made)


FINDINGS = (
    Finding("note", "flat, 5 s", "lamp drifts by 0.31 % over the stack", "let the lamp warm up"),
    Finding(
        "warning",
        "dark_007.fits",
        "level is 4.1 DN above its fellows",
        "left out; look for a light leak",
        ("dark_current",),
    ),
)


def device(
    serial="CX-0417", *, shape=(160, 200), seed=11, hot=60, noise=4.4, lot="lot 7", place=(3, 5)
):
    """One device with everything in it that a page can show."""
    rng = np.random.default_rng(seed)
    images = pictures(shape, rng)
    found = defects(shape, rng, images, hot=hot)
    units = (("bias", "DN", None), ("dark", "DN", 300.0), ("flat", "", 5.0))
    masters = Masters(
        *(
            Master(
                kind,
                image,
                np.ones(shape, np.float32),
                np.full(shape, 16, np.uint16),
                unit,
                stack(kind, 16, exposure=exposure),
            )
            for (kind, unit, exposure), image in zip(units, images, strict=True)
        )
    )
    asked = recipe(shape)
    measured = measurements(rng, noise=noise)
    inputs = tuple(
        InputFile(f"{serial}/bias_{i:03}.fits", 2 * int(rng.integers(99)), f"{i:064x}")
        for i in range(48)
    )
    result = DeviceResult(
        serial=serial,
        folder="CX-0417",
        lot=lot,
        wafer="W03",
        die_row=place[0],
        die_column=place[1],
        findings=FINDINGS,
        measurements=measured,
        defects=found.counts,
        not_measured={"lag": "needs dark frames taken right after a bright one; the set has none"},
        graded=grade(measured, found.counts, FINDINGS[:1], recipe=asked),
        provenance=Provenance(
            "two-output CCD", "7f" * 32, inputs, {"sensorgrade": "0.1.0", "numpy": "2.4.6"}
        ),
        taken=1.7e9 + 3600 * seed,
    )
    return Sample(result, masters, found, {}, asked)


def renamed(sample, **changes):
    """The sample with some of its result's fields replaced."""
    return replace(sample, result=replace(sample.result, **changes))


def lot(devices, *, seed=4):
    """Results of a lot on wafers, and their recipe: worse at the rim, noise rising in time."""
    one = device(shape=(64, 64))
    rng = np.random.default_rng(seed)
    places = [
        (f"W{wafer:02}", row, column)
        for wafer in range(devices // 97 + 1)
        for row in range(11)
        for column in range(11)
        if (row - 5) ** 2 + (column - 5) ** 2 <= 30
    ]
    results = []
    for index in range(devices):
        wafer, row, column = places[index]
        rim = ((row - 5) ** 2 + (column - 5) ** 2) / 30
        measured = measurements(rng, noise=4.0 + 0.4 * rim + 0.3 * index / devices, spread=0.4)
        hot = int(rng.poisson(22 + 14 * rim))
        counts = (
            DefectCount("hot_pixels", "device", hot, hot - 0.3, 1.5),
            DefectCount("bad_columns", "device", int(rng.random() < 0.05), 0.0, 0.0),
        )
        results.append(
            replace(
                one.result,
                serial=f"CX-{index:04}",
                folder=f"CX-{index:04}",
                wafer=wafer,
                die_row=row,
                die_column=column,
                findings=(),
                measurements=measured,
                defects=counts,
                graded=grade(measured, counts, (), recipe=one.recipe),
                taken=1.7e9 + 1800 * index,
            )
        )
    return results, one.recipe
