"""What markers can tell, on models whose blind spots are known beforehand."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.model.skeleton import Skeleton
from condyle.solver.telling import tell

ROD = """
condyle: 1
name: rod
segments: {rod: {}, tip: {}}
joints:
  hold: {from: laboratory, to: rod, moves: [{rotate: x, coordinate: lean, range: [-60, 60]}, {rotate: y, coordinate: spin, range: [-60, 60]}]}
  end: {from: rod, to: tip, at: [0, 1, 0], moves: [{rotate: z, coordinate: nod, range: [-60, 60]}]}
markers: {a: {segment: rod, at: [0, 0.2, 0]}, b: {segment: rod, at: [0, 0.7, 0]}}
"""


def test_markers_on_the_axis_of_a_turn_do_not_tell_it(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    told = tell(skeleton_of(ROD))
    assert set(told.unseen) == {"spin", "nod"}
    assert told.remedies == {"spin": "tip", "nod": "tip"}
    # By hand: two markers at levers 0.2 and 0.7 m, 6 mm each, tell the lean to s / sqrt(sum l^2).
    assert told.sd["lean"] == pytest.approx(0.006 / np.hypot(0.2, 0.7), rel=1e-9)


def test_two_parallel_hinges_close_together_are_hardly_told_apart(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    text = """
condyle: 1
name: folding rule
segments: {first: {}, second: {}}
joints:
  a: {from: laboratory, to: first, moves: [{rotate: z, coordinate: one, range: [-5, 5]}]}
  b: {from: first, to: second, at: [0.02, 0, 0], moves: [{rotate: z, coordinate: two, range: [-5, 5]}]}
markers: {m: {segment: second, at: [0.5, 0, 0]}, n: {segment: second, at: [0.4, 0.1, 0]}}
"""
    told = tell(skeleton_of(text))
    assert told.unseen == ()
    ((first, second, correlation),) = told.pairs
    assert {first, second} == {"one", "two"}
    assert correlation < -0.95


def test_only_the_markers_that_are_there_count() -> None:
    skeleton = load_skeleton("lower_limbs")
    present = np.array([m.segment != "foot_left" for m in skeleton.markers])
    told = tell(skeleton, present=present)
    assert {"ankle_dorsiflexion_left", "subtalar_inversion_left"} <= set(told.unseen)
    assert "ankle_dorsiflexion_right" not in told.unseen
    assert told.remedies["ankle_dorsiflexion_left"] in ("talus_left", "foot_left", "toes_left")
    whole = tell(skeleton)
    assert whole.unseen == ("toes_extension_right", "toes_extension_left")
    assert told.sd["knee_flexion_left"] >= whole.sd["knee_flexion_left"]


def test_an_orientation_without_markers_is_named_by_its_angles(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    text = """
condyle: 1
name: ball
segments: {base: {}, ball: {}}
joints:
  root: {from: laboratory, to: base, fixed: true}
  socket:
    from: base
    to: ball
    spherical: {angles: {sequence: [z, x, y], names: [first, middle, third]}}
markers: {centre: {segment: ball, at: [0, 0, 0]}}
"""
    assert set(tell(skeleton_of(text)).unseen) == {"first", "middle", "third", "first_sum"}
