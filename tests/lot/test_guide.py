"""What the guide says of the ledger holds for a real one."""

import re
import sqlite3

from lot.fakes import RECIPE
from lot.results import invented_result
from sensorgrade.guides.topics import guide_text
from sensorgrade.lot.fingerprint import Fingerprint
from sensorgrade.lot.ledger import write_ledger

GUIDE = guide_text("lots-and-clusters")


def test_every_table_is_described_and_every_question_is_answered(tmp_path):
    with write_ledger(tmp_path) as ledger:
        ledger.begin(RECIPE, jobs=2, threads=1)
        for number in range(3):
            ledger.record(
                invented_result(number),
                fingerprint=Fingerprint("", ""),
                seconds=1.0,
                stages=[("masters", 0.7), ("defects", 0.3)],
            )
    connection = sqlite3.connect(tmp_path / "lot.sqlite")
    tables = {
        name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type='table'")
    }
    described = set(re.findall(r"^\| ([a-z_]+) \|", GUIDE, re.MULTILINE)) - {"table"}
    assert described == tables - {"moving"}
    questions = re.findall(r"^SELECT .*?;", GUIDE, re.MULTILINE | re.DOTALL)
    assert len(questions) == 4
    answers = [connection.execute(question).fetchall() for question in questions]
    assert answers[0] == [("W00", 3, 3)]
    assert answers[1][0][0] == "S00002"
    assert answers[2] == []  # nothing was rejected
    assert answers[3] == [("masters", 0.7), ("defects", 0.3)]
    connection.close()
