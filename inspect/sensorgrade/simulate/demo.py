"""The demonstration's lot: twelve devices of an invented delivery, each with its own story.

Heron is an invented spectrograph whose slit is watched by small two-output CCDs. Lot H26 brings
twelve of them from two wafers. Four are fit for science, four for the laboratory only, and four
are to be sent back, each for a reason of its own.
"""

from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

from joblib import Parallel, delayed

from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.files import write_device
from sensorgrade.simulate.model import (
    Amplifier,
    DarkSignal,
    DefectModel,
    Offsets,
    Response,
    SensorModel,
)
from sensorgrade.simulate.plan import FramePlan, frame_plan

LOT = "H26"
ROWS, COLUMNS, OVERSCAN = 256, 160, 16  # of each output


@dataclass(frozen=True, slots=True)
class DemoDevice:
    """One device of the lot: what it is, the frames taken, and the grade it deserves.

    ``expected`` is None for a device that must be rejected; ``why`` is one sentence for people.
    """

    serial: str
    wafer: str
    die_row: int
    die_column: int
    model: SensorModel
    plan: FramePlan
    expected: str | None
    why: str


def demo_lot() -> tuple[DemoDevice, ...]:
    """The twelve devices, in the order of their serial numbers."""
    sound = _sound()
    left, right = sound.amplifiers["left"], sound.amplifiers["right"]

    def with_defects(*defects: DefectModel) -> SensorModel:
        return replace(sound, defects=(*sound.defects, *defects))

    stories: list[tuple[str, int, int, SensorModel, str | None, str]] = [
        ("04", 2, 3, sound, "science", "As good as the design: nothing to report."),
        (
            "04",
            2,
            4,
            replace(sound, amplifiers={"left": left, "right": replace(right, read_noise=9.0)}),
            "engineering",
            "The right amplifier is noisy: 9 electron where 6 are allowed.",
        ),
        (
            "04",
            3,
            3,
            with_defects(DefectModel(kind="hot", count=150, current=50.0)),
            "engineering",
            "150 hot pixels are too many for long exposures, yet can be masked.",
        ),
        (
            "04",
            3,
            4,
            with_defects(DefectModel(kind="hot", count=8, current=50.0)),
            "science",
            "A handful of hot pixels, well within what science allows.",
        ),
        (
            "04",
            4,
            2,
            replace(sound, dark=replace(sound.dark, current=6.0)),
            None,
            "Six times the dark current that even the laboratory can use.",
        ),
        (
            "04",
            4,
            5,
            replace(sound, response=Response(pixel=2.2, column=0.1)),
            "engineering",
            "The response differs by 2.2 % from pixel to pixel: the polish went wrong.",
        ),
        (
            "07",
            1,
            3,
            with_defects(DefectModel(kind="dead", column=211, row=0, height=0)),
            "engineering",
            "One dead column, right through the field.",
        ),
        (
            "07",
            2,
            2,
            replace(sound, full_well=42e3),
            None,
            "Pixels are full at 42,000 electron, half of what was ordered.",
        ),
        (
            "07",
            2,
            5,
            with_defects(DefectModel(kind="dead", count=9, height=4, width=4)),
            None,
            "Dust under the coating: nine dark clusters of 16 pixels.",
        ),
        (
            "07",
            3,
            3,
            with_defects(DefectModel(kind="dead", count=6)),
            "science",
            "Six dead pixels, all alone.",
        ),
        (
            "07",
            3,
            4,
            replace(sound, amplifiers={"left": replace(left, curvature=30.0), "right": right}),
            None,
            "The left amplifier bends: bright light reads far too low.",
        ),
        (
            "07",
            4,
            3,
            replace(
                sound,
                amplifiers={
                    "left": replace(left, conversion_gain=2.1),
                    "right": replace(right, conversion_gain=1.9),
                },
            ),
            "science",
            "Its two amplifiers differ by 10 % in gain, as they may.",
        ),
    ]
    plan = _plan()
    return tuple(
        DemoDevice(f"HRN-{number:03d}", wafer, row, column, model, plan, expected, why)
        for number, (wafer, row, column, model, expected, why) in enumerate(stories, start=101)
    )


def write_demo(
    lot: Iterable[DemoDevice], folder: Path, *, seed: int = 0, threads: int = -1
) -> None:
    """Take the frames of every device and write them, each device in a folder of its own.

    Parameters
    ----------
    lot : iterable of DemoDevice
        From `demo_lot`.
    folder : Path
        Receives one folder for each device, named by serial number.
    seed : int
        Another seed gives other devices with the same stories.
    threads : int
        Cores to use, all by default.

    Raises
    ------
    OSError
        A file cannot be written.
    """
    Parallel(n_jobs=threads, prefer="threads")(
        delayed(_write)(device, folder, seed) for device in lot
    )


def _write(device: DemoDevice, folder: Path, seed: int) -> None:
    made = simulate_device(device.model, device.plan, seed=seed, serial=device.serial)
    frames = replace(
        made.frames,
        lot=LOT,
        wafer=device.wafer,
        die_row=device.die_row,
        die_column=device.die_column,
    )
    write_device(replace(made, frames=frames), folder / made.frames.folder)


def _sound() -> SensorModel:
    """A device as designed."""
    start = 2 * COLUMNS
    return SensorModel(
        sensor=Sensor(
            technology="ccd",
            pixel_pitch=13.0,
            adc_bits=16,
            outputs={
                "left": OutputOptions(
                    image=Section(0, ROWS, 0, COLUMNS),
                    overscan=Section(0, ROWS, start, start + OVERSCAN),
                    corner="bottom left",
                ),
                "right": OutputOptions(
                    image=Section(0, ROWS, COLUMNS, start),
                    overscan=Section(0, ROWS, start + OVERSCAN, start + 2 * OVERSCAN),
                    corner="bottom right",
                ),
            },
        ),
        rows=ROWS,
        columns=start + 2 * OVERSCAN,
        amplifiers={
            "left": Amplifier(read_noise=4.2, bias_level=1010.0, bias_drift=0.3, curvature=0.6),
            "right": Amplifier(read_noise=4.5, bias_level=1180.0, bias_drift=0.3, curvature=0.6),
        },
        full_well=95e3,
        full_well_spread=1.0,
        variance_curvature=-1e-6,
        response=Response(pixel=0.7, column=0.1),
        dark=DarkSignal(current=0.2, reference=-30.0, nonuniformity=10.0),
        offsets=Offsets(pixel=0.8, column=0.3),
        cti_parallel=1e-6,
        cti_serial=1e-6,
        defects=(DefectModel(kind="hot", count=2, current=50.0),),
    )


def _plan() -> FramePlan:
    """37 frames, enough to decide every limit of the recipe by a wide margin."""
    return frame_plan(
        bias=10,
        darks=((5, 100.0),),
        levels=(3e3, 1e4, 2e4, 35e3, 5e4, 65e3, 8e4, 105e3),
        flats=((6, 3e4),),
        temperature=-30.0,
        shading=3.0,
        lamp_noise=0.1,
    )
