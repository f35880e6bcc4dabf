import pytest

from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError, RequestError
from sensorgrade.lot.database import open_for_writing
from sensorgrade.lot.regrade import regrade, what_if

RECIPE = """name: run
sensor:
  technology: ccd
  pixel_pitch: 15 um
  outputs:
    left: {image: "[1:10,1:10]"}
    right: {image: "[11:20,1:10]"}
stages:
  read_noise: {}
  hot_pixels: {}
grades:
  science:
    read_noise: <= 5 electron
    hot_pixels: <= 100
"""


def fill(folder, noises, hot):
    """A ledger of devices with read noise on two outputs (D, 2) and hot pixels (D,)."""
    connection = open_for_writing(folder)
    connection.execute("BEGIN")
    connection.execute(
        "INSERT INTO runs (run, started, version, recipe, recipe_sha256, recipe_text, host,"
        " process, jobs, threads) VALUES (1, '', '', 'run.yaml', '', ?, '', 0, 1, 1)",
        (RECIPE,),
    )
    for number, (pair, count) in enumerate(zip(noises, hot, strict=True), start=1):
        met = max(pair) <= 5 and count <= 100
        connection.execute(
            "INSERT INTO devices (device, run, serial, folder, outcome, grade, decision, recipe,"
            " recipe_sha256, versions, described, state, finished, seconds) VALUES"
            " (?, 1, ?, ?, 'inspected', ?, ?, '', '', '{}', '', '', '', 1)",
            (
                number,
                f"S{number:05}",
                f"S{number:05}",
                "science" if met else None,
                "accept" if met else "reject",
            ),
        )
        connection.executemany(
            "INSERT INTO measurements VALUES (?, ?, ?, ?, ?, 0.1, ?, 100)",
            [
                (number, place, name, f"output {output}", value, unit)
                for place, (name, output, value, unit) in enumerate(
                    [
                        ("read_noise", "left", pair[0], "electron"),
                        ("read_noise", "right", pair[1], "electron"),
                        ("conversion_gain", "left", 2.0, "electron / DN"),
                        ("conversion_gain", "right", 2.0, "electron / DN"),
                    ]
                )
            ],
        )
        connection.execute(
            "INSERT INTO defect_counts VALUES (?, 0, 'hot_pixels', 'device', ?, ?, 2.0)",
            (number, int(count), float(count)),
        )
    connection.execute("COMMIT")
    connection.close()


def limits(folder, text):
    path = folder / "limits.yaml"
    path.write_text(text)
    return path


@pytest.fixture
def run(tmp_path):
    fill(tmp_path, [(4.0, 4.1), (4.0, 5.5), (4.2, 4.4)], [10, 10, 200])
    return tmp_path


def test_the_runs_own_limits_change_nothing(run):
    found = regrade(run, limits=limits(run, RECIPE), vocabulary=VOCABULARY)
    assert found.changed == ()
    assert [one.decision for one in found.graded] == ["accept", "reject", "reject"]


def test_other_limits_alone_take_the_rest_from_the_run(run):
    text = "grades:\n  a: {read_noise: <= 6 electron}\nlot: {quality_limit: 6.5 %}\n"
    found = regrade(run, limits=limits(run, text), vocabulary=VOCABULARY)
    assert [one.grade for one in found.graded] == ["a", "a", "a"]
    assert found.changed == (0, 1, 2)
    assert found.recipe.sensor.technology == "ccd"
    assert found.lot.outcome == "accept"


def test_a_limit_on_one_output_refers_to_the_runs_outputs(run):
    text = 'grades:\n  a: {read_noise: {limit: "<= 5 electron", output: left}}\n'
    found = regrade(run, limits=limits(run, text), vocabulary=VOCABULARY)
    assert [one.grade for one in found.graded] == ["a", "a", "a"]
    with pytest.raises(RecipeError, match=r"limits.yaml:2 .*no such output"):
        regrade(run, limits=limits(run, text.replace("left", "lft")), vocabulary=VOCABULARY)


def test_what_only_frames_could_answer_is_refused(run):
    text = "stages: {read_noise: {pairs: 3}}\ngrades: {a: {read_noise: <= 6 electron}}\n"
    with pytest.raises(RecipeError, match=r"stages\.read_noise\.pairs: needs the frames"):
        regrade(run, limits=limits(run, text), vocabulary=VOCABULARY)


def test_a_mistake_names_the_line_of_the_file(run):
    with pytest.raises(RecipeError, match=r"limits.yaml:2 .*read_nose"):
        regrade(run, limits=limits(run, "grades:\n  a: {read_nose: 3}\n"), vocabulary=VOCABULARY)


def test_costs_and_concessions_of_a_stored_lot(run):
    found = regrade(run, limits=limits(run, RECIPE), vocabulary=VOCABULARY)
    answer = what_if(found.stored.devices, recipe=found.recipe, grade_name="science", wanted=2)
    assert {cost.limit.name: cost.alone for cost in answer.costs} == {
        "read_noise": 1,
        "hot_pixels": 1,
    }
    (eased,) = answer.concessions.eased
    assert (eased.limit.name, eased.bound) == ("read_noise", 5.5)
    with pytest.raises(RequestError, match=r"no grade 'x'.*there are science"):
        what_if(found.stored.devices, recipe=found.recipe, grade_name="x", wanted=2)
