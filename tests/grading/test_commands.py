"""The commands over a small stored lot: what they print and how they end."""

import json

import numpy as np
import pytest
from click.testing import CliRunner

from lot.test_regrade import RECIPE, VOCABULARY, fill
from sensorgrade.cli import compare, grade, plan
from sensorgrade.errors import RequestError
from sensorgrade.recipe import library


@pytest.fixture(autouse=True)
def words(monkeypatch):
    """The small vocabulary in place of the stage table's."""
    monkeypatch.setattr("sensorgrade.stages.vocabulary", lambda: VOCABULARY)


@pytest.fixture
def lot(tmp_path):
    fill(tmp_path, [(4.0, 4.1), (4.0, 5.5), (4.2, 4.4)], [10, 10, 200])
    (tmp_path / "limits.yaml").write_text(
        "grades:\n  science: {read_noise: <= 5 electron, hot_pixels: <= 300}\n"
    )
    (tmp_path / "recipe.yaml").write_text(RECIPE)
    return tmp_path


def ran(command, *arguments):
    return CliRunner().invoke(command, [str(one) for one in arguments], catch_exceptions=False)


def test_grade_prints_yields_changes_and_costs(lot):
    found = ran(grade.command, lot, "--limits", lot / "limits.yaml", "--accept", 3)
    assert found.exit_code == 1
    assert "science or better: 2 (66.7 %, 95 % interval 20.8 % to 93.9 % by Wilson" in found.output
    assert ", 9.4 % to 99.2 % by Clopper and Pearson)" in found.output
    assert "S00003: reject -> science" in found.output
    assert (
        "read noise at most 5 electron: missed by 1 device, 1 of them by this alone" in found.output
    )
    assert "read noise at most 5.5 electron in place of 5" in found.output


def test_grade_shows_how_the_lot_stands_to_its_limits(tmp_path):
    noises = np.tile(np.linspace(4.0, 4.6, 20)[:, None], 2)
    noises[7, 1] = 9.0
    fill(tmp_path, noises, np.arange(20))
    (tmp_path / "limits.yaml").write_text("grades: {science: {read_noise: <= 5 electron}}\n")
    found = ran(
        grade.command, tmp_path, "--limits", tmp_path / "limits.yaml", "--statistics"
    ).output
    assert "The lot against the limits of science" in found
    assert "from 4 to 9 electron in 40 values" in found
    assert "outliers: S00008 output right 9" in found
    assert "Cpk " in found


def test_grade_shows_yields_against_one_limit_and_two(lot):
    arguments = (grade.command, lot, "--limits", lot / "limits.yaml", "--vary", "read_noise")
    found = ran(*arguments).output
    assert "Devices accepted, read noise at most [electron]" in found
    rows = [line.split() for line in found.splitlines() if line.startswith("      ")]
    assert [(row[0], row[1]) for row in rows] == [
        ("4.1", "1"),
        ("4.4", "2"),
        ("5", "2"),
        ("5.5", "3"),
    ]
    assert rows[2][2:] == ["as", "the", "limit", "stands"]
    two = ran(*arguments, "--vary", "hot_pixels").output
    assert "down read noise at most [electron], across hot pixels at most" in two
    last = two.splitlines()[-1].split()
    assert last == ["5.5", "2", "3", "3"]
    document = json.loads(ran(*arguments, "--vary", "hot_pixels", "--json").output)
    assert document["yields_against"]["accepted"][-1] == [2, 3, 3]
    with pytest.raises(RequestError, match=r"noise: no such limit.*read_noise, hot_pixels"):
        ran(grade.command, lot, "--limits", lot / "limits.yaml", "--vary", "noise")


def test_grade_as_json_and_in_silence(lot):
    found = ran(grade.command, lot, "--limits", lot / "limits.yaml", "--json")
    document = json.loads(found.output)
    assert [one["decision"] for one in document["devices"]] == ["accept", "reject", "accept"]
    assert document["examined"]["costs"][0]["limit"]["name"] == "read_noise"
    quiet = ran(grade.command, lot, "--limits", lot / "limits.yaml", "--quiet")
    assert (quiet.output, quiet.exit_code) == ("", 1)


def test_grade_takes_a_ready_recipe_by_name_and_says_what_there_is(lot, monkeypatch):
    monkeypatch.setattr(library, "recipe_folder", lambda: lot)
    assert "3 devices" in ran(grade.command, lot, "--limits", "recipe").output
    with pytest.raises(RequestError, match="no ready recipe of that name; nearest is recipe"):
        ran(grade.command, lot, "--limits", "recpie")


def test_more_devices_than_there_are_cannot_be_accepted(lot):
    found = ran(grade.command, lot, "--limits", lot / "limits.yaml", "--accept", 4)
    assert "No easing accepts 4 devices: there are 3" in found.output


def test_grade_ends_well_when_all_are_accepted(lot):
    (lot / "limits.yaml").write_text("grades: {any: {read_noise: <= 9 electron}}\n")
    assert ran(grade.command, lot, "--limits", lot / "limits.yaml").exit_code == 0


def test_plan_says_what_is_enough_and_what_to_take(lot):
    found = ran(
        plan.command, "--recipe", lot / "recipe.yaml", "--exposure", 60, "--expect", "pixels=1e6"
    )
    assert "read noise at most 5 electron" in found.output
    assert ": enough" in found.output
    assert found.exit_code == 0
    few = ran(
        plan.command, "--recipe", lot / "recipe.yaml", "--exposure", 10, "--expect", "pixels=1e6"
    )
    assert "take dark exposure 10 -> 20" in few.output
    assert few.exit_code == 1


def test_plan_takes_what_is_expected_from_a_run_and_from_the_user(lot):
    arguments = ("--recipe", lot / "recipe.yaml", "--like", lot, "--json")
    expected = json.loads(ran(plan.command, *arguments).output)["expected"]
    assert expected["read_noise"] == pytest.approx(4.15)
    assert expected["pixels"] == 100
    stated = ("--expect", "read_noise=3 electron", "--expect", "lamp_noise=1 %")
    found = json.loads(ran(plan.command, *arguments, *stated).output)["expected"]
    assert (found["read_noise"], found["lamp_noise"]) == (pytest.approx(3.0), 1.0)


@pytest.mark.parametrize(
    "text, sentence",
    [
        ("noise=3", "no such quantity"),
        ("read_noise", "expected NAME=VALUE"),
        ("read_noise=3 s", "cannot read"),
        ("pixels=1", "2  or more|2 or more"),
    ],
)
def test_plan_says_what_is_wrong_with_an_expectation(lot, text, sentence):
    with pytest.raises(RequestError, match=sentence):
        ran(plan.command, "--recipe", lot / "recipe.yaml", "--expect", text)


def test_compare_prints_what_changed(lot, tmp_path):
    after = tmp_path / "after"
    after.mkdir()
    fill(after, [(4.0, 4.1), (4.0, 4.5), (4.2, 4.4)], [10, 10, 200])
    found = ran(compare.command, lot, after)
    assert found.exit_code == 1
    assert "S00002: reject -> science" in found.output
    assert "1 of 15 numbers changed" in found.output
    assert "S00002: read noise of output right 5.5 -> 4.5 electron" in found.output
    same = ran(compare.command, lot, lot)
    assert same.exit_code == 0
    assert "0 of 15 numbers changed" in same.output
    assert json.loads(ran(compare.command, lot, after, "--json").output)["regraded"]


def test_compare_studies_a_bench(lot, tmp_path):
    rng = np.random.default_rng(1)
    true = rng.normal(4.5, 0.5, (6, 2))
    runs = []
    for trial in range(3):
        folder = tmp_path / f"trial{trial}"
        folder.mkdir()
        fill(folder, true + rng.normal(0.0, 0.1, true.shape), np.full(6, 10))
        runs.append(f"one={folder}")
    found = ran(compare.command, "--repeat", *runs, "--recipe", lot / "recipe.yaml")
    assert "read noise of output left, 6 devices" in found.output
    assert "times the stated uncertainty: as stated" in found.output
    assert "% of the tolerance of at most 5 electron" in found.output


def test_compare_takes_two_runs(lot):
    with pytest.raises(RequestError, match="takes two runs, found 1"):
        ran(compare.command, lot)
