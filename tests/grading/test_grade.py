import pytest

from grading.given import counted, limit, measured, recipe
from sensorgrade.grading.grade import grade
from sensorgrade.measurement import Finding

SCIENCE = ("science", [limit("read_noise", "<=", 5.0), limit("hot_pixels", "<=", 100, "")])
ENGINEERING = ("engineering", [limit("read_noise", "<=", 8.0), limit("hot_pixels", "<=", 500, "")])


def test_a_device_takes_the_best_grade_it_meets():
    asked = recipe(SCIENCE, ENGINEERING)
    for noise, expected in ((4.9, "science"), (5.1, "engineering"), (8.1, None)):
        found = grade(
            [measured("read_noise", noise, 0.1)], [counted("hot_pixels", 3)], [], recipe=asked
        )
        assert found.grade == expected
        assert found.decision == ("reject" if expected is None else "accept")


def test_the_top_grade_leaves_nothing_to_explain():
    found = grade(
        [measured("read_noise", 4.0, 0.1)],
        [counted("hot_pixels", 3)],
        [],
        recipe=recipe(SCIENCE, ENGINEERING),
    )
    assert found.reasons == ()
    assert [one.outcome for one in found.limits] == ["accept"] * 4


def test_margin_and_probability_of_one_limit():
    found = grade(
        [measured("read_noise", 4.7, 0.2)], [], [], recipe=recipe(("science", SCIENCE[1][:1]))
    )
    (only,) = found.limits
    assert only.margin == pytest.approx(0.3)
    assert only.margin_in_uncertainties == pytest.approx(1.5)
    assert only.probability == pytest.approx(0.933193, abs=5e-7)
    assert only.reason == (
        "Read noise is 4.70 ± 0.20 electron; science allows at most 5 electron:"
        " 0.3 electron inside it (1.5 standard uncertainties)."
    )


def test_what_was_not_measured_is_undecided_and_never_passed():
    found = grade([], [counted("hot_pixels", 3)], [], recipe=recipe(SCIENCE, ENGINEERING))
    assert (found.grade, found.decision) == (None, "undecided")
    assert found.reasons == (
        "Read noise: not measured; science allows at most 5 electron;"
        " also leaves open engineering (at most 8 electron).",
    )


def test_a_rejection_elsewhere_outweighs_what_is_not_known():
    found = grade([], [counted("hot_pixels", 900)], [], recipe=recipe(SCIENCE))
    assert found.decision == "reject"
    assert found.reasons[0].startswith("Hot pixels: 900 found")
    assert len(found.reasons) == 2


def test_a_finding_takes_the_decision_away_even_from_a_clear_reading():
    finding = Finding("warning", "dark, 60 s", "The darks drifted by 4 K.", "", ("read_noise",))
    found = grade(
        [measured("read_noise", 1.0, 0.1)],
        [counted("hot_pixels", 3)],
        [finding],
        recipe=recipe(SCIENCE),
    )
    assert found.decision == "undecided"
    assert "The darks drifted by 4 K (dark, 60 s)" in found.reasons[0]


def test_a_lower_grade_is_accepted_while_the_top_one_stays_open():
    found = grade(
        [measured("read_noise", 4.9, 0.2)],
        [counted("hot_pixels", 3)],
        [],
        recipe=recipe(SCIENCE, ENGINEERING, rule="non-binary"),
    )
    assert (found.grade, found.decision) == ("engineering", "accept")
    assert "accepted on condition" in found.reasons[0]


def test_no_grades_asked_is_neither_pass_nor_question():
    found = grade([measured("read_noise", 4.9, 0.2)], [], [], recipe=recipe())
    assert (found.grade, found.decision, found.limits) == (None, "ungraded", ())


def test_a_grade_without_limits_is_met_by_every_device():
    found = grade([], [], [], recipe=recipe(SCIENCE, ("mechanical", [])))
    assert (found.grade, found.decision) == ("mechanical", "accept")


def test_every_output_must_meet_a_limit_and_all_must_be_measured():
    asked = recipe(("science", SCIENCE[1][:1]), outputs=("left", "right"))
    left = measured("read_noise", 4.0, 0.1, scope="output left")
    right = measured("read_noise", 6.0, 0.1, scope="output right")
    assert grade([left, right], [], [], recipe=asked).decision == "reject"
    alone = grade([left], [], [], recipe=asked)
    assert alone.decision == "undecided"
    assert alone.reasons[0].startswith("Read noise of output right: not measured")


def test_worst_and_mean_of_the_outputs():
    left = measured("read_noise", 4.0, 0.1, scope="output left")
    right = measured("read_noise", 5.2, 0.3, scope="output right")
    outputs = ("left", "right")
    worst = recipe(("a", [limit("read_noise", "<=", 5.0, of="worst")]), outputs=outputs)
    (one,) = grade([left, right], [], [], recipe=worst).limits
    assert (one.scope, one.value, one.outcome) == ("output right", 5.2, "reject")
    least = recipe(("a", [limit("read_noise", ">=", 4.1, of="worst")]), outputs=outputs)
    (one,) = grade([left, right], [], [], recipe=least).limits
    assert (one.scope, one.outcome) == ("output left", "reject")
    mean = recipe(("a", [limit("read_noise", "<=", 5.0, of="mean")]), outputs=outputs)
    (one,) = grade([left, right], [], [], recipe=mean).limits
    assert one.value == pytest.approx(4.6)
    assert one.standard_uncertainty == pytest.approx(0.2)
    assert one.outcome == "accept"


def test_a_limit_may_speak_of_one_output_one_zone_or_one_colour():
    readings = [
        measured("prnu", 0.5, 0.01, scope="output left, colour red", unit="%"),
        measured("prnu", 0.7, 0.01, scope="output left, colour green-red", unit="%"),
        measured("prnu", 0.8, 0.01, scope="output left, colour green-blue", unit="%"),
        measured("prnu", 9.0, 0.01, scope="zone centre", unit="%"),
    ]

    def values(**narrowing):
        asked = recipe(("a", [limit("prnu", "<=", 1.0, "%", **narrowing)]))
        return [one.value for one in grade(readings, [], [], recipe=asked).limits]

    assert values() == [0.5, 0.7, 0.8]
    assert values(scope="red") == [0.5]
    assert values(scope="output left, colour red") == [0.5]
    assert values(scope="left, green") == [0.7, 0.8]
    assert values(zone="centre") == [9.0]
    assert values(scope="right") == [None]


def test_a_missing_colour_leaves_the_limit_open():
    readings = [
        measured("prnu", 0.5, 0.01, scope=f"colour {name}", unit="%")
        for name in ("red", "green-red", "blue")
    ]
    asked = recipe(("a", [limit("prnu", "<=", 1.0, "%")]), colour="RGGB")
    found = grade(readings, [], [], recipe=asked)
    assert found.decision == "undecided"
    assert "colour green-blue" in found.reasons[0]


def test_a_count_is_the_whole_devices_unless_narrowed():
    counts = [
        counted("hot_pixels", 90),
        counted("hot_pixels", 70, scope="output left"),
        counted("hot_pixels", 20, scope="output right"),
        counted("hot_pixels", 5, scope="zone centre"),
    ]

    def values(**narrowing):
        asked = recipe(("a", [limit("hot_pixels", "<=", 80, "", **narrowing)]))
        return [one.value for one in grade([], counts, [], recipe=asked).limits]

    assert values() == [90]
    assert values(scope="left") == [70]
    assert values(zone="centre") == [5]
    assert values(of="worst") == [70]
    assert values(of="mean") == [45]


def test_the_weightiest_reason_stands_first():
    asked = recipe(
        (
            "science",
            [
                limit("read_noise", "<=", 5.0),
                limit("dark_current", "<=", 1.0, "electron / s"),
                limit("hot_pixels", "<=", 100, ""),
                limit("prnu", "<=", 1.0, "%"),
            ],
        ),
        ("engineering", [limit("read_noise", "<=", 5.5)]),
    )
    found = grade(
        [
            measured("read_noise", 5.6, 0.01),
            measured("dark_current", 1.2, 0.001, unit="electron / s"),
        ],
        [counted("hot_pixels", 400)],
        [],
        recipe=asked,
    )
    assert [reason.split(" is ")[0].split(":")[0] for reason in found.reasons] == [
        "Read noise",  # misses both grades
        "Hot pixels",  # four times its limit
        "Dark current",  # 1.2 times
        "PRNU",  # not measured
    ]
    assert found.reasons[0].endswith("; also misses engineering (at most 5.5 electron).")


def test_what_leaves_a_grade_open_is_an_undecided_device_s_first_reason():
    asked = recipe(
        ("science", [limit("read_noise", "<=", 5.0), limit("dark_current", "<=", 1.0)]),
        ("engineering", [limit("read_noise", "<=", 9.0), limit("dark_current", "<=", 1.25)]),
        rule="non-binary",
    )
    found = grade(
        [measured("read_noise", 8.0, 0.1), measured("dark_current", 1.2, 0.1)],
        [],
        [],
        recipe=asked,
    )
    assert found.decision == "undecided"
    dark, noise = found.reasons
    assert dark.startswith("Dark current is 1.20 ± 0.10")
    assert dark.endswith("; also leaves open engineering (at most 1.25 electron).")
    assert noise.startswith("Read noise is 8.00 ± 0.10")


def test_a_limit_missed_in_one_grade_and_open_in_another_tells_both():
    asked = recipe(
        ("science", [limit("read_noise", "<=", 4.0)]),
        ("engineering", [limit("read_noise", "<=", 5.0)]),
        rule="non-binary",
    )
    (reason,) = grade([measured("read_noise", 5.1, 0.2)], [], [], recipe=asked).reasons
    assert "science allows at most 4 electron: 1.1 electron past it" in reason
    assert reason.endswith("; also leaves open engineering (at most 5 electron).")


@pytest.mark.parametrize(
    "expected, doubt, sentence",
    [
        (152.0, 0.0, "Hot pixels: 152 found; a allows at most 40: 112 past it."),
        (152.01, 0.004, "Hot pixels: 152 found; a allows at most 40: 112 past it."),
        (
            150.2,
            1.4,
            "Hot pixels: 152 found (150.2 ± 1.4 by their probabilities); a allows at most 40: 112"
            " past it (80.0 standard uncertainties).",
        ),
    ],
)
def test_a_sure_count_is_told_without_its_doubt(expected, doubt, sentence):
    asked = recipe(("a", [limit("hot_pixels", "<=", 40, "")]))
    found = grade([], [counted("hot_pixels", 152, expected, doubt)], [], recipe=asked)
    assert found.reasons == (sentence,)


def test_a_limit_has_its_own_rule():
    asked = recipe(
        ("a", [limit("read_noise", "<=", 5.0, rule="guarded acceptance")]), rule="simple"
    )
    found = grade([measured("read_noise", 4.9, 0.2)], [], [], recipe=asked)
    assert found.decision == "reject"
    assert found.reasons == (
        "Read noise is 4.90 ± 0.20 electron; a allows at most 5 electron: 0.1 electron inside it"
        " (0.5 standard uncertainties), but only 69.1 % sure to conform where 95 % is asked"
        " (guarded acceptance).",
    )


def test_a_finding_about_one_output_leaves_the_others_decided():
    asked = recipe(("a", [limit("read_noise", "<=", 5.0)]), outputs=("left", "right"))
    finding = Finding(
        "warning", "read_noise, output left", "needs two bias frames", "", ("read_noise",)
    )
    right = measured("read_noise", 6.0, 0.1, scope="output right")
    found = grade([right], [], [finding], recipe=asked)
    assert found.decision == "reject"
    assert found.reasons == (
        "Read noise of output right is 6.00 ± 0.10 electron; a allows at most 5 electron:"
        " 1 electron past it (10.0 standard uncertainties).",
        "Read noise of output left: cannot be decided, needs two bias frames"
        " (read_noise, output left); a allows at most 5 electron.",
    )


def test_limits_that_are_met_can_be_left_out():
    readings = [measured("read_noise", 6.0, 0.1)], [counted("hot_pixels", 3)], []
    asked = recipe(SCIENCE, ENGINEERING)
    whole, short = (
        grade(*readings, recipe=asked),
        grade(*readings, recipe=asked, with_accepted=False),
    )
    assert whole.reasons == short.reasons != ()
    assert all(one.reason for one in whole.limits)
    assert short.limits == tuple(one for one in whole.limits if one.outcome != "accept")
    assert (short.grade, short.decision, len(short.limits)) == (whole.grade, whole.decision, 1)


def test_a_finding_about_one_output_leaves_the_whole_devices_count_undecided():
    finding = Finding("warning", "hot, output left", "needs darks", "", ("hot_pixels",))
    asked = recipe(("a", [limit("hot_pixels", "<=", 100, "")]), outputs=("left", "right"))
    found = grade([], [counted("hot_pixels", 3)], [finding], recipe=asked)
    assert found.decision == "undecided"
