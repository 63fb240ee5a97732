"""Minima of many functions at once, against scipy's bounded search of each."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from condyle.solver.bounded_search import least_between

FloatArray = NDArray[np.float64]
CENTRES = np.array([-1.7, 0.0, 0.4, 2.2, 5.0, -9.0])


def bowls(x: FloatArray) -> FloatArray:
    """Lopsided, each with its minimum at its own place."""
    away = x - CENTRES
    return np.asarray(np.exp(away) - away + 0.1 * away**4)


@pytest.mark.parametrize("tolerance", [1e-6, 0.05])
def test_each_takes_the_steps_that_scipy_takes(tolerance: float) -> None:
    low, high = np.full(6, -3.0), np.full(6, 3.0)
    place, value = least_between(bowls, low, high, tolerance=tolerance)
    for i in range(6):
        peer = minimize_scalar(
            lambda x, i=i: float(bowls(np.full(6, x))[i]),
            bounds=(-3.0, 3.0),
            method="bounded",
            options={"xatol": tolerance},
        )
        assert place[i] == pytest.approx(peer.x, rel=1e-9, abs=1e-9)
        assert value[i] == pytest.approx(peer.fun, rel=1e-12)
    inside = np.abs(CENTRES) < 3
    np.testing.assert_allclose(place[inside], CENTRES[inside], atol=tolerance)
    np.testing.assert_allclose(place[~inside], [3.0, -3.0], atol=tolerance)


def test_a_function_that_is_endless_in_places_is_searched_where_it_is_not() -> None:
    def walled(x: FloatArray) -> FloatArray:
        return np.where(x > 2.0, np.inf, (x - 0.3) ** 2)

    place, _ = least_between(walled, np.zeros(1), np.full(1, 5.0), tolerance=1e-5)
    assert place[0] == pytest.approx(0.3, abs=1e-4)
