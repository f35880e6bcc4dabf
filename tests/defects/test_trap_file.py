"""The table of traps reads back, with what was not resolved left empty."""

import numpy as np
import pytest
from astropy.table import Table

from sensorgrade.defects.trap_file import write_trap_table
from sensorgrade.measure.emission_fit import Energy
from sensorgrade.measure.pocket_pumping import Emission, Trap


def trap(row, emissions, energy=None, candidates=()):
    return Trap(
        row=row,
        column=4,
        output="left",
        side="away",
        amplitude=500.0,
        amplitude_uncertainty=30.0,
        significance=20.0,
        emissions=emissions,
        energy=energy,
        candidates=candidates,
    )


def test_traps_read_back_with_units_and_gaps(tmp_path):
    cold, warm = (
        Emission(t, tau, 0.03, 0.9, 0.02, 5) for t, tau in ((153.15, 1e-4), (163.2, 2e-5))
    )
    deep = trap(3, (cold, warm), Energy(0.31, 0.004, 4e-15, 0.3), (("unidentified", 0.7),))
    write_trap_table(tmp_path / "traps.ecsv", (deep, trap(8, (warm,)), trap(9, ())))
    table = Table.read(tmp_path / "traps.ecsv")
    assert list(table["row"]) == [3, 8, 9]
    assert table["energy"].unit == "eV"
    assert table["energy"][0] == 0.31
    assert np.ma.is_masked(table["energy"][1])
    assert table["tau_163.2K"][1] == 2e-5
    assert np.ma.is_masked(table["tau_153.2K"][1])
    assert table["candidate"][0] == "unidentified"
    assert table["candidate_distance"][0] == pytest.approx(0.7)
    assert "names none for certain" in table.meta["comments"][0]


def test_no_trap_is_a_table_without_rows(tmp_path):
    write_trap_table(tmp_path / "traps.ecsv", ())
    assert len(Table.read(tmp_path / "traps.ecsv")) == 0
