"""What the markers of a frame cannot tell, and how well they tell the rest.

The normal matrix, scaled to a unit diagonal, has a null space where some combination of freedoms
moves no marker. Covariance is (J'WJ + prior)^-1 of what remains.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

NULL_SHARE = 1e-10
"""Pivots of the unit-diagonal matrix below this are rounding: an sd 100 000 times what one alone has."""
LEAST_INFORMATION = 1e-12
"""Information of a freedom, over the largest of its frame, below which it is rounding: moments about the
laboratory's origin cancel to about 1e-16 of themselves, and a person may stand 10 m from it."""
PARTICIPATION = 1e-6
"""Squared share of a freedom in the null space above which it counts as undetermined."""


def _usable(H: FloatArray, free: BoolArray) -> BoolArray:
    """Free freedoms that move anything at all, beyond rounding."""
    diagonal = np.einsum("nii->ni", H)
    return np.asarray(free & (diagonal > LEAST_INFORMATION * diagonal.max(axis=1, keepdims=True)))


def _unit_diagonal(H: FloatArray, free: BoolArray) -> tuple[FloatArray, FloatArray]:
    diagonal = np.einsum("nii->ni", H)
    usable = free & (diagonal > 0)
    scale = np.where(usable, 1 / np.sqrt(np.where(usable, diagonal, 1.0)), 0.0)
    unit = H * scale[:, :, None] * scale[:, None, :]
    index = np.arange(H.shape[1])
    unit[:, index, index] = 1.0
    return unit, scale


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
    unit, _ = _unit_diagonal(H, usable)
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


def undetermined(H: FloatArray, free: BoolArray) -> tuple[BoolArray, BoolArray]:
    """What cannot be told.

    Returns
    -------
    pins : (frames, n) bool
        Freedoms to pin so that the rest is determined.
    involved : (frames, n) bool
        Every freedom that takes part in an undetermined combination.
    """
    pins = dependent_pivots(H, free)
    involved = pins.copy()
    rows = np.flatnonzero(pins.any(axis=1))
    if len(rows):
        unit, scale = _unit_diagonal(H[rows], _usable(H[rows], free[rows]))
        values, vectors = np.linalg.eigh(unit)
        null = values[:, None, :] < NULL_SHARE * 10
        share = (np.where(null, vectors, 0.0) ** 2).sum(axis=2)
        involved[rows] |= (share > PARTICIPATION) & (scale > 0)
    return pins, involved


def covariance(H: FloatArray, free: BoolArray) -> FloatArray:
    """(frames, n, n) Inverse of H over the free freedoms; 0 in the rows of all others.

    H must be positive definite over the free ones.
    """
    unit, scale = _unit_diagonal(H, free)
    inverse = np.linalg.inv(unit)
    return np.asarray(inverse * scale[:, :, None] * scale[:, None, :])
