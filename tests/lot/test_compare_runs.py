import numpy as np
import pytest
from astropy.table import Table

from lot.test_regrade import RECIPE, VOCABULARY, fill
from sensorgrade.defects.defect import DEFECT
from sensorgrade.errors import RequestError
from sensorgrade.lot.compare_runs import bench_study, compare_runs, defect_table
from sensorgrade.recipe.load import parse_recipe


def run(folder, noises, hot=None):
    folder.mkdir()
    fill(folder, noises, np.full(len(noises), 10) if hot is None else hot)
    return folder


def put_defects(folder, serial, *places):
    table = np.zeros(len(places), DEFECT)
    for record, (row, column) in zip(table, places, strict=True):
        record["kind"], record["probability"], record["unit"] = "hot", 1.0, "electron / s"
        record["row"], record["column"] = row, column
        record["row_start"], record["row_stop"] = row, row + 1
        record["column_start"], record["column_stop"] = column, column + 1
    (folder / serial).mkdir(exist_ok=True)
    Table(table).write(folder / serial / "defects.ecsv", format="ascii.ecsv")


def test_two_runs_side_by_side(tmp_path):
    before = run(tmp_path / "before", [(4.0, 4.1), (4.2, 4.4)])
    after = run(tmp_path / "after", [(4.0, 5.6), (4.2, 4.4), (4.0, 4.0)])
    put_defects(before, "S00001", (3, 4), (7, 8))
    put_defects(after, "S00001", (3, 4), (9, 9))
    found = compare_runs(before, after)
    assert found.regraded == (("S00001", "science", "reject"),)
    assert [(c.serial, c.scope) for c in found.numbers.changes if c.significant] == [
        ("S00001", "output right")
    ]
    assert found.numbers.only_after == ("S00003",)
    (defects,) = found.defects
    assert (defects.change.kept, defects.change.new, defects.change.gone) == (((0, 0),), (1,), (1,))
    assert defects.after["row"][1] == 9


def test_a_folder_without_a_ledger_is_refused(tmp_path):
    with pytest.raises(RequestError, match=r"no lot.sqlite here"):
        compare_runs(tmp_path, tmp_path)


def test_a_defect_table_with_a_column_missing(tmp_path):
    Table({"kind": ["hot"]}).write(tmp_path / "defects.ecsv", format="ascii.ecsv")
    with pytest.raises(RequestError, match="no column row, column"):
        defect_table(tmp_path / "defects.ecsv")


def test_a_study_of_two_benches(tmp_path):
    rng = np.random.default_rng(1)
    true = rng.normal(4.5, 0.5, (8, 2))
    runs = [
        (bench, run(tmp_path / f"{bench}{trial}", true + shift + rng.normal(0.0, 0.1, (8, 2))))
        for bench, shift in (("a", 0.0), ("b", 0.4))
        for trial in range(3)
    ]
    recipe = parse_recipe(RECIPE, VOCABULARY, path="recipe.yaml")
    studies = {(s.name, s.scope): s for s in bench_study(runs, recipe=recipe)}
    left = studies["read_noise", "output left"]
    assert left.devices == 8
    assert left.study.repeatability == pytest.approx(0.1, rel=0.4)
    assert left.study.reproducibility == pytest.approx(0.4 / np.sqrt(2), rel=0.4)
    assert left.study.stated_ratio_low < 1.0 < left.study.stated_ratio_high
    ((limit, share),) = left.shares
    assert limit.bound == 5.0
    assert share == pytest.approx(300 * left.study.together / (5.0 - left.mean))


def test_one_run_is_no_study(tmp_path):
    with pytest.raises(RequestError, match="twice or more"):
        bench_study([("a", run(tmp_path / "a", [(4.0, 4.1), (4.2, 4.4)]))])
