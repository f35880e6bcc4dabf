import json
from dataclasses import replace

import pytest
from click.testing import CliRunner

from lot.fakes import RECIPE
from lot.results import invented_result
from sensorgrade.cli.lot import command
from sensorgrade.cli.main import main
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.fingerprint import Fingerprint
from sensorgrade.lot.ledger import write_ledger
from sensorgrade.lot.lock import run_lock

SAME = Fingerprint("d", "s")


@pytest.fixture
def run(tmp_path):
    folder = tmp_path / "run"
    folder.mkdir()
    with write_ledger(folder) as ledger:
        ledger.begin(RECIPE, jobs=2, threads=1)
        ledger.record(invented_result(1), fingerprint=SAME, seconds=1.25)
        rejected = replace(invented_result(2).graded, decision="reject", grade=None)
        ledger.record(replace(invented_result(2), graded=rejected), fingerprint=SAME, seconds=2.0)
        ledger.end("finished")
    return folder


def test_a_line_for_each_device_and_the_status_of_the_worst(run):
    answer = CliRunner().invoke(command, [str(run)])
    lines = answer.output.splitlines()
    assert answer.exit_code == 1
    assert lines[0].split("\t")[:2] == ["serial", "wafer"]
    assert lines[1].split("\t")[:6] == ["S00001", "W00", "0,1", "science", "accept", "1.2"]
    assert lines[2].split("\t")[4] == "reject"
    assert lines[3] == "2 devices: 1 accepted, 1 rejected"
    assert len(lines) == 4


def test_a_failed_device_shows_why_and_a_hostile_serial_does_no_harm(run):
    with write_ledger(run) as ledger:
        ledger.begin(RECIPE, jobs=2, threads=1)
        failure = Failure("\x1b[2J=1", "x", None, None, None, None, "no flats")
        ledger.record_failure(failure, recipe=RECIPE, fingerprint=SAME, seconds=0.1)
    answer = CliRunner().invoke(command, [str(run)])
    assert answer.exit_code == 3
    assert "\\u001b[2J=1\t\t\t\tfailed\t0.1\tno flats" in answer.output
    assert "was killed; the same inspection given again does what is left" in answer.output
    assert "\x1b" not in answer.output


def test_json_holds_the_same(run):
    document = json.loads(CliRunner().invoke(command, [str(run), "--json"]).output)
    assert [device["serial"] for device in document["devices"]] == ["S00001", "S00002"]
    assert document["tally"]["rejected"] == 1
    assert document["runs"][0]["ending"] == "finished"


def test_tables_are_written_where_they_were_asked_for(run, tmp_path):
    files = [tmp_path / name for name in ("t.csv", "t.ecsv", "t.parquet")]
    arguments = [f"--{path.suffix[1:]}={path}" for path in files]
    answer = CliRunner().invoke(command, [str(run), "--quiet", *arguments])
    assert answer.output == ""
    assert all(path.stat().st_size > 500 for path in files)
    assert sorted(path.name for path in run.iterdir()) == ["lot.sqlite"]


def test_a_folder_without_a_ledger_is_told(tmp_path, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["lot", str(tmp_path)])
    assert stopped.value.code == 2
    assert "no lot.sqlite here" in capsys.readouterr().err


def test_a_table_that_cannot_be_written_is_told(run, tmp_path, capsys):
    with pytest.raises(SystemExit) as stopped:
        main(["lot", str(run), "--csv", str(tmp_path / "absent" / "t.csv")])
    assert stopped.value.code == 2
    assert "t.csv: cannot be written" in capsys.readouterr().err


def test_wafer_maps_yields_and_clustering(run):
    answer = CliRunner().invoke(command, [str(run), "--wafers", "--reticle", "1", "2"])
    assert answer.exit_code == 1
    assert "Wafer W00\n  column 1 to 2\n  row    0  A R\n" in answer.output
    assert "  W00: 1 of 2, 50.0 %" in answer.output
    assert "row 0, column 1: 0 of 1" in answer.output
    assert "Neighbouring pairs of dies not accepted: 0" in answer.output
    document = json.loads(CliRunner().invoke(command, [str(run), "--wafers", "--json"]).output)
    assert document["places"]["clustering"]["pairs"] == 0


def test_a_run_that_is_at_work_is_told_from_one_that_was_killed(run):
    with run_lock(run):
        answer = CliRunner().invoke(command, [str(run)])
    assert "A run is at work (process " in answer.output
    assert "A run is at work" not in CliRunner().invoke(command, [str(run)]).output
