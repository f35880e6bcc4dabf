"""The recipes commands: what they print and what status they end with."""

import json
from importlib.util import find_spec

import jsonschema
import numpy as np
import pytest
import yaml
from astropy.io import fits
from click.testing import CliRunner

from sensorgrade.cli.main import command, main
from sensorgrade.recipe.library import recipe_folder, recipe_names

READY = (
    "cmos-12-bit",
    "colour-module",
    "demo",
    "four-output-ccd",
    "full-frame-ccd",
    "pocket-pumping",
    "screening",
    "twilight-flats",
    "two-output-ccd",
    "wafer-probe",
    "x-ray",
)


def run(*arguments):
    return CliRunner().invoke(command, ["recipes", *arguments])


def status(capsys, *arguments):
    """(exit status, standard output, standard error) of the whole program."""
    with pytest.raises(SystemExit) as ended:
        main(["recipes", *arguments])
    captured = capsys.readouterr()
    return ended.value.code, captured.out, captured.err


def test_the_ready_recipes_are_listed_with_their_titles():
    assert recipe_names() == READY
    lines = run("list").output.splitlines()
    assert [line.split()[0] for line in lines] == list(READY)
    assert "two-output CCD with overscan" in lines[READY.index("two-output-ccd")]
    listed = json.loads(run("list", "--json").output)
    assert [one["recipe"] for one in listed] == list(READY)


@pytest.mark.parametrize("name", READY)
def test_a_recipe_is_shown_as_it_stands_and_teaches(name):
    text = (recipe_folder() / f"{name}.yaml").read_text(encoding="utf-8")
    assert run("show", name).output == text
    assert text.startswith("# ")
    assert text.count("#") > 8


def test_an_unknown_recipe_gets_the_nearest(capsys):
    code, out, err = status(capsys, "show", "two-outputs-ccd")
    assert (code, out) == (2, "")
    assert err == (
        "sensorgrade: two-outputs-ccd: no such recipe file, and no ready recipe of that name;"
        " nearest is two-output-ccd\n"
    )


@pytest.mark.skipif(find_spec("sensorgrade.stages") is None, reason="no table of stages")
class TestWithStages:
    """What needs the table of stages."""

    def test_every_ready_recipe_validates(self):
        result = run("validate", *READY)
        assert result.exit_code == 0, result.output
        assert result.output.count(": right; ") == len(READY)

    def test_every_ready_recipe_validates_by_the_schema_too(self, tmp_path):
        out = tmp_path / "schema.json"
        assert run("schema", "--out", str(out)).exit_code == 0
        schema = json.loads(out.read_text(encoding="utf-8"))
        jsonschema.Draft202012Validator.check_schema(schema)
        validator = jsonschema.Draft202012Validator(schema)
        for name in READY:
            tree = yaml.safe_load((recipe_folder() / f"{name}.yaml").read_text(encoding="utf-8"))
            assert [error.message for error in validator.iter_errors(tree)] == [], name
        assert json.loads(run("schema").output) == schema

    def test_a_wrong_recipe_ends_with_status_2_and_every_mistake(self, tmp_path, capsys):
        path = tmp_path / "mine.yaml"
        path.write_text("name: a\nsensor: {technology: cdc, pixel_pitch: 9}\n")
        code, out, err = status(capsys, "validate", str(path))
        assert (code, out) == (2, "")
        assert err.count(f"{path}:2  sensor.") == 2
        code, out, err = status(capsys, "validate", "--json", str(path), "two-output-ccd")
        assert code == 2
        wrong, right = json.loads(out)
        assert (wrong["valid"], len(wrong["problems"]), right["valid"]) == (False, 2, True)
        code, out, err = status(capsys, "validate", "--quiet", "two-output-ccd")
        assert (code, out, err) == (0, "", "")

    def test_a_draft_is_written_once_and_validates(self, tmp_path, capsys):
        source = tmp_path / "frames"
        source.mkdir()
        for n, kind in enumerate(("bias", "flat")):
            image = np.random.default_rng(n).normal(500 + 7000 * n, 9, (64, 64))
            unit = fits.PrimaryHDU(image.astype(np.uint16))
            unit.header["IMAGETYP"], unit.header["EXPTIME"] = kind, 1.0 * n
            unit.writeto(source / f"{kind}.fits")
        out = tmp_path / "mine.yaml"
        assert run("draft", str(source), "--out", str(out)).exit_code == 0
        assert run("validate", str(out)).exit_code == 0
        assert run("draft", str(source)).output == out.read_text(encoding="utf-8")
        code, _, err = status(capsys, "draft", str(source), "--out", str(out))
        assert code == 2 and "exists already" in err


def test_several_mistakes_are_counted_at_the_end(capsys, tmp_path):
    path = tmp_path / "mine.yaml"
    path.write_text("name: a\nsensor: {technology: tube, pixel_pitch: 15}\nstagess: {}\n")
    code, out, err = status(capsys, "validate", str(path))
    assert (code, out) == (2, "")
    *mistakes, last = err.splitlines()
    assert last == "3 mistakes; nothing was done"
    assert len(mistakes) == 3
    path.write_text("name: a\nsensor: {technology: ccd, pixel_pitch: 15}\n")
    _, _, err = status(capsys, "validate", str(path))
    assert len(err.splitlines()) == 1
