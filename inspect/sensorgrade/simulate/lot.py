"""Simulated devices of one kind: a model with its frames from a YAML file, written as a lot."""

from dataclasses import dataclass
from pathlib import Path

from joblib import Parallel, delayed

from sensorgrade.errors import RequestError
from sensorgrade.options import entry
from sensorgrade.recipe.declared import nearest
from sensorgrade.recipe.library import recipe_folder
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.files import write_device
from sensorgrade.simulate.model import SensorModel
from sensorgrade.simulate.plan import FramePlan


@dataclass(frozen=True, slots=True, kw_only=True)
class Simulation:
    """What a model file says: the device and the frames taken of it."""

    device: SensorModel = entry("The sensor and what is wrong with it")
    plan: FramePlan = entry("The frames, and the bench's own faults")


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
    Parallel(n_jobs=threads, prefer="threads")(
        delayed(_write)(simulation, folder / name, name, seed) for name in names
    )
    return tuple(folder / name for name in names)


def _write(simulation: Simulation, folder: Path, serial: str, seed: int) -> None:
    made = simulate_device(simulation.device, simulation.plan, seed=seed, serial=serial)
    write_device(made, folder)
