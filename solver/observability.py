"""What the markers of a frame cannot tell, and how well they tell the rest.

The normal matrix, scaled to a unit diagonal, has a null space where some combination of freedoms
moves no marker. Covariance is (J'WJ + prior)^-1 of what remains.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.solver.many_matrices import inverse_traces, inverses, unit_diagonal

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

NULL_SHARE = 1e-10
"""Pivots of the unit-diagonal matrix below this are rounding: an sd 100 000 times what one alone has."""
LEAST_INFORMATION = 1e-12
"""Information of a freedom, over the largest of its frame, below which it is rounding: moments about the
laboratory's origin cancel to about 1e-16 of themselves, and a person may stand 10 m from it."""
SAFE_SHARE = 1e-2
"""Share of 1 / NULL_SHARE below which the trace of an inverse is far from that of a singular matrix."""
PARTICIPATION = 1e-6
"""Squared share of a freedom in the null space above which it counts as undetermined."""


def _usable(H: FloatArray, free: BoolArray) -> BoolArray:
    """Free freedoms that move anything at all, beyond rounding."""
    diagonal = np.einsum("nii->ni", H)
    return np.asarray(free & (diagonal > LEAST_INFORMATION * diagonal.max(axis=1, keepdims=True)))


def dependent_pivots(H: FloatArray, free: BoolArray) -> BoolArray:
    """Freedoms that a pivoted Cholesky factorisation finds no independent information for.

    Parameters
    ----------
    H : (frames, n, n) positive semidefinite
    free : (frames, n) bool
        The others are left out.

    Returns
    -------
    (frames, n) bool
        Pinning these makes the rest determined.
    """
    usable = _usable(H, free)
    unit, _ = unit_diagonal(H, usable)
    frames, size = free.shape
    left = np.ones((frames, size))
    remaining = np.ones((frames, size), dtype=bool)
    factor = np.zeros((frames, size, size))
    every = np.arange(frames)
    for step in range(size):
        pivot = np.where(remaining, left, -1.0).argmax(axis=1)
        value = left[every, pivot]
        sound = value > NULL_SHARE
        root = np.sqrt(np.where(sound, value, 1.0))
        row = unit[every, pivot] - np.einsum("ns,nsk->nk", factor[every, :, pivot], factor)
        row = np.where(sound[:, None] & remaining, row / root[:, None], 0.0)
        factor[:, step] = row
        left = left - row**2
        remaining[every[sound], pivot[sound]] = False
        if not sound.any():
            break
    return np.asarray(free & (remaining | ~usable))


def _surely_determined(H: FloatArray, usable: BoolArray) -> BoolArray:
    """(frames,) Whether no pivot can be near `NULL_SHARE`.

    Every pivot, in any order, is at least the smallest eigenvalue, and that at least one over the
    trace of the inverse.
    """
    trace = inverse_traces(H, usable)
    return np.asarray((trace > 0) & (trace < SAFE_SHARE / NULL_SHARE))


def undetermined(H: FloatArray, free: BoolArray) -> tuple[BoolArray, BoolArray]:
    """What cannot be told.

    Returns
    -------
    pins : (frames, n) bool
        Freedoms to pin so that the rest is determined.
    involved : (frames, n) bool
        Every freedom that takes part in an undetermined combination.
    """
    usable = _usable(H, free)
    pins = np.asarray(free & ~usable)
    doubtful = np.flatnonzero(~_surely_determined(H, usable))
    pins[doubtful] = dependent_pivots(H[doubtful], free[doubtful])
    involved = pins.copy()
    rows = np.flatnonzero(pins.any(axis=1))
    if len(rows):
        unit, scale = unit_diagonal(H[rows], _usable(H[rows], free[rows]))
        values, vectors = np.linalg.eigh(unit)
        null = values[:, None, :] < NULL_SHARE * 10
        share = (np.where(null, vectors, 0.0) ** 2).sum(axis=2)
        involved[rows] |= (share > PARTICIPATION) & (scale > 0)
    return pins, involved


def covariance(H: FloatArray, free: BoolArray) -> FloatArray:
    """(frames, n, n) Inverse of H over the free freedoms; 0 in the rows of all others.

    H must be positive definite over the free ones.
    """
    return inverses(H, free & (np.einsum("nii->ni", H) > 0))
