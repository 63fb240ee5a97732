"""How far a process knows its way: against a dense system, and where gaps stop being bridged."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.solver.gap_bridging import _relative_variance, bridged


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
