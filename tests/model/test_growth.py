"""How a skeleton grows, against the law of the language page and closed forms of solid bodies."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import casadi as ca
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from condyle.model.growth import (
    dependent_translations,
    grown_gyration,
    grown_marker_at_expression,
    grown_numbers_expression,
    grown_segment,
    number_layout,
    size_factors,
    sized_joint_centres,
    sized_landmarks,
    sized_lengths,
    sized_marker_at,
    sized_numbers,
)
from condyle.model.skeleton import Segment, Size, Skeleton, Vector

factors = st.tuples(*[st.floats(0.3, 3)] * 3)
sides = st.tuples(*[st.floats(0.01, 2)] * 3)

SIZES = {
    "trunk": Size((1.1, 0.9, 1.05)),
    "arm": Size((0.95, 1.2, 1.02)),
    "forearm": Size((1.3, 0.8, 0.9)),
}


def box_gyration(a: float, b: float, c: float) -> Vector:
    """Solid box with edges a, b, c: r_x^2 = (b^2 + c^2) / 12 (standard table of inertia)."""
    return (np.sqrt((b**2 + c**2) / 12), np.sqrt((a**2 + c**2) / 12), np.sqrt((a**2 + b**2) / 12))


@given(sides=sides, factors=factors)
def test_a_box_that_grows_has_the_radii_of_the_larger_box(sides: Vector, factors: Vector) -> None:
    grown = [side * factor for side, factor in zip(sides, factors, strict=True)]
    found = grown_gyration(box_gyration(*sides), factors)
    np.testing.assert_allclose(found, box_gyration(*grown), rtol=1e-9)


# Solid ellipsoid with semi-axes a, b, c: I_x = m (b^2 + c^2) / 5 (standard table of inertia).
def test_a_ball_that_grows_unevenly_has_the_radii_of_an_ellipsoid() -> None:
    radius, (fx, fy, fz) = 0.2, (1.5, 0.7, 1.1)
    ball = (np.sqrt(0.4) * radius,) * 3
    ellipsoid = [radius * np.sqrt((u**2 + v**2) / 5) for u, v in ((fy, fz), (fx, fz), (fx, fy))]
    np.testing.assert_allclose(grown_gyration(ball, (fx, fy, fz)), ellipsoid, rtol=1e-12)


def test_a_body_that_grows_evenly_has_its_radii_multiplied() -> None:
    found = grown_gyration((0.1389, 0.0629, 0.1389), (1.1, 1.1, 1.1))
    np.testing.assert_allclose(found, 1.1 * np.array([0.1389, 0.0629, 0.1389]), rtol=1e-12)


def test_a_segments_centre_grows_axis_by_axis_and_its_mass_does_not() -> None:
    segment = Segment("s", mass=3.0, centre_of_mass=(0.1, -0.2, 0.05), gyration=(0.1, 0.1, 0.1))
    grown = grown_segment(segment, {"s": (1.1, 0.9, 2.0)})
    assert grown.centre_of_mass == pytest.approx((0.11, -0.18, 0.1))
    assert grown.mass == 3.0
    assert grown_segment(segment, {}) == replace(
        segment, gyration=grown_segment(segment, {}).gyration
    )


def test_the_flat_vector_has_a_place_for_every_number(tree: Skeleton) -> None:
    layout = number_layout(tree)
    parts = (
        layout.at,
        layout.in_child,
        layout.gains,
        layout.marker_at,
        layout.laboratory_from_upright,
    )
    covered = np.concatenate([np.arange(layout.size)[part] for part in parts])
    np.testing.assert_array_equal(covered, np.arange(layout.size))
    assert layout.translations == len(dependent_translations(tree)) == 2


def test_joint_places_grow_with_the_segment_that_they_are_written_in(tree: Skeleton) -> None:
    numbers = sized_numbers(replace(tree, sizes=SIZES), np.eye(3))
    layout = number_layout(tree)
    at = numbers[layout.at].reshape(-1, 3)
    in_child = numbers[layout.in_child].reshape(-1, 3)
    joint = {j.name: i for i, j in enumerate(tree.joints)}
    # Nothing in the laboratory grows.
    np.testing.assert_allclose(at[joint["root"]], [0.1, -0.2, 0.3])
    np.testing.assert_allclose(
        in_child[joint["root"]], np.array([1.1, 0.9, 1.05]) * [0.02, 0.05, -0.03]
    )
    np.testing.assert_allclose(at[joint["shoulder"]], np.array([1.1, 0.9, 1.05]) * [0.03, 0.4, 0.2])
    np.testing.assert_allclose(
        in_child[joint["elbow"]], np.array([1.3, 0.8, 0.9]) * [0, 0.03, 0.01]
    )


# The language: a dependent translation grows by |diag(f) a|, a its axis turned into the parent by
# `turned` alone; a translation with a free coordinate does not grow.
def test_a_dependent_translation_grows_by_the_length_of_its_stretched_axis(tree: Skeleton) -> None:
    numbers = sized_numbers(replace(tree, sizes=SIZES), np.eye(3))
    axis = np.array([0.2, -1, 0.4])
    turned = Rotation.from_rotvec(np.radians(-20) * axis / np.linalg.norm(axis))
    stretched = np.array([0.95, 1.2, 1.02]) * turned.apply([1, 0.5, 0] / np.hypot(1, 0.5))
    gains = numbers[number_layout(tree).gains]
    # The second is along z of the trunk, untwisted: it grows by the trunk's own factor.
    np.testing.assert_allclose(gains, [np.linalg.norm(stretched), 1.05], rtol=1e-12)


FREE = """\
condyle: 1
name: slider
segments: {base: {}, slide: {}}
joints:
  root: {from: laboratory, to: base, moves: [{translate: x, follows: s, polynomial: [0, 1]}]}
  rail: {from: base, to: slide, at: [0, 1, 0], moves: [{translate: y, coordinate: s}]}
"""


def test_neither_a_free_translation_nor_one_in_the_laboratory_grows(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    skeleton = replace(skeleton_of(FREE), sizes={"base": Size((2, 3, 4)), "slide": Size((5, 6, 7))})
    numbers = sized_numbers(skeleton, np.eye(3))
    layout = number_layout(skeleton)
    np.testing.assert_array_equal(numbers[layout.gains], [1.0])
    np.testing.assert_array_equal(numbers[layout.at], [0, 0, 0, 0, 3, 0])


def test_a_placed_marker_wins_over_its_nominal_place_and_does_not_grow(tree: Skeleton) -> None:
    markers = tuple(
        replace(m, placed=(0.1, 0.2, 0.3)) if m.name == "arm_1" else m for m in tree.markers
    )
    markers = tuple(replace(m, at=None) if m.name == "arm_2" else m for m in markers)
    places = sized_marker_at(replace(tree, sizes=SIZES, markers=markers))
    names = list(tree.marker_names)
    np.testing.assert_array_equal(places[names.index("arm_1")], [0.1, 0.2, 0.3])
    assert np.isnan(places[names.index("arm_2")]).all()
    np.testing.assert_allclose(
        places[names.index("trunk_1")], np.array([1.1, 0.9, 1.05]) * [0.12, 0.1, 0.05]
    )


def test_landmarks_lengths_and_joint_centres_grow_alike(tree: Skeleton) -> None:
    sized = replace(tree, sizes=SIZES)
    top = np.array([1.1, 0.9, 1.05]) * [0.02, 0.5, 0.01]
    np.testing.assert_allclose(sized_landmarks(sized)["trunk"]["top"], top)
    assert sized_lengths(sized)["trunk"] == pytest.approx(np.linalg.norm(top))
    centres = sized_joint_centres(sized)
    np.testing.assert_allclose(
        centres["arm"]["forearm"], np.array([0.95, 1.2, 1.02]) * [0.02, -0.3, 0.01]
    )
    assert set(centres["trunk"]) == {"arm", "leg"}
    assert centres["plate"] == {}
    # The default of `length`: from the segment's joint centre to that of its first child.
    from_in_child = np.array([0.95, 1.2, 1.02]) * (
        np.array([0.02, -0.3, 0.01]) - [0.01, 0.02, -0.01]
    )
    assert sized_lengths(sized)["arm"] == pytest.approx(np.linalg.norm(from_in_child))


def test_a_reference_person_has_factors_of_one(tree: Skeleton) -> None:
    np.testing.assert_array_equal(size_factors(tree), np.ones((len(tree.segments), 3)))


def test_the_laboratory_from_upright_stands_row_by_row(tree: Skeleton) -> None:
    rotation = Rotation.from_rotvec([0.3, -0.2, 0.9]).as_matrix()
    numbers = sized_numbers(tree, rotation)
    here = number_layout(tree).laboratory_from_upright
    np.testing.assert_array_equal(numbers[here].reshape(3, 3), rotation)


def test_the_law_can_be_differentiated(tree: Skeleton) -> None:
    f = ca.SX.sym("f", 3 * len(tree.segments))
    nominal = grown_marker_at_expression(tree, f)
    numbers = grown_numbers_expression(tree, f, nominal, ca.SX.zeros(9))
    function = ca.Function("n", [f], [numbers, ca.densify(ca.jacobian(numbers, f))])
    at = np.random.default_rng(5).uniform(0.8, 1.2, f.numel())
    J, h = function(at)[1].full(), 1e-6
    numeric = np.column_stack(
        [
            (function(at + h * e)[0].full() - function(at - h * e)[0].full()).ravel() / (2 * h)
            for e in np.eye(len(at))
        ]
    )
    np.testing.assert_allclose(J, numeric, atol=1e-9)
