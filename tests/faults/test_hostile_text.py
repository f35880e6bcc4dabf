"""Serials, lots, wafers and headers that hold anything: in folders, pages, tables, on screens."""

import csv
import json
from collections import Counter
from html.parser import HTMLParser
from pathlib import Path

import pytest
from astropy.io import fits
from astropy.table import Table

from faults.command_line import run
from faults.small_sensors import PLAN, RECIPE, write_sensor
from sensorgrade.lot.ledger import read_ledger

SERIALS = [
    *("../../escaped", "/etc/passwd", "..", "a/b", "C:\\x", "s1", "S1", "CON", "nul.txt", "-rf"),
    *("=cmd|'/c calc'!A1", "@SUM(1)", "+1+1", '=HYPERLINK("http://x.invalid")', "\t=1+1", "＝1"),
    *("<script>alert(1)</script>", '"><img src=x onerror=alert(1)>', "</title><b>", "&lt;"),
    *("\x1b[2J\x1b]0;x\x07", "a\nb", "\u202egnp.exe", "$(id)", "`id`", "x" * 300, "lot.sqlite"),
]
FORMULA = tuple("=+-@＝＋－＠\t\r")


def outside(address: str) -> bool:
    """Whether a link leads away from the run's own folder."""
    return not address.startswith("data:image/png;") and ("//" in address or ".." in address)


class Elements(HTMLParser):
    """Counts a page's elements, and notes attributes that would run or fetch something."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.count: Counter[str] = Counter()
        self.dangerous: list[tuple[str, str, str | None]] = []
        self.feed(page)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.count[tag] += 1
        self.dangerous += [
            (tag, name, text)
            for name, text in attrs
            if name.startswith("on") or (name in ("src", "href") and outside(text or ""))
        ]


@pytest.fixture(scope="module")
def lot(tmp_path_factory) -> Path:
    """A run over devices with these serials, told by a manifest; one harmless device among them."""
    root = tmp_path_factory.mktemp("hostile") / "deep" / "deeper"
    root.mkdir(parents=True)
    rows = []
    for number, serial in enumerate(["harmless", *SERIALS]):
        folder = write_sensor(root / "in" / f"d{number:02}", "unused", seed=number)
        names = sorted(path.name for path in folder.iterdir())
        plan = sorted((f"{kind}_{n:02d}", kind, time) for n, (kind, time, _) in enumerate(PLAN))
        for name, (_, kind, exposure) in zip(names, plan, strict=True):
            rows.append(
                [f"d{number:02}/{name}", kind, exposure, serial, f"lot {serial}", serial, number]
            )
    with (root / "in" / "list.csv").open("w", encoding="utf-8", newline="") as file:
        csv.writer(file).writerow(["file", "kind", "exposure", "serial", "lot", "wafer", "row"])
        csv.writer(file).writerows(rows)
    start, end = RECIPE.index("frames:"), RECIPE.index("stages:")
    rules = (
        "frames: {sorted_by: manifest, manifest: list.csv, kind: kind, exposure: exposure,"
        " serial: serial, lot: lot, wafer: wafer, die_row: row, die_column: row}\n"
    )
    (root / "recipe.yaml").write_text(RECIPE[:start] + rules + RECIPE[end:])
    before = set(root.parents[1].rglob("*"))
    given = ["inspect", str(root / "in"), "--recipe", str(root / "recipe.yaml")]
    answer = run(*given, "--out", str(root / "out"), "--jobs", "2")
    assert answer.status in (0, 1), answer.err
    made = set(root.parents[1].rglob("*")) - before
    assert all(path.is_relative_to(root / "out") for path in made)
    assert_printable(answer.out + answer.err)
    return root / "out"


def assert_printable(text: str) -> None:
    assert all(line.isprintable() for line in text.splitlines())
    assert "\x1b" not in text and "\u202e" not in text


def test_every_device_has_a_folder_of_its_own_right_below_out(lot):
    with read_ledger(lot) as ledger:
        results = ledger.results()
        assert ledger.failures() == []
    assert len(results) == len(SERIALS) + 1
    folders = [result.folder for result in results]
    assert len({folder.lower() for folder in folders}) == len(folders)
    for result in results:
        assert Path(result.folder).name == result.folder
        assert len(result.folder.encode()) <= 255
        document = json.loads((lot / result.folder / "result.json").read_text())
        assert document["serial"] == result.serial
        assert document["findings"] == [] or all(
            one["severity"] == "note" for one in document["findings"]
        )
        header = fits.getheader(lot / result.folder / "mask.fits")
        header.tofile(lot.parent / "header.txt", overwrite=True)  # astropy can write what it read
    kept = {result.serial for result in results}
    assert {serial for serial in SERIALS if serial.isprintable() and len(serial) < 100} <= kept


def test_no_serial_becomes_an_element_of_a_page(lot):
    with read_ledger(lot) as ledger:
        results = ledger.results()
    usual = Elements((lot / "harmless" / "device.html").read_text())
    assert usual.count["img"] or usual.count["svg"]
    for result in results:
        page = Elements((lot / result.folder / "device.html").read_text())
        assert page.dangerous == []
        for tag in ("script", "img", "title", "b", "a", "iframe", "link", "meta"):
            assert page.count[tag] == usual.count[tag], (result.serial, tag)
    page = Elements((lot / "lot.html").read_text())
    assert page.dangerous == []
    one = Elements(page_of_one(lot))
    for tag in ("script", "img", "iframe", "link", "meta"):
        assert page.count[tag] == one.count[tag], tag


def page_of_one(lot: Path) -> str:
    """The page of a lot with the harmless device alone."""
    out = lot.parent / "one"
    alone = lot.parent / "in-one"
    write_sensor(alone, "harmless")
    recipe = lot.parent / "plain.yaml"
    recipe.write_text(RECIPE)
    assert run("inspect", str(alone), "--recipe", str(recipe), "--out", str(out)).status == 0
    return (out / "lot.html").read_text()


def test_no_cell_of_a_table_is_a_formula_and_the_others_read_back_what_was_written(lot, tmp_path):
    files = {kind: tmp_path / f"lot.{kind}" for kind in ("csv", "ecsv", "parquet")}
    options = [part for kind, path in files.items() for part in (f"--{kind}", str(path))]
    answer = run("lot", str(lot), *options)
    assert_printable(answer.out.replace("\t", " ") + answer.err)
    with read_ledger(lot) as ledger:
        serials = [result.serial for result in ledger.results()]
        lots = [result.lot for result in ledger.results()]
    for path in (files["csv"], lot / "lot.csv"):
        with path.open(encoding="utf-8", newline="") as file:
            rows = list(csv.reader(file))
        assert len(rows) == len(serials) + 1
        for row in rows:
            for cell in row:
                assert cell.isprintable()
                if cell.lstrip().startswith(FORMULA):
                    float(cell)  # only a number may
        assert [row[0].removeprefix("'") for row in rows[1:]] == serials
    assert list(Table.read(files["ecsv"], format="ascii.ecsv")["serial"]) == serials
    parquet = pytest.importorskip("pyarrow.parquet")
    table = parquet.read_table(files["parquet"]).to_pydict()
    assert (table["serial"], table["lot"]) == (serials, lots)


@pytest.mark.parametrize(
    "given",
    [
        ("lot", "{out}"),
        ("lot", "{out}", "--wafers"),
        ("lot", "{out}", "--json"),
        ("compare", "{out}", "{out}"),
        ("grade", "{out}", "--limits", "{root}/recipe.yaml"),
        ("check", "{root}/in", "--recipe", "{root}/recipe.yaml"),
    ],
    ids=" ".join,
)
def test_no_command_prints_a_control_character(lot, given):
    answer = run(*(part.format(out=lot, root=lot.parent) for part in given))
    assert answer.status in (0, 1), answer.err
    assert_printable(answer.out.replace("\t", " ") + answer.err)


def test_control_characters_and_stray_bytes_of_headers_stay_where_they_are(tmp_path):
    """A FITS header may hold printable ASCII only (FITS 4.0, 4.1.2.1); benches write anything."""
    folder = write_sensor(tmp_path / "in", "SERIAL-GOES-HERE", LOT="LOT-GOES-HERE..")
    for path in folder.iterdir():
        content = path.read_bytes().replace(b"SERIAL-GOES-HERE", b"\x1b[2J\x07\xff\xfe=1+1;;'"[:16])
        path.write_bytes(content.replace(b"LOT-GOES-HERE..", b"\x00\x1b]0;lot\x07\x9b31m"))
    recipe = tmp_path / "recipe.yaml"
    recipe.write_text(RECIPE.replace("serial: SERIAL}", "serial: SERIAL, lot: LOT}"))
    out = tmp_path / "out"
    answer = run("inspect", str(tmp_path / "in"), "--recipe", str(recipe), "--out", str(out))
    assert answer.status in (0, 1, 2)
    assert_printable(answer.out + answer.err)
    for path in out.rglob("*.html"):
        assert "\x1b" not in path.read_text()
