"""How far a process knows its way: against a dense system, and where gaps stop being bridged."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.solver.gap_bridging import (
    MarkerShare,
    _relative_variance,
    bridged,
    bridged_together,
)


@pytest.mark.parametrize("order", [3, 4])
@pytest.mark.parametrize("both", [True, False])
def test_variance_is_that_of_the_process_with_known_neighbours(order: int, *, both: bool) -> None:
    length, known = 12, 30
    frames = known + length + (known if both else 0)
    D = np.diff(np.eye(frames), order, axis=0)
    precision = D.T @ D
    index = np.r_[0:known, known + length : frames]
    precision[index, index] += 1e10  # seen all but exactly
    expected = np.diag(np.linalg.inv(precision))[known : known + length].max()
    assert _relative_variance(length, order, both) == pytest.approx(expected, rel=1e-3)


def test_long_gaps_follow_the_power_law_of_integrated_noise() -> None:
    near, far = (_relative_variance(n, 3, both_sides=True) for n in (40, 80))
    assert far / near == pytest.approx(2**5)


def test_a_gap_is_bridged_up_to_the_sd_that_is_allowed() -> None:
    determined = np.ones(200, dtype=bool)
    determined[80:95] = False
    precision = 1.0
    sd = np.sqrt(_relative_variance(15, 4, both_sides=True))
    assert bridged(determined, precision, 4, 1.01 * sd)[80:95].all()
    assert not bridged(determined, precision, 4, 0.99 * sd).any()


def test_beyond_the_ends_knowledge_reaches_less_far() -> None:
    inside, outside = np.ones(100, dtype=bool), np.ones(100, dtype=bool)
    inside[40:52] = False
    outside[88:] = False
    most = np.sqrt(_relative_variance(12, 3, both_sides=True)) * 1.01
    assert bridged(inside, 1.0, 3, most).any()
    assert not bridged(outside, 1.0, 3, most).any()


def test_a_gap_without_enough_frames_beside_it_is_left() -> None:
    determined = np.zeros(50, dtype=bool)
    determined[[10, 11, 40]] = True
    assert not bridged(determined, 1e12, 3, 10.0).any()
    assert not bridged(determined, 0.0, 3, 10.0).any()


def test_a_gap_at_either_end_needs_frames_on_its_other_side() -> None:
    for order in (3, 4):
        for frames in (slice(0, 6), slice(94, 100)):
            determined = np.ones(100, dtype=bool)
            determined[frames] = False
            assert bridged(determined, 1e12, order, 0.1)[frames].all()
    assert not bridged(np.zeros(20, dtype=bool), 1e12, 3, 0.1).any()
    assert not bridged(np.ones(20, dtype=bool), 1e12, 3, 0.1).any()


def test_a_marker_that_moves_with_one_at_rest_takes_its_bridges_away() -> None:
    """Freedoms 0, 1, 2 in a chain, 3 apart; marker 0 moves with 0 and 1, 1 with 1 and 2, 2 with 3."""
    moves = np.array([[1, 0, 0], [1, 1, 0], [0, 1, 0], [0, 0, 1]], dtype=bool)
    there = np.ones((40, 3), dtype=bool)
    determined = np.ones((40, 4), dtype=bool)
    determined[10:30] = False
    bridges = ~determined
    bridges[:, 0] = False  # cannot be bridged
    share = MarkerShare(moves, there)
    kept = bridged_together(bridges, determined, ~determined, share)
    assert not kept[:, :3].any()  # from marker to marker
    np.testing.assert_array_equal(kept[:, 3], bridges[:, 3])
    # Marker 0 hidden: 0 at rest is nobody's concern.
    there[:, 0] = False
    told_in_part = ~determined
    told_in_part[:, 0] = False
    np.testing.assert_array_equal(
        bridged_together(bridges, determined, told_in_part, share), bridges
    )
    # Seen in one frame of the gap: the whole gap goes, another one stays.
    there[20, 0], told_in_part[20, 0] = True, True
    determined[35:38] = False
    bridges[35:38, 1:] = True
    kept = bridged_together(bridges, determined, told_in_part, share)
    assert not kept[10:30, 1:3].any()
    assert kept[35:38, 1:].all()
