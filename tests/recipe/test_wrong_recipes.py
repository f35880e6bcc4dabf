"""Wrong recipes, each with the exact sentence a user reads."""

import pickle

import pytest

from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError
from sensorgrade.recipe.load import parse_recipe

HEAD = "name: a\nsensor: {technology: ccd, pixel_pitch: 9 um}\n"


def problems(text):
    with pytest.raises(RecipeError) as caught:
        parse_recipe(text, VOCABULARY, path="recipe.yaml")
    return caught.value.problems


WHOLE = [  # (text, the one sentence)
    ("", "recipe.yaml:1  the file is empty; 'sensorgrade recipes show' prints one to start from"),
    ("3", "recipe.yaml:1  expected keys such as name, sensor and grades, found 3"),
    ("- a", "recipe.yaml:1  expected keys such as name, sensor and grades, found a list"),
    ("a: &x 1", 'recipe.yaml:1  "x" is a YAML anchor or alias, which recipes do not use; write'
     " the value out, or quote text that starts with & or *"),
    ("\na: *x", 'recipe.yaml:2  "x" is a YAML anchor or alias, which recipes do not use; write'
     " the value out, or quote text that starts with & or *"),
    ("a: !!python/object:os.system ls",
     'recipe.yaml:1  "tag:yaml.org,2002:py…os.system" is a YAML tag,'
     " which recipes do not use; leave it out, or quote text that starts with !"),
    ("a: " + "[" * 13 + "]" * 13,
     "recipe.yaml:1  nested deeper than 12 levels; this is no recipe"),
    ("a: " + "{b: " * 5000, "recipe.yaml:1  nested deeper than 12 levels; this is no recipe"),
    ("a: [" + "1," * 60000 + "]", "recipe.yaml:1  more than 50000 values; no recipe has"),
    ("a:\n\tb: 1", "recipe.yaml:2  a tab in the indentation; indent with spaces"),
    ("a: b\n---\nc: d", "recipe.yaml:2  a second document; one file holds one recipe"),
    ("a: [1, 2", "recipe.yaml:1  not YAML (expected ',' or ']', but got '<stream end>'); check"
     " quotes, brackets and indentation"),
    ('a: "b', "recipe.yaml:1  not YAML (found unexpected end of stream); check quotes, brackets"
     " and indentation"),
    ("a: b: c", "recipe.yaml:1  a colon where none can stand; check the indentation, or quote text"
     " that holds ': '"),
    ("a:\n  b: >= 5 electron", 'recipe.yaml:2  a value that starts with > must be quoted:'
     ' ">= 5 electron"'),
    ('a: "\\UFFFFFFFF"', "recipe.yaml:1  an escape in double quotes names no character; use single"
     " quotes"),
    ('a: "\\ud800"', "recipe.yaml:1  an escape in double quotes names half a character; correct"
     " it"),
    ("a: \x07", "recipe.yaml:1  character U+0007 cannot stand in YAML; remove it"),
    ("name: a\nsensor: {technology: ccd, pixel_pitch: 9 um}\n? [1]\n: 2",
     "recipe.yaml:3  expected text before the colon, found a list"),
]  # fmt: skip


@pytest.mark.parametrize("text, sentence", WHOLE, ids=range(len(WHOLE)))
def test_a_document_that_cannot_be_used_gets_one_sentence(text, sentence):
    assert problems(text) == (sentence,)


SENSOR = [  # (what stands after "sensor:", the sentence)
    ("", "sensor: technology is missing (Kind of sensor); expected ccd or cmos"),
    ("3", "sensor: expected keys with values, found 3"),
    ("{technology: cdc, pixel_pitch: 9 um}",
     'sensor.technology: expected ccd or cmos, found "cdc"; nearest is ccd'),
    ("{technology: , pixel_pitch: 9 um}", "sensor.technology: expected ccd or cmos, found nothing"),
    ("{technology: ccd, pixel_pitch: 9}",
     "sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found 9; write the unit too,"
     ' such as "10 um"'),
    ("{technology: ccd, pixel_pitch: 9 electron}",
     "sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found \"9 electron\";"
     ' "electron" does not convert to um'),
    ("{technology: ccd, pixel_pitch: 9 micron}",
     None),
    ("{technology: ccd, pixel_pitch: 9 umm}",
     'sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found "9 umm"; "umm" is no'
     " unit; nearest is um"),
    ("{technology: ccd, pixel_pitch: 0.01 um}",
     'sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found "0.01 um"'),
    ("{technology: ccd, pixel_pitch: 1e999 um}",
     'sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found "1e999 um"; the number'
     " is too large"),
    ("{technology: ccd, pixel_pitch: [9 um]}",
     "sensor.pixel_pitch: expected a quantity in um, 0.1 um or more, found a list"),
    ("{technology: ccd, pixel_pitch: 9 um, adc_bits: 40}",
     "sensor.adc_bits: expected a whole number from 1 to 32, found 40"),
    ("{technology: ccd, pixel_pitch: 9 um, adc_bits: 12.0}",
     "sensor.adc_bits: expected a whole number from 1 to 32, found 12.0"),
    ("{technology: ccd, pixel_pitch: 9 um, adc_bits: '12'}",
     'sensor.adc_bits: expected a whole number from 1 to 32, found "12"; take the quotes away'),
    ("{technology: ccd, pixel_pitch: 9 um, adc_bits: 014}",
     "sensor.adc_bits: expected a whole number from 1 to 32, found 014"),
    ("{technology: ccd, pixel_pitch: 9 um, colour: RGBG}",
     'sensor.colour: expected none, RGGB, BGGR, GRBG or GBRG, found "RGBG"; nearest is RGGB'),
    ("{technology: ccd, pixel_pitch: 9 um, color: RGGB}",
     "sensor.color: no such key; nearest is colour"),
    ("{technology: ccd, pixel_pitch: 9 um, pixel_pitch: 8 um}",
     "sensor.pixel_pitch: stated twice, first in line 2; keep one"),
    ("{technology: ccd, pixel_pitch: 9 um, outputs: [a]}",
     "sensor.outputs: expected names with values, found a list"),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {"a,b": {}}}',
     "sensor.outputs.a,b: expected a name of 1 to 31 letters, digits, spaces, '.', '+', '-' or '_'"
     " that starts with a letter or digit"),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: "[0:5,1:5]"}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found "[0:5,1:5]"; pixels count from 1'),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: "[5:1,1:5]"}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found "[5:1,1:5]"; its last x lies before its first'
     "; sections are not reversed"),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: "[1:5:2,1:5]"}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found "[1:5:2,1:5]"; sections have no steps'),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: "[*,1:5]"}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found "[*,1:5]"; write the numbers'
     " of the first and last pixel instead of *"),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: [1, 5, 1, 5]}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found a list'),
    ('{technology: ccd, pixel_pitch: 9 um, outputs: {a: {image: "1:5,1:5"}}}',
     'sensor.outputs.a.image: expected a section "[x1:x2,y1:y2]" or header KEYWORD,'
     ' found "1:5,1:5"; write four whole numbers,'
     " as in [1:512,1:1024]"),
]  # fmt: skip


@pytest.mark.parametrize("sensor, sentence", SENSOR, ids=range(len(SENSOR)))
def test_a_mistake_in_the_sensor(sensor, sentence):
    text = f"name: a\nsensor: {sensor}\n"
    if sentence is None:
        parse_recipe(text, VOCABULARY, path="recipe.yaml")
        return
    found = problems(text)
    assert found[0] == f"recipe.yaml:2  {sentence}"
    assert len(found) == (2 if sensor == "" else 1)


PARTS = [  # (what follows the head in line 3, the sentence)
    ("sensors: {}", "sensors: no such key; nearest is sensor"),
    ("stage: {}", "stage: no such key; nearest is stages"),
    (
        "qqq: x",
        "qqq: no such key; there are name, sensor, frames, stages, zones, lot, decision, grades",
    ),
    ("frames: {kind: }", None),
    ("frames: {kind: [a]}", "frames.kind: expected text, found a list"),
    ('frames: {kind: ""}', 'frames.kind: expected text, found ""'),
    ('frames: {kind: "a\\nb"}',
     r'frames.kind: expected text, found "a\u000ab"; keep to one line of printable characters'),
    ("frames: {sorted_by: manifest}",
     "frames: sorted_by: manifest needs 'manifest', the name of the CSV file"),
    ("frames: {sorted_by: name}",
     "frames: sorted_by: name needs 'pattern', a regular expression with groups"),
    ("frames: {sorted_by: name, pattern: '('}",
     "frames.pattern: not a regular expression: missing ), unterminated subpattern at position 0"),
    ("frames: {sorted_by: name, pattern: '(bias|flat)'}",
     "frames.pattern: expected named groups, such as (?P<kind>bias|dark|flat); found none"),
    ("frames: {kinds: {LIGHT: falt}}",
     'frames.kinds.LIGHT: expected bias, dark, flat, x-ray, pump or ignore, found "falt"; nearest'
     " is flat"),
    ("frames: {kinds: {LIGHT: }}", "frames.kinds.LIGHT: expected text, found nothing"),
    ("frames: {exposure_tolerance: 0.5}",
     "frames.exposure_tolerance: expected a quantity in %, 0 % or more, found 0.5; write the unit"
     ' too, such as "20 %"'),
    ("frames: {temperature_tolerance: 2 degC}",
     'frames.temperature_tolerance: expected a quantity in K, 0 K or more, found "2 degC"; a'
     " difference of temperatures is written in K"),
    ("frames: {raw: {dtype: uint16, rows: 10}}",
     "frames.raw: columns is missing (Columns of the frame); expected a whole number, 1 or more"),
    ("stages: [read_noise]", "stages: expected stages with options, found a list"),
    ("stages: {read_nois: {}}", "stages.read_nois: no such stage; nearest is read_noise"),
    ("stages: {dead_pixels: {}}",
     "stages.dead_pixels: no such stage; dead_pixels comes from flat_pixels or dark_pixels"),
    ("stages: {read_noise: true}",
     'stages.read_noise: expected keys with values, found "true"'),
    ("stages: {read_noise: {pairs: ten}}",
     'stages.read_noise.pairs: expected a whole number, 1 or more, found "ten"'),
    ("stages: {read_noise: {pairs: 0}}",
     "stages.read_noise.pairs: expected a whole number, 1 or more, found 0"),
    ("stages: {hot_pixels: {threshold: 5 adu/s}}",
     "stages.hot_pixels.threshold: expected a quantity in electron/s from 0 electron/s to 1e+06"
     ' electron/s, found "5 adu/s"; "adu/s" does not convert to electron/s'),
    ("stages: {hot_pixels: {threshold: 5 e-/s}}",
     "stages.hot_pixels.threshold: expected a quantity in electron/s from 0 electron/s to 1e+06"
     ' electron/s, found "5 e-/s"; "e-/s" is no unit; nearest is electron/s'),
    ("stages: {hot_pixels: {temperature: -10 s}}",
     'stages.hot_pixels.temperature: expected a quantity in degC, found "-10 s"; "s" is no unit of'
     " temperature; write degC or K"),
    ("stages: {hot_pixels: {merge: yes}}",
     'stages.hot_pixels.merge: expected true or false, found "yes"; write true, without quotes'),
    ("stages: {hot_pixels: {gain: a}}",
     'stages.hot_pixels.gain: expected a number, 0 or more, found "a"'),
    ("stages: {hot_pixels: {ratio: 5 s}}",
     'stages.hot_pixels.ratio: expected a number, found "5 s"; leave out "s"'),
    ("stages: {hot_pixels: {steps: 10 s}}",
     "stages.hot_pixels.steps: expected a list, each item a quantity in s, found \"10 s\""),
    ("stages: {hot_pixels: {steps: [10 s, 3]}}",
     "stages.hot_pixels.steps[2]: expected a quantity in s, found 3; write the unit too, such as"
     ' "10 s"'),
    ("stages: {hot_pixels: {span: [1, 2, 3]}}",
     "stages.hot_pixels.span: expected a list of 2, each item a whole number, found a list of 3"),
    ("stages: {hot_pixels: {inners: {a: }}}",
     "stages.hot_pixels.inners.a: width is missing (Width in pixels); expected a whole number"),
    ("stages: {hot_pixels: {gain: 9}}",
     "stages.hot_pixels: gain is above threshold; lower one of them"),
    ("zones: {c: {}}", "zones.c: expected one of rectangle, circle, ring, border, found none"),
    ("zones: {c: {border: 3, circle: [1, 2, 3]}}",
     "zones.c: expected one of rectangle, circle, ring, border, found circle and border"),
    ("zones: {c: {circle: [1, 2]}}",
     "zones.c.circle: expected a list of 3, each item a number, found a list of 2"),
    ("zones: {c: {circle: [1, 2, 0]}}", "zones.c: expected a circle's radius above 0"),
    ("zones: {c: {ring: [1, 2, 5, 3]}}",
     "zones.c: expected a ring's inner radius below its outer one"),
    ("decision: {kind: strict}",
     "decision.kind: expected simple, guarded acceptance, guarded rejection or non-binary, found"
     ' "strict"'),
    ("decision: {confidence: 0.95}",
     "decision.confidence: expected a quantity in % from 50 % to 99.9999 %, found 0.95; write the"
     ' unit too, such as "20 %"'),
]  # fmt: skip


@pytest.mark.parametrize("part, sentence", PARTS, ids=range(len(PARTS)))
def test_a_mistake_in_another_part(part, sentence):
    if sentence is None:
        parse_recipe(HEAD + part, VOCABULARY, path="recipe.yaml")
    else:
        assert problems(HEAD + part) == (f"recipe.yaml:3  {sentence}",)


GRADES = [  # (what follows "grades:" in line 4, the sentence)
    ("", "grades: expected grades by name, best first, each with limits, found nothing"),
    ("{a: }", "grades.a: expected limits by name, found nothing; write {} for a grade without"
     " limits"),
    ("{a: {}, b: {}}", "grades.a: expected limits; a grade without any accepts every device, so"
     " those after it are never given"),
    ("{a: {read_nose: <= 5 electron}}",
     "grades.a.read_nose: no such measurement or count; nearest is read_noise"),
    ("{a: {dead_pixels: <= 5}}",
     "grades.a.dead_pixels: nothing in this recipe measures it; put flat_pixels or dark_pixels"
     " under stages"),
    ("{a: {read_noise: <= 5 DN}}",
     'grades.a.read_noise: expected a limit in electron, found "<= 5 DN"; "DN" does not convert to'
     " electron"),
    ("{a: {read_noise: <= 5 e-}}",
     'grades.a.read_noise: expected a limit in electron, found "<= 5 e-"; "e-" is no unit; nearest'
     " is electron"),
    ("{a: {read_noise: <= 5}}",
     'grades.a.read_noise: expected a limit in electron, found "<= 5"; write the unit too, such as'
     ' "10 electron"'),
    ("{a: {read_noise: 5 electron}}",
     'grades.a.read_noise: expected a limit in electron, found "5 electron"; write "<= 10'
     ' electron", ">= 10 electron" or "1 .. 10 electron"'),
    ("{a: {read_noise: < 5 electron}}",
     'grades.a.read_noise: expected a limit in electron, found "< 5 electron"; write "<= 10'
     ' electron", ">= 10 electron" or "1 .. 10 electron"'),
    ("{a: {read_noise: }}",
     'grades.a.read_noise: expected a limit in electron, found nothing; write "<= 10 electron",'
     ' ">= 10 electron" or "1 .. 10 electron"'),
    ("{a: {hot_pixels: <= 10 DN}}",
     'grades.a.hot_pixels: expected a count without unit, found "<= 10 DN"; leave out "DN"'),
    ("{a: {hot_pixels: <= 9.5}}",
     'grades.a.hot_pixels: expected a whole number, 0 or more, found "<= 9.5"'),
    ("{a: {hot_pixels: <= -1}}",
     'grades.a.hot_pixels: expected a whole number, 0 or more, found "<= -1"'),
    ("{a: {conversion_gain: 2.2 .. 1.8 electron/DN}}",
     'grades.a.conversion_gain: expected a range from low to high, found "2.2 .. 1.8 electron/DN";'
     " no value lies within"),
    ("{a: {conversion_gain: 2 .. 2 electron/DN}}",
     'grades.a.conversion_gain: expected a range from low to high, found "2 .. 2 electron/DN"; no'
     " value lies within"),
    ("{a: {read_noise: [<= 5 electron, <= 6 electron]}}",
     "grades.a.read_noise: a second limit on the same thing, first in line 4; keep one"),
    ('{a: {read_noise: [<= 5 electron, ">= 6 electron"]}}',
     "grades.a.read_noise: >= 6 electron contradicts <= 5 electron of line 4; no value meets both"),
    ("{a: {read_noise: <= 5 electron}, b: {read_noise: <= 4 electron}}",
     "grades.b.read_noise: <= 4 electron is tighter than <= 5 electron of the better grade a (line"
     " 4); grades stand best first"),
    ('{a: {dynamic_range: ">= 60 dB"}, b: {dynamic_range: ">= 61 dB"}}',
     "grades.b.dynamic_range: >= 61 dB is tighter than >= 60 dB of the better grade a (line 4);"
     " grades stand best first"),
    ("{a: {read_noise: {of: worst}}}",
     'grades.a.read_noise: limit is missing (The bound or the range, such as "<= 5 electron");'
     " expected text"),
    ('{a: {read_noise: {limit: "<= 5 electron", zone: center}}}',
     "grades.a.read_noise.zone: no such zone; nearest is centre"),
    ('{a: {read_noise: {limit: "<= 5 electron", output: left}}}',
     "grades.a.read_noise.output: no such output; there are none"),
    ('{a: {read_noise: {limit: "<= 5 electron", colour: red}}}',
     "grades.a.read_noise.colour: the sensor has no colour filters; state them in sensor.colour or"
     " take this out"),
    ('{a: {read_noise: {limit: "<= 5 electron", scope: x, wavelength: 5 nm}}}',
     "grades.a.read_noise.scope: expected either scope or output, colour and wavelength, found"
     " both"),
    ('{a: {read_noise: {limit: "<= 5 electron", of: any}}}',
     'grades.a.read_noise.of: expected every, worst or mean, found "any"'),
    ('{a: {read_noise: {limit: "<= 5 electron", at: 20}}}',
     "grades.a.read_noise.at: expected a quantity in degC, -273.15 degC or more, found 20; write"
     ' the unit too, such as "20 degC"'),
    ("{a: {read_noise: [[<= 5 electron]]}}",
     "grades.a.read_noise: expected a limit or a mapping, found a list"),
    ('{"a\\u0007": {read_noise: <= 5 electron}}',
     r"grades.a\u0007: expected a name of printable characters, 60 at most"),
]  # fmt: skip


@pytest.mark.parametrize("grades, sentence", GRADES, ids=range(len(GRADES)))
def test_a_mistake_in_the_grades(grades, sentence):
    stages = "stages: {read_noise: , hot_pixels: }\n"
    zones = "zones: {centre: {border: 3}}\n"
    text = HEAD + stages + f"grades: {grades}\n" + zones
    assert problems(text) == (f"recipe.yaml:4  {sentence}",)


def test_all_mistakes_are_told_at_once_in_the_order_of_lines():
    text = """\
nam: a
sensor:
  technology: ccd
  pixel_pitch: 9 m m
stages:
  read_noise: {pairs: -1, pears: 3}
grades:
  a: {read_noise: <= 5 DN, hot_pixels: 3}
"""
    lines = [problem.split("  ")[0] for problem in problems(text)]
    assert lines == [f"recipe.yaml:{n}" for n in (1, 1, 4, 6, 6, 8, 8, 8)]


def test_the_error_crosses_processes_whole():
    try:
        parse_recipe("", VOCABULARY, path="recipe.yaml")
    except RecipeError as error:
        copy = pickle.loads(pickle.dumps(error))
        assert copy.problems == error.problems and str(copy) == str(error)


def test_a_bomb_of_aliases_is_refused_at_its_first_anchor():
    bomb = "a: &a [x, x]\n" + "\n".join(f"a{n}: &a{n} [*a, *a]" for n in range(40))
    assert "anchor" in problems(bomb)[0]
