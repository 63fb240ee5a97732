"""The least value of many functions of one number, each within its own bounds, searched for together.

Brent 1973, Algorithms for Minimization without Derivatives, ch. 5: a parabola through the three best
places where it can be trusted, else a step of the golden section into the longer part. All functions
take their steps at once, so that evaluating them may be done for all at once.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

GOLDEN = (3 - np.sqrt(5)) / 2
MOST_STEPS = 100
ROOT_EPSILON = float(np.sqrt(np.finfo(float).eps))


def least_between(
    function: Callable[[FloatArray], FloatArray],
    low: FloatArray,
    high: FloatArray,
    *,
    tolerance: float,
) -> tuple[FloatArray, FloatArray]:
    """Places (m,) of the least values, and these, of m functions.

    Parameters
    ----------
    function : callable
        (m,) numbers to (m,) values.
    low, high : (m,)
    tolerance : float
        How far from a minimum, about, the search may end.
    """
    a, b = low.astype(np.float64), high.astype(np.float64)
    x = w = v = a + GOLDEN * (b - a)
    of_x = of_w = of_v = function(x)
    step = before = np.zeros_like(x)
    for _ in range(MOST_STEPS):
        middle = (a + b) / 2
        least = ROOT_EPSILON * np.abs(x) + tolerance / 3
        done = np.abs(x - middle) <= 2 * least - (b - a) / 2
        if done.all():
            break
        parabolic, to = _parabola(x, w, v, of_x, of_w, of_v)
        parabolic &= (np.abs(before) > least) & (np.abs(to) < np.abs(before / 2))
        parabolic &= (x + to > a) & (x + to < b)
        at_edge = (x + to - a < 2 * least) | (b - x - to < 2 * least)
        to = np.where(at_edge, np.where(middle >= x, least, -least), to)
        longer = np.where(x >= middle, a - x, b - x)
        before = np.where(parabolic, step, longer)
        step = np.where(parabolic, to, GOLDEN * longer)
        u = x + np.where(step < 0, -1, 1) * np.maximum(np.abs(step), least)
        u = np.where(done, x, u)
        of_u = function(u)
        better = of_u <= of_x
        right = u >= x
        moved = ~done
        a = np.where(moved & (better == right), np.where(better, x, u), a)
        b = np.where(moved & (better != right), np.where(better, x, u), b)
        second = ~better & ((of_u <= of_w) | (w == x))
        third = ~better & ~second & ((of_u <= of_v) | (v == x) | (v == w))
        shift = moved & (better | second)
        v, of_v = np.where(shift, w, v), np.where(shift, of_w, of_v)
        v, of_v = np.where(moved & third, u, v), np.where(moved & third, of_u, of_v)
        w, of_w = np.where(moved & second, u, w), np.where(moved & second, of_u, of_w)
        w, of_w = np.where(moved & better, x, w), np.where(moved & better, of_x, of_w)
        x, of_x = np.where(moved & better, u, x), np.where(moved & better, of_u, of_x)
    return x, of_x


def _parabola(
    x: FloatArray,
    w: FloatArray,
    v: FloatArray,
    of_x: FloatArray,
    of_w: FloatArray,
    of_v: FloatArray,
) -> tuple[NDArray[np.bool_], FloatArray]:
    """Whether three places have a parabola, and how far from x its vertex lies."""
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        r, q = (x - w) * (of_x - of_v), (x - v) * (of_x - of_w)
        to = ((x - w) * r - (x - v) * q) / (2 * (q - r))
    sound = np.isfinite(to)
    return sound, np.where(sound, to, 0.0)
