"""Masks turned into those that the readout downstream needs, worked by hand."""

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from sensorgrade.defects.bits import BY_NAME, names_of, pixels_by_bit, value_of
from sensorgrade.defects.mask_edit import BitDifference, Edit, differences, edited, merged
from sensorgrade.errors import RequestError
from sensorgrade.recipe.model import Section

HOT, DEAD, COLUMN = (BY_NAME[name].value for name in ("hot", "dead", "column"))


def some_mask():
    mask = np.zeros((4, 6), np.uint16)
    mask[0, 1] = HOT
    mask[2, 3] = HOT | DEAD
    mask[:, 5] |= COLUMN
    return mask


def test_bits_are_kept_or_left_out_by_name():
    kept = edited(some_mask(), Edit(bits=("hot",)))
    assert_array_equal(np.argwhere(kept), [[0, 1], [2, 3]])
    assert set(np.unique(kept)) == {0, HOT}
    left = edited(some_mask(), Edit(without=("hot", "column")))
    assert_array_equal(np.argwhere(left), [[2, 3]])


def test_what_carries_a_bit_grows_and_the_rest_does_not():
    grown = edited(some_mask(), Edit(grow={"dead": 1}))
    assert_array_equal(np.argwhere(grown & DEAD), [[r, c] for r in (1, 2, 3) for c in (2, 3, 4)])
    assert_array_equal(grown & HOT, some_mask() & HOT)


def test_growth_stops_at_the_edges():
    grown = edited(some_mask(), Edit(bits=("hot",), grow={"hot": 1}))
    assert_array_equal(grown[:2, :3] > 0, [[1, 1, 1], [1, 1, 1]])
    assert not grown[:, 5].any()


def test_a_window_is_cut_and_one_that_leaves_the_mask_is_refused():
    cut = edited(some_mask(), Edit(crop=Section(1, 4, 2, 5)))
    assert_array_equal(np.argwhere(cut), [[1, 1]])
    with pytest.raises(RequestError, match=r"\[2:7,1:4\] leaves the mask, which has 6 x 4"):
        edited(some_mask(), Edit(crop=Section(0, 4, 1, 7)))


def test_quarter_turns_are_counterclockwise_with_row_0_at_the_bottom():
    # Shown with row 0 at the bottom, [0, 1] is the second pixel of the lowest line. Turned
    # counterclockwise by a quarter the lowest line becomes the right column, from below.
    turned = edited(some_mask(), Edit(bits=("hot",), rotate=90))
    assert turned.shape == (6, 4)
    assert turned[1, 3] and turned[3, 1] and (turned > 0).sum() == 2
    half = edited(some_mask(), Edit(rotate=180))
    assert_array_equal(half, some_mask()[::-1, ::-1])
    back = edited(turned, Edit(rotate=270))
    assert_array_equal(back, some_mask() & HOT)


def test_flips_reverse_the_axis_they_name():
    assert_array_equal(edited(some_mask(), Edit(flip=("rows",))), some_mask()[::-1])
    assert_array_equal(edited(some_mask(), Edit(flip=("columns",))), some_mask()[:, ::-1])


def test_a_binned_pixel_carries_the_bits_of_all_its_pixels():
    binned = edited(some_mask(), Edit(bin=(2, 3)))
    assert_array_equal(binned, [[HOT, COLUMN], [0, HOT | DEAD | COLUMN]])
    with pytest.raises(RequestError, match="bin: 4 x 2"):
        edited(some_mask(), Edit(bin=(2, 4)))


def test_masks_join_and_compare_bit_by_bit():
    other = np.zeros((4, 6), np.uint16)
    other[0, 1] = DEAD
    other[3, 0] = HOT
    both = merged([some_mask(), other])
    assert both[0, 1] == HOT | DEAD and both[3, 0] == HOT and both[2, 3] == HOT | DEAD
    assert differences(some_mask(), other) == (
        BitDifference("any", 1, 5, 1),
        BitDifference("hot", 0, 2, 1),
        BitDifference("dead", 0, 1, 1),
        BitDifference("column", 0, 4, 0),
    )
    with pytest.raises(RequestError, match="6 x 4 and 3 x 2 pixels"):
        merged([both, np.zeros((2, 3), np.uint16)])


def test_names_and_values_of_bits_belong_together():
    assert value_of(("hot", "dead", "hot")) == HOT | DEAD
    assert names_of(HOT | COLUMN) == ("hot", "column")
    assert pixels_by_bit(some_mask()) == {"hot": 2, "dead": 1, "column": 4}
    with pytest.raises(RequestError, match="no bit is called 'hott'; there are hot, warm"):
        value_of(("hott",))
