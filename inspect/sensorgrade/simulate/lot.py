"""Simulated devices of one kind: a model with its frames from a YAML file, written as a lot."""

import csv
import io
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from joblib import Parallel, delayed

from sensorgrade.errors import RequestError
from sensorgrade.options import entry, number
from sensorgrade.recipe.declared import nearest
from sensorgrade.recipe.library import recipe_folder
from sensorgrade.recipe.model import FrameRules
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.files import CARDS, write_device
from sensorgrade.simulate.model import SensorModel
from sensorgrade.simulate.plan import FramePlan


@dataclass(frozen=True, slots=True, kw_only=True)
class WaferPlan:
    """Round wafers, filled row by row, one after the other."""

    lot: str = entry("The lot's name")
    across: int = number("Dies across the middle of a wafer", minimum=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Simulation:
    """What a model file says: the device and the frames taken of it."""

    device: SensorModel = entry("The sensor and what is wrong with it")
    plan: FramePlan = entry("The frames, and the bench's own faults")
    devices: int = number("How many the demonstration makes", default=2, minimum=1)
    frames: FrameRules = entry(
        "How frames say what they are, as in a recipe", default_factory=FrameRules
    )
    wafer: WaferPlan | None = entry(
        "The wafers that the devices are dies of; omit for packaged ones", default=None
    )


def model_names() -> tuple[str, ...]:
    """Names of the ready models, which lie beside the ready recipes, sorted."""
    return tuple(sorted(path.stem for path in (recipe_folder() / "models").glob("*.yaml")))


def find_model(name_or_path: str) -> Path:
    """The file that a user means: a path to a model, or the name of a ready one.

    Raises
    ------
    RequestError
        Neither; the message lists the ready models.
    """
    if name_or_path in model_names():
        return recipe_folder() / "models" / f"{name_or_path}.yaml"
    path = Path(name_or_path)
    if not path.exists():
        raise RequestError(
            f"{name_or_path}: no such model file, and no ready model of that name"
            f"{nearest(name_or_path, model_names())}"
        )
    return path


def serials(devices: int) -> tuple[str, ...]:
    """Serial numbers of simulated devices: ``"SIM-0001"`` and on."""
    return tuple(f"SIM-{number:04d}" for number in range(1, devices + 1))


def write_lot(
    simulation: Simulation, folder: Path, *, devices: int = 1, seed: int = 0, threads: int = -1
) -> tuple[Path, ...]:
    """Simulate ``devices`` devices alike and write each into a folder of its own.

    The devices share the model; what the model leaves to chance differs from one to the next.

    Parameters
    ----------
    simulation : Simulation
    folder : Path
        Receives one folder for each device, named by serial number.
    devices, seed : int
        The same seed gives the same devices, however many are asked for.
    threads : int
        Cores to use, all by default.

    Returns
    -------
    tuple of Path
        The devices' folders.

    Raises
    ------
    RequestError
        Sections, defects or converter do not fit the frame.
    OSError
        A file cannot be written.
    """
    names = serials(devices)
    told = Parallel(n_jobs=threads, prefer="threads")(
        delayed(_write)(simulation, folder, number, name, seed) for number, name in enumerate(names)
    )
    if simulation.frames.sorted_by == "manifest":
        rows = [row for rows in told for row in rows]
        (folder / str(simulation.frames.manifest)).write_text(
            _manifest(rows, simulation.frames), encoding="utf-8"
        )
    return tuple(folder / name for name in names)


def _write(
    simulation: Simulation, folder: Path, number: int, serial: str, seed: int
) -> list[dict[str, Any]]:
    made = simulate_device(simulation.device, simulation.plan, seed=seed, serial=serial)
    if simulation.wafer is not None:
        made = replace(made, frames=replace(made.frames, **_die(simulation.wafer, number)))
    told = write_device(made, folder / serial, rules=simulation.frames)
    return [{**row, "file": f"{serial}/{row['file']}"} for row in told]


def _die(plan: WaferPlan, number: int) -> dict[str, Any]:
    """Lot, wafer and place of the die of that number; places count from 1."""
    middle = (plan.across - 1) / 2
    places = [
        (row, column)
        for row in range(plan.across)
        for column in range(plan.across)
        if (row - middle) ** 2 + (column - middle) ** 2 <= (plan.across / 2) ** 2
    ]
    wafer, die = divmod(number, len(places))
    row, column = places[die]
    return {
        "lot": plan.lot,
        "wafer": f"{wafer + 1:02d}",
        "die_row": row + 1,
        "die_column": column + 1,
    }


def _manifest(rows: list[dict[str, Any]], rules: FrameRules) -> str:
    """CSV whose columns are called as the rules say."""
    columns = {"file": "file"} | {
        name: column for name in CARDS if (column := getattr(rules, name)) is not None
    }
    text = io.StringIO()
    table = csv.writer(text, lineterminator="\n")
    table.writerow(columns.values())
    table.writerows([row.get(name, "") for name in columns] for row in rows)
    return text.getvalue()
