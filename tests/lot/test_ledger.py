import sqlite3
from dataclasses import replace
from pathlib import Path

import pytest

from lot.results import invented_result
from sensorgrade.errors import RequestError
from sensorgrade.lot.database import NAME, SCHEMA
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.fingerprint import Fingerprint
from sensorgrade.lot.ledger import Ledger, read_ledger, write_ledger
from sensorgrade.recipe.model import DecisionRule, FrameRules, Recipe, Sensor

RECIPE = Recipe(
    name="two-output CCD",
    sensor=Sensor(technology="ccd", pixel_pitch=15.0),
    frames=FrameRules(),
    stages={},
    zones={},
    decision=DecisionRule(),
    grades=(),
    path="ccd.yaml",
    text="name: two-output CCD\n",
    sha256="cd" * 32,
)
SAME = Fingerprint("d", "s")


def begun(folder: Path) -> Ledger:
    ledger = write_ledger(folder)
    ledger.begin(RECIPE, jobs=2, threads=1)
    return ledger


def kept(ledger: Ledger, number: int, **changes: object) -> None:
    result = replace(invented_result(number), **changes)  # type: ignore[arg-type]
    ledger.record(
        result, fingerprint=SAME, seconds=1.5, stages=[("masters", 1.0)], files=["mask.fits"]
    )


def test_results_come_back_as_they_were_recorded(tmp_path):
    with begun(tmp_path) as ledger:
        for number in (3, 1, 2):
            kept(ledger, number)
    with read_ledger(tmp_path) as ledger:
        assert ledger.results() == [invented_result(number) for number in (1, 2, 3)]


def test_a_device_recorded_again_takes_the_place_of_the_first(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        kept(ledger, 1, wafer="W99")
        assert [result.wafer for result in ledger.results()] == ["W99"]
        connection = sqlite3.connect(tmp_path / "lot.sqlite")
        (orphans,) = connection.execute(
            "SELECT count(*) FROM measurements WHERE device NOT IN (SELECT device FROM devices)"
        ).fetchone()
        assert orphans == 0
        assert connection.execute("PRAGMA foreign_key_check").fetchall() == []
        connection.close()


def test_a_limit_is_kept_once_for_all_devices(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        kept(ledger, 2)
        connection = sqlite3.connect(tmp_path / "lot.sqlite")
        assert connection.execute("SELECT count(*) FROM limits").fetchone() == (2,)
        connection.close()


def test_only_an_inspected_device_has_a_fingerprint(tmp_path):
    failure = Failure("S9", "S9", None, "W1", 1, 2, "no flats")
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        ledger.record_failure(failure, recipe=RECIPE, fingerprint=SAME, seconds=0.1)
        assert ledger.fingerprint_of("S00001") == SAME
        assert ledger.fingerprint_of("S9") is None
        assert ledger.fingerprint_of("never seen") is None
        assert ledger.failures() == [failure]


def test_opening_a_folder_takes_the_device_out_and_tells_what_no_longer_belongs_there(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        kept(ledger, 2)
        assert ledger.open_folder("S00001", names=("device.html",)) == ("mask.fits",)
        assert [result.serial for result in ledger.results()] == ["S00002"]
        # A run that was killed here may have moved the page already.
        assert set(ledger.open_folder("S00001", names=())) == {"mask.fits", "device.html"}
        kept(ledger, 1)
        assert ledger.open_folder("S00001", names=()) == ("mask.fits",)


def test_the_exit_status_is_that_of_the_worst_device(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        assert ledger.tally().exit_status == 0
        graded = invented_result(1).graded
        kept(ledger, 2, graded=replace(graded, decision="ungraded", grade=None))
        assert ledger.tally().exit_status == 0
        kept(ledger, 3, graded=replace(graded, decision="undecided", grade=None))
        assert ledger.tally().exit_status == 1
        failure = Failure("S9", "S9", None, None, None, None, "no flats")
        ledger.record_failure(failure, recipe=RECIPE, fingerprint=SAME, seconds=0.1)
        assert ledger.tally().exit_status == 3
        assert ledger.tally().devices == 4


def test_runs_say_how_they_ended(tmp_path):
    with begun(tmp_path) as ledger:
        ledger.end("finished")
    with begun(tmp_path) as ledger:
        pass  # as if killed
    with read_ledger(tmp_path) as ledger:
        assert [(run.ending, run.jobs, run.recipe) for run in ledger.runs()] == [
            ("finished", 2, "ccd.yaml"),
            (None, 2, "ccd.yaml"),
        ]


def test_a_reader_sees_what_is_recorded_while_the_run_goes_on(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
        with read_ledger(tmp_path) as reader:
            assert len(reader.results()) == 1
            kept(ledger, 2)
            assert len(reader.results()) == 2


def test_nothing_but_the_ledger_is_left_after_it_is_closed(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
    assert [path.name for path in tmp_path.iterdir()] == ["lot.sqlite"]


def test_a_ledger_on_a_read_only_medium_can_be_read(tmp_path, monkeypatch):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
    connect = sqlite3.connect

    def no_wal(address, **options):
        if "immutable" not in address:
            raise sqlite3.OperationalError("unable to open database file")
        return connect(address, **options)

    monkeypatch.setattr(sqlite3, "connect", no_wal)
    with read_ledger(tmp_path) as ledger:
        assert len(ledger.results()) == 1


def test_what_is_no_ledger_is_refused_in_a_sentence(tmp_path):
    with pytest.raises(RequestError, match=r"no lot\.sqlite here"):
        read_ledger(tmp_path)
    path = tmp_path / "lot.sqlite"
    path.write_bytes(b"not a database at all, but a text of some length" * 100)
    for opened in (read_ledger, write_ledger):
        with pytest.raises(RequestError, match="ledger"):
            opened(tmp_path)
    path.unlink()
    connection = sqlite3.connect(path)
    connection.execute("CREATE TABLE theirs (x)")
    connection.commit()
    connection.close()
    for opened in (read_ledger, write_ledger):
        with pytest.raises(RequestError, match="another program's"):
            opened(tmp_path)


def test_a_ledger_of_a_newer_version_is_left_alone(tmp_path):
    write_ledger(tmp_path).__exit__(None, None, None)
    connection = sqlite3.connect(tmp_path / "lot.sqlite")
    connection.execute("PRAGMA user_version = 999")
    connection.close()
    for opened in (read_ledger, write_ledger):
        with pytest.raises(RequestError, match="update sensorgrade"):
            opened(tmp_path)


def test_a_folder_that_cannot_be_written_is_told(tmp_path):
    with pytest.raises(RequestError, match="cannot be"):
        write_ledger(tmp_path / "absent")


def test_every_table_and_column_is_asked_about_with_an_index(tmp_path):
    with begun(tmp_path) as ledger:
        kept(ledger, 1)
    connection = sqlite3.connect(tmp_path / "lot.sqlite")
    questions = (
        "SELECT device FROM measurements WHERE name = 'dsnu' AND scope = 'device' AND value > 1",
        "SELECT device FROM defect_counts WHERE kind = 'hot_pixels' AND found > 9",
        "SELECT folder FROM devices WHERE lot = 'L7' AND wafer = 'W00'",
        "SELECT folder FROM devices WHERE serial = 'S00001'",
        "SELECT device FROM limit_results WHERE \"limit\" = 1 AND outcome = 'reject'",
    )
    for question in questions:
        plan = " ".join(
            str(row[-1]) for row in connection.execute(f"EXPLAIN QUERY PLAN {question}")
        )
        assert "USING" in plan and "INDEX" in plan, (question, plan)
    connection.close()


def test_a_ledger_of_the_first_form_is_brought_up_to_date_and_keeps_its_devices(tmp_path):
    connection = sqlite3.connect(tmp_path / NAME)
    connection.executescript((SCHEMA / "1.sql").read_text() + "PRAGMA user_version = 1;")
    connection.execute("INSERT INTO runs VALUES (1, '', NULL, NULL, '', '', '', '', '', 1, 1, 1)")
    connection.execute(
        "INSERT INTO devices (run, serial, folder, outcome, decision, recipe, recipe_sha256,"
        " versions, described, state, finished, seconds) VALUES"
        " (1, 'S1', 'S1', 'inspected', 'accept', '', '', '{}', '', '', '', 1)"
    )
    connection.commit()
    connection.close()
    with pytest.raises(RequestError, match="ledger of form 1, this program reads 2"):
        read_ledger(tmp_path)
    with write_ledger(tmp_path) as ledger:
        kept(begun(tmp_path), 2)
        assert [result.serial for result in ledger.results()] == ["S00002", "S1"]
        assert list(ledger.select("SELECT count(*) FROM candidates")) == [(0,)]
