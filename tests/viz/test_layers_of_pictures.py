"""Laying one picture over another, by the arithmetic of opacity."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from condyle.viz.layers import Layer, lay_over, without_ground

levels = st.integers(0, 255)


def filled(*values: int) -> np.ndarray:
    return np.array([[values]], dtype=np.uint8)


@given(levels, levels, st.floats(0.0, 1.0))
def test_over_an_opaque_picture_the_mix_is_weighted_by_opacity(
    below: int, above: int, opacity: float
) -> None:
    picture = filled(below, below, below, 255)
    layer = Layer(filled(above, above, above), np.array([[0.3]], dtype=np.float32))
    lay_over(picture, np.array([[0.5]], dtype=np.float32), layer, in_front=opacity, hidden=0.0)
    assert abs(int(picture[0, 0, 0]) - (opacity * above + (1 - opacity) * below)) <= 0.51
    assert picture[0, 0, 3] == 255


def test_what_is_behind_is_mixed_by_the_other_opacity_and_nothing_there_changes_nothing() -> None:
    layer = Layer(filled(200, 0, 0), np.array([[0.7]], dtype=np.float32))
    picture = filled(0, 0, 0, 255)
    lay_over(picture, np.array([[0.5]], dtype=np.float32), layer, in_front=1.0, hidden=0.25)
    assert picture[0, 0, 0] == 50
    nothing = Layer(filled(200, 0, 0), np.array([[1.0]], dtype=np.float32))
    before = picture.copy()
    lay_over(picture, np.array([[0.5]], dtype=np.float32), nothing, in_front=1.0, hidden=1.0)
    np.testing.assert_array_equal(picture, before)


@given(levels, st.integers(26, 255))
def test_colour_and_opacity_come_back_from_a_black_and_a_white_ground(
    colour: int, opacity: int
) -> None:
    share = opacity / 255.0
    black = round(colour * share)
    white = round(colour * share + 255.0 * (1.0 - share))
    found = without_ground(filled(black, black, black), filled(white, white, white))
    assert abs(int(found[0, 0, 3]) - opacity) <= 1
    assert abs(int(found[0, 0, 0]) - colour) <= 3 / share + 1
