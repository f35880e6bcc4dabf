import json
from dataclasses import replace

import pytest

from lot.results import invented_result
from sensorgrade.errors import RequestError
from sensorgrade.lot.result_json import read_result, result_json
from sensorgrade.measurement import Measurement


def test_what_was_written_reads_back_the_same():
    result = invented_result(7)
    assert read_result(result_json(result)) == result


def test_a_device_without_grade_place_or_numbers_reads_back_too():
    result = invented_result(7, outputs=0, inputs=0, grades=(), decision="ungraded", grade=None)
    result = replace(result, lot=None, wafer=None, die_row=None, die_column=None, taken=None)
    assert read_result(result_json(result)) == result


def test_equal_results_give_equal_text_whatever_the_order_they_were_made_in():
    assert result_json(invented_result(3)) == result_json(invented_result(3))


def test_the_keys_that_others_read():
    document = json.loads(result_json(invented_result(12)))
    assert document["serial"] == "S00012"
    assert set(document["measurements"][0]) == {
        "name",
        "scope",
        "value",
        "standard_uncertainty",
        "unit",
        "n",
    }
    assert document["defects"] == {"hot_pixels": 12, "bad_columns": 12}
    assert document["grade"]["grade"] == "science"
    assert document["grade"]["decision"] == "accept"
    assert document["grade"]["reasons"]
    assert document["provenance"]["recipe_sha256"] == "ab" * 32


def test_each_measurement_stands_on_a_line_of_its_own():
    lines = result_json(invented_result(1)).splitlines()
    assert sum('"name": "read_noise", "scope": "output b"' in line for line in lines) == 1
    assert max(map(len, lines)) < 500


def test_a_number_that_json_has_no_form_for_is_refused():
    wrong = Measurement("dsnu", "device", float("nan"), 1.0, "electron / s", 1)
    with pytest.raises(ValueError, match="JSON"):
        result_json(replace(invented_result(1), measurements=(wrong,)))


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"serial": "S1"}', "null"])
def test_text_that_is_no_result_is_refused_in_a_sentence(text):
    with pytest.raises(RequestError, match="not a result"):
        read_result(text)
