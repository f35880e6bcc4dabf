import csv
import io
from dataclasses import replace

import pytest
from astropy.table import Table

from lot.results import invented_result
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.lot_table import Column, lot_columns, lot_csv, lot_ecsv, lot_parquet, safe_text

FAILURE = Failure("S00002", "S00002", None, None, None, None, "=cmd|'/c calc'!A1")
COLUMNS = lot_columns(
    [invented_result(3), replace(invented_result(1), wafer=None, measurements=())], [FAILURE]
)
NUMBER = "read_noise (output a)"


def test_a_row_for_each_device_in_order_of_serial():
    rows = list(csv.DictReader(io.StringIO(lot_csv(COLUMNS))))
    assert [row["serial"] for row in rows] == ["S00001", "S00002", "S00003"]
    assert [row["decision"] for row in rows] == ["accept", "failed", "accept"]
    assert rows[0]["wafer"] == "" and rows[2]["wafer"] == "W00"
    (measured,) = [m for m in invented_result(3).measurements if m.scope == "output a"][1:2]
    assert float(rows[2][f"{NUMBER} [electron / s]"]) == measured.value
    assert float(rows[2]["u(read_noise) (output a) [electron / s]"]) == (
        measured.standard_uncertainty
    )
    assert rows[0][f"{NUMBER} [electron / s]"] == ""
    assert (rows[0]["hot_pixels"], rows[1]["hot_pixels"]) == ("1", "")


@pytest.mark.parametrize(
    ("text", "safe"),
    [
        ("=1+1", "'=1+1"),
        ("+1", "'+1"),
        ("-1", "'-1"),
        ("@SUM(A1)", "'@SUM(A1)"),
        ("  =1", "'  =1"),
        ("＝1+1", "'＝1+1"),
        ("\t=1", "\\u0009=1"),
        ("\r=1", "\\u000d=1"),
        ("S1\n=1", "S1\\u000a=1"),
        ("\x1b[31mred", "\\u001b[31mred"),
    ],
)
def test_text_that_would_run_in_a_spreadsheet_or_a_terminal_is_made_safe(text, safe):
    assert safe_text(text) == safe
    column = Column("serial", str, "", (text,))
    assert list(csv.reader(io.StringIO(lot_csv([column]))))[1] == [safe]


def test_ordinary_text_and_negative_numbers_stay_as_they_are():
    columns = [Column("serial", str, "", ("a=b, c",)), Column("x", float, "K", (-1.5,))]
    assert lot_csv(columns) == 'serial,x [K]\n"a=b, c",-1.5\n'


def test_ecsv_reads_back_with_units_and_gaps():
    table = Table.read(lot_ecsv(COLUMNS), format="ascii.ecsv")
    assert list(table["serial"]) == ["S00001", "S00002", "S00003"]
    assert str(table[NUMBER].unit) == "electron / s"
    assert list(table[NUMBER].mask) == [True, True, False]
    assert table["hot_pixels"].dtype.kind == "i"
    assert table["reason"][1] == FAILURE.reason


def test_parquet_reads_back_with_units_and_gaps():
    parquet = pytest.importorskip("pyarrow.parquet")
    table = parquet.read_table(io.BytesIO(lot_parquet(COLUMNS)))
    assert table["serial"].to_pylist() == ["S00001", "S00002", "S00003"]
    assert table[NUMBER].to_pylist()[:2] == [None, None]
    assert table.schema.field(NUMBER).metadata == {b"unit": b"electron / s"}


def test_an_empty_lot_is_a_table_without_rows():
    columns = lot_columns([], [])
    assert lot_csv(columns) == ("serial,lot,wafer,die_row,die_column,grade,decision,reason\n")
    assert len(Table.read(lot_ecsv(columns), format="ascii.ecsv")) == 0
