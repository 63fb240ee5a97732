"""The figures in words: counted from the motion, and honest where there is nothing to count."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from condyle.solver.results import FittedMotion
from condyle.viz.drawn_markers import place_markers
from condyle.viz.frame_figures import (
    NoFrameError,
    best_row,
    frame_figures,
    typical_row,
    worst_row,
)

Change = Callable[..., FittedMotion]


@pytest.fixture
def gappy(leg: FittedMotion, change: Change) -> FittedMotion:
    """Row 4: `knee` missing, `shin` left out; row 5: nothing used; row 6: nothing at all."""
    measured, used = leg.measured.copy(), leg.used.copy()
    measured[4, 1] = np.nan
    used[4, 1:3] = False
    used[5] = False
    measured[6], used[6] = np.nan, False
    return change(leg, measured=measured, used=used)


def test_markers_are_counted_once_each(gappy: FittedMotion) -> None:
    figures = frame_figures(gappy, 4)
    assert (figures.used, figures.missing, figures.left_out) == (2, 1, 1)


def test_the_rms_and_the_worst_marker_are_those_of_the_used_ones(gappy: FittedMotion) -> None:
    figures = frame_figures(gappy, 4)
    growth = 0.5 + 4 / 21
    front, ankle = 1000 * growth * np.hypot(0.02, 0.01), 1000 * growth * 0.005
    assert figures.rms_mm == pytest.approx(np.sqrt((front**2 + ankle**2) / 2))
    assert (figures.worst, figures.worst_mm) == ("front", pytest.approx(front))
    assert figures.rms_mm == pytest.approx(1000 * gappy.rms_of_frames()[4])


def test_the_line_reads_aloud(gappy: FittedMotion) -> None:
    assert frame_figures(gappy, 4).line() == (
        "t = 0.20 s, frame 5  ·  2 markers used  ·  1 missing  ·  1 left out  ·  "
        "RMS residual 11.2 mm  ·  worst front 15.4 mm"
    )
    assert frame_figures(gappy, 6).line() == "t = 0.30 s, frame 7  ·  no marker used  ·  4 missing"


def test_the_rows_chosen_are_the_worst_the_best_and_the_most_ordinary(gappy: FittedMotion) -> None:
    rms = gappy.rms_of_frames()
    assert rms[worst_row(gappy)] == np.nanmax(rms)
    assert rms[best_row(gappy)] == np.nanmin(rms)
    distance = np.abs(rms - np.nanmedian(rms))
    assert distance[typical_row(gappy)] == np.nanmin(distance)


@pytest.mark.parametrize("choose", [worst_row, best_row, typical_row])
def test_without_a_used_marker_no_row_can_be_chosen(
    leg: FittedMotion, change: Change, choose: Callable[[FittedMotion], int]
) -> None:
    unused = change(leg, used=np.zeros_like(leg.used))
    with pytest.raises(NoFrameError, match="no frame of 'swing' can be chosen"):
        choose(unused)


def test_only_the_measured_marker_is_moved_and_only_along_its_residual(leg: FittedMotion) -> None:
    drawn = place_markers(leg, 9, exaggeration=3.0)
    np.testing.assert_array_equal(drawn.fitted, leg.fitted[9])
    np.testing.assert_allclose(
        drawn.measured - drawn.fitted, 3.0 * (leg.measured[9] - leg.fitted[9]), atol=1e-15
    )


def test_every_marker_is_drawn_in_one_way(gappy: FittedMotion) -> None:
    drawn = place_markers(gappy, 4, exaggeration=3.0)
    assert [len(drawn.fitted), len(drawn.measured), len(drawn.alone), len(drawn.left_out)] == [
        2,
        2,
        2,
        1,
    ]
    np.testing.assert_array_equal(drawn.left_out[0], gappy.measured[4, 2])
    assert not len(place_markers(gappy, 6, exaggeration=3.0).measured)
