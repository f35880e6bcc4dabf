"""Results of devices that were never inspected, for tests of what keeps them."""

import hashlib

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.decision import Graded, LimitResult
from sensorgrade.lot.result import DeviceResult, InputFile, Provenance
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Limit

LIMITS = tuple(
    Limit(name, "<=", bound, unit, line)
    for line, (name, bound, unit) in enumerate(
        [("read_noise", 5.0, "electron"), ("dark_current", 0.1, "electron / s")], start=20
    )
)


def invented_result(
    number: int,
    *,
    outputs: int = 2,
    inputs: int = 3,
    names: tuple[str, ...] = ("conversion_gain", "read_noise", "dark_current"),
    grades: tuple[str, ...] = ("science", "engineering"),
    limits: tuple[Limit, ...] = LIMITS,
    decision: str = "accept",
    grade: str | None = "science",
) -> DeviceResult:
    """Device ``number``; all of its numbers follow from that one."""
    seed = number * 0.001
    scopes = [f"output {letter}" for letter in "abcdefgh"[:outputs]]
    return DeviceResult(
        serial=f"S{number:05}",
        folder=f"S{number:05}",
        lot="L7",
        wafer=f"W{number // 100:02}",
        die_row=number % 100 // 10,
        die_column=number % 10,
        findings=(
            Finding("note", "bias, 10 frames", "the lamp drifted by 0.4 %", "nothing to do"),
            Finding("warning", "dark_0003.fits", 'truncated, <b>"x"</b>', "copy again", ("dsnu",)),
        ),
        measurements=tuple(
            Measurement(name, scope, 1 / 3 + seed + place, 1e-17 + seed / 7, "electron / s", 12345)
            for place, name in enumerate(names)
            for scope in scopes
        ),
        defects=tuple(
            DefectCount(kind, scope, number % 50, number % 50 + 0.1, 1.25)
            for kind in ("hot_pixels", "bad_columns")
            for scope in ("device", *scopes)
        ),
        not_measured={"linearity": "needs flats at three levels or more; there is one"},
        graded=Graded(
            grade=grade,
            decision=decision,  # type: ignore[arg-type]
            reasons=(f"read_noise of output a is {seed} electron, limit 5 electron",),
            limits=tuple(
                LimitResult(
                    grade=name,
                    limit=limit,
                    scope="output a",
                    value=None if limit.name == "dark_current" else 4.9 + seed,
                    standard_uncertainty=None if limit.name == "dark_current" else 0.05,
                    margin=0.1 - seed,
                    margin_in_uncertainties=2.0,
                    probability=0.977,
                    outcome="accept",
                    reason=f"{limit.name} of output a: within {limit.bound} {limit.unit}",
                )
                for name in grades
                for limit in limits
            ),
        ),
        provenance=Provenance(
            recipe="two-output CCD",
            recipe_sha256="ab" * 32,
            inputs=tuple(
                InputFile(
                    f"S{number:05}/flat_{place:03}.fits",
                    8400960,
                    hashlib.sha256(f"{number} {place}".encode()).hexdigest(),
                )
                for place in range(inputs)
            ),
            versions={"sensorgrade": "0.1.0", "numpy": "2.4.6"},
        ),
        taken=1.7e9 + number,
    )
