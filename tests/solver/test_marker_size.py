"""Markers of another size sit nearer to the bone, or further out."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.model.errors import FitError
from condyle.solver.marker_size import USUAL_DIAMETER, with_marker_diameter


def test_a_larger_marker_sits_further_out_by_the_difference_of_radii() -> None:
    model = load_skeleton("lower_limbs")
    larger = with_marker_diameter(model, USUAL_DIAMETER + 0.010)
    moved = 0
    for old, new in zip(model.markers, larger.markers, strict=True):
        landmarks = model.segments[model.segment_index(old.segment)].landmarks
        if old.name in landmarks:
            away = np.subtract(old.at, landmarks[old.name])
            further = np.subtract(new.at, landmarks[old.name])
            assert np.linalg.norm(further) - np.linalg.norm(away) == pytest.approx(0.005)
            assert np.linalg.norm(np.cross(away, further)) == pytest.approx(0.0, abs=1e-12)
            moved += 1
        else:
            assert new == old
    assert moved > 20
    same = with_marker_diameter(model, USUAL_DIAMETER)
    for old, new in zip(model.markers, same.markers, strict=True):
        assert new.at == pytest.approx(old.at, abs=1e-15)


@pytest.mark.parametrize("diameter", [0.0, -0.01, 14.0])
def test_a_size_that_no_marker_has_is_refused(diameter: float) -> None:
    with pytest.raises(FitError, match="metres"):
        with_marker_diameter(load_skeleton("lower_limbs"), diameter)
