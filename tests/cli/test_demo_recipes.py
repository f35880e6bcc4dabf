"""``sensorgrade demo --recipe``: devices of every kind are made, inspected and graded."""

import pytest
from click.testing import CliRunner

from sensorgrade.cli.main import command
from sensorgrade.lot.ledger import read_ledger
from sensorgrade.simulate.lot import model_names

QUICK = ("wafer-probe", "pocket-pumping")
KINDS = [name for name in model_names() if not name.endswith("-after")]


@pytest.mark.parametrize(
    "name",
    [pytest.param(one, marks=() if one in QUICK else pytest.mark.nightly) for one in KINDS],
)
def test_devices_of_the_kind_are_graded(name, tmp_path):
    shown = CliRunner().invoke(command, ["demo", "--recipe", name, "--out", str(tmp_path)])
    assert shown.exit_code == 0, shown.output
    with read_ledger(tmp_path / "results") as ledger:
        results = ledger.results()
        assert not ledger.failures()
    assert results and all(one.graded.decision == "accept" for one in results), shown.output
    assert len({one.wafer for one in results}) == 1
    if name == "screening":
        assert "sensorgrade compare" in shown.output
        assert (tmp_path / "results-after" / "lot.html").exists()


def test_a_recipe_without_simulated_devices_is_refused_with_those_that_have_some(tmp_path):
    shown = CliRunner().invoke(
        command, ["demo", "--recipe", "twilight-flats", "--out", str(tmp_path)]
    )
    assert shown.exit_code != 0
    assert "no simulated devices belong to it; there are some for demo, cmos-12-bit" in str(
        shown.exception
    )
    assert not list(tmp_path.iterdir())
