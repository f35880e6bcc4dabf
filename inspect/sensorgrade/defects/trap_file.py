"""The table of pumped traps as a file that general software reads."""

import io
from pathlib import Path

from astropy.table import MaskedColumn, Table

from sensorgrade.atomic import write_whole
from sensorgrade.measure.pocket_pumping import Trap

WARNING = (
    "Candidates are known species by their distance in standard deviations of the energy; a small"
    " distance names none for certain."
)


def write_trap_table(path: Path, traps: tuple[Trap, ...]) -> None:
    """Write traps as ECSV, one row each; what was not resolved is left empty.

    For every temperature there are columns for the emission time [s], its relative standard
    uncertainty and the probability of capture.

    Raises
    ------
    OSError
        The file cannot be written; nothing is left behind.
    """
    table = Table()
    table["row"] = [trap.row for trap in traps]
    table["column"] = [trap.column for trap in traps]
    table["output"] = [trap.output for trap in traps]
    table["side"] = [trap.side for trap in traps]
    for name in ("amplitude", "amplitude_uncertainty", "significance"):
        table[name] = [getattr(trap, name) for trap in traps]
    kelvins = sorted({round(e.temperature, 1) for trap in traps for e in trap.emissions})
    for kelvin in kelvins:
        emissions = [
            next((e for e in trap.emissions if round(e.temperature, 1) == kelvin), None)
            for trap in traps
        ]
        for name in ("tau", "tau_relative", "capture"):
            _add(
                table,
                f"{name}_{kelvin:g}K",
                [None if e is None else getattr(e, name) for e in emissions],
            )
    for name in ("energy", "standard_uncertainty", "cross_section", "cross_section_relative"):
        called = "energy_uncertainty" if name == "standard_uncertainty" else name
        _add(table, called, [None if t.energy is None else getattr(t.energy, name) for t in traps])
    table["candidate"] = [trap.candidates[0][0] if trap.candidates else "" for trap in traps]
    _add(
        table,
        "candidate_distance",
        [trap.candidates[0][1] if trap.candidates else None for trap in traps],
    )
    for name, (unit, meaning) in MEANINGS.items():
        table[name].unit, table[name].description = unit, meaning
    table.meta["comments"] = [WARNING]
    text = io.StringIO()
    table.write(text, format="ascii.ecsv")
    write_whole(path, text.getvalue())


MEANINGS = {
    "row": (None, "row of the trap in the assembled image, from 0"),
    "column": (None, "column, from 0"),
    "side": (None, "where pumping carries its electrons: to the register, or away from it"),
    "amplitude": ("electron", "largest charge carried at one dwell time"),
    "significance": (None, "deviations of noise over all dwell times"),
    "energy": ("eV", "below the conduction band"),
    "energy_uncertainty": ("eV", "standard uncertainty"),
    "cross_section": ("cm2", "for electron masses of 1.08 and 0.26; others move it up to 7 times"),
    "candidate": (None, "known species nearest in energy"),
    "candidate_distance": (None, "its distance in standard deviations"),
}


def _add(table: Table, name: str, values: list[float | None]) -> None:
    """A column of numbers that may be missing."""
    table[name] = MaskedColumn(
        [0.0 if value is None else value for value in values],
        dtype=float,
        mask=[value is None for value in values],
    )
