from itertools import combinations

import numpy as np
import pytest

from sensorgrade.lot.summary import DeviceLine
from sensorgrade.lot.wafer import (
    Die,
    clustering,
    dies,
    radius_yields,
    reticle_yields,
    wafer_yields,
)


def wafer(picture: str, name: str = "W1") -> tuple[Die, ...]:
    """Dies from a picture: o accepted, x failed, blank none."""
    return tuple(
        Die(f"{name}-{row}-{column}", name, row, column, sign == "o", "", None)
        for row, line in enumerate(picture.strip("\n").split("\n"))
        for column, sign in enumerate(line)
        if sign != " "
    )


def test_yield_of_each_wafer():
    found = wafer_yields(wafer("oox\noxx") + wafer("ooo", "W2"))
    assert [(part.part, part.accepted, part.dies) for part in found] == [
        ("W1", 3, 6),
        ("W2", 3, 3),
    ]
    assert found[0].interval.low < 0.5 < found[0].interval.high


def test_yield_by_radius_finds_a_bad_edge():
    picture = "\n".join(
        "".join("x" if np.hypot(row - 5, column - 5) > 4.4 else "o" for column in range(11))
        for row in range(11)
    )
    round_one = tuple(die for die in wafer(picture) if np.hypot(die.row - 5, die.column - 5) <= 5)
    rings = radius_yields(round_one)
    assert [ring.part for ring in rings] == [
        "0 to 50 % of the radius",
        "50 to 71 % of the radius",
        "71 to 87 % of the radius",
        "87 to 100 % of the radius",
    ]
    assert [ring.accepted / ring.dies for ring in rings[:3]] == [1, 1, 1]
    assert rings[3].accepted == 0
    assert sum(ring.dies for ring in rings) == len(round_one)


def test_yield_by_reticle_position_finds_the_flaw_of_the_reticle():
    found = reticle_yields(wafer("oooooo\noxoxox\noooooo\noxoxox"), rows=2, columns=2)
    assert {part.part: part.accepted for part in found} == {
        "row 0, column 0": 6,
        "row 0, column 1": 6,
        "row 1, column 0": 6,
        "row 1, column 1": 0,
    }
    moved = reticle_yields(wafer("oxo"), rows=1, columns=2, first=(0, 1))
    assert {part.part: part.accepted for part in moved} == {
        "row 0, column 0": 0,
        "row 0, column 1": 2,
    }


def test_neighbouring_pairs_are_counted_by_edge_and_corner():
    assert clustering(wafer("xx\nox")).pairs == 3
    assert clustering(wafer("xox\noxo")).pairs == 2
    assert clustering(wafer("x x\nooo")).pairs == 0
    assert clustering(wafer("xx") + wafer("x", "W2")).pairs == 1


@pytest.mark.parametrize("picture", ["xxo\nooo\noox", "xoxo\nooxx", "xx oo\nooxoo"])
def test_mean_spread_and_probability_are_those_of_all_arrangements(picture):
    placed = wafer(picture)
    failed = sum(not die.accepted for die in placed)
    at = [(die.row, die.column) for die in placed]
    counts = [
        sum(
            max(abs(one[0] - two[0]), abs(one[1] - two[1])) == 1
            for one, two in combinations(chosen, 2)
        )
        for chosen in combinations(at, failed)
    ]
    found = clustering(placed)
    assert found.expected == pytest.approx(np.mean(counts))
    assert found.spread == pytest.approx(np.std(counts))
    exact = np.mean(np.array(counts) >= found.pairs)
    assert found.probability == pytest.approx(exact, abs=5 * np.sqrt(exact / 9999))


def test_a_cluster_stands_out_and_a_bad_wafer_alone_does_not():
    bad = wafer("\n".join(["xxxx"] * 4))
    good = wafer("\n".join(["oooo"] * 4), "W2")
    assert clustering(bad + good).probability == 1.0
    corner = wafer("xxxooo\nxxxooo\nxxxooo\noooooo\noooooo\noooooo")
    assert clustering(corner).probability < 0.001


def test_under_chance_the_probability_is_uniform():
    generator = np.random.default_rng(3)
    found = []
    for _ in range(60):
        signs = np.array(list("x" * 12 + "o" * 24))
        rows = generator.permutation(signs).reshape(6, 6)
        found.append(clustering(wafer("\n".join("".join(row) for row in rows))).probability)
    # Ties make small probabilities rarer than chance, never commoner.
    assert np.mean(np.array(found) <= 0.05) < 0.05 + 5 * np.sqrt(0.05 * 0.95 / 60)
    assert 0.4 < np.mean(found) < 0.75


def line(serial: str, **changes: object) -> DeviceLine:
    given = {
        "serial": serial, "folder": serial, "lot": "L", "wafer": "W1", "die_row": 0,
        "die_column": 0, "grade": None, "decision": "accept", "seconds": 1.0, "reason": None,
    }  # fmt: skip
    return DeviceLine(**(given | changes))  # type: ignore[arg-type]


def test_only_devices_with_a_known_place_are_dies():
    placed = dies(
        [
            line("a"),
            line("b", die_row=None),
            line("c", wafer=None),
            line("d", die_column=1, decision="failed"),
        ]
    )
    assert [(die.serial, die.accepted) for die in placed] == [("a", True), ("d", False)]


def test_wafers_of_the_same_name_in_two_lots_are_two_wafers():
    placed = dies([line("a"), line("b", lot="M")])
    assert [die.wafer for die in placed] == ["L W1", "M W1"]


def test_no_dies_give_no_parts():
    assert wafer_yields(()) == radius_yields(()) == ()
    assert clustering(()).probability == 1.0
