"""Charge traps under pumping: where they lie, and what they carry to the neighbouring row."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import RequestError
from sensorgrade.frames.geometry import Geometry
from sensorgrade.silicon import emission_time
from sensorgrade.simulate.model import TrapModel
from sensorgrade.simulate.placing import output_at


@dataclass(frozen=True, slots=True)
class PlacedTrap:
    """A trap under the pixel (``row``, ``column``) of the assembled image.

    Pumping carries its electrons into row + ``step``; ``energy`` [eV], ``cross_section`` [cm²],
    ``capture`` the probability of capture in one cycle.
    """

    row: int
    column: int
    step: int
    energy: float
    cross_section: float
    capture: float
    output: str

    def emission_time(self, kelvin: float) -> float:
        """Mean time [s] for which it holds an electron."""
        return emission_time(self.energy, self.cross_section, kelvin)


def placed_traps(
    models: tuple[TrapModel, ...], layout: Geometry, rng: np.random.Generator
) -> tuple[PlacedTrap, ...]:
    """Every trap of the model with its place; pixels and both rows lie in one output.

    Raises
    ------
    RequestError
        A stated place leaves the image.
    """
    rows, columns = layout.shape
    placed = []
    for at, model in enumerate(models):
        for _ in range(model.count):
            while True:
                row = int(rng.integers(rows)) if model.row is None else model.row
                column = int(rng.integers(columns)) if model.column is None else model.column
                if not (0 <= row < rows and 0 <= column < columns):
                    raise RequestError(
                        f"traps[{at}]: row {row}, column {column} leaves the image of"
                        f" {rows} x {columns} (rows x columns)"
                    )
                output = output_at(layout, row, column)
                register = 1 if output.corner.startswith("top") else -1
                sides = {"register": register, "away": -register}
                step = sides.get(model.toward) or int(rng.choice((-1, 1)))
                if output.place.row_start <= row + step < output.place.row_stop:
                    break
                if model.row is not None:
                    raise RequestError(f"traps[{at}].row: pumping carries charge off the output")
            placed.append(
                PlacedTrap(
                    row=row,
                    column=column,
                    step=step,
                    energy=model.energy,
                    cross_section=model.cross_section,
                    capture=model.capture,
                    output=output.name,
                )
            )
    return tuple(placed)


def pump(
    charge: NDArray[np.float32],
    traps: tuple[PlacedTrap, ...],
    *,
    cycles: int,
    phase_time: float,
    kelvin: float,
    rng: np.random.Generator,
) -> None:
    """Pump ``charge`` (M, N) [electron] in place.

    In each cycle an empty trap captures with its probability while its packet lies over it. What
    it emits between one and two dwell times t later joins the packet of the neighbouring row, so
    of N cycles a binomial number carries an electron, with probability
    Pc (exp(-t / tau) - exp(-2 t / tau)); what comes earlier or later goes back to its own packet.
    No packet gives more than it holds, and no electron is lost.

    Parameters
    ----------
    phase_time : float [us]
    """
    for trap in traps:
        decay = np.exp(-phase_time * 1e-6 / trap.emission_time(kelvin))
        carried = rng.binomial(cycles, trap.capture * (decay - decay**2))
        carried = min(carried, charge[trap.row, trap.column])
        charge[trap.row, trap.column] -= carried
        charge[trap.row + trap.step, trap.column] += carried
