"""Where a fit stands: scalar coordinates and orientations of many frames, and how a step moves them.

Orientations are unit quaternions and a step turns them by a small rotation vector in the child's
own axes, so nothing here is ever singular.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

FloatArray = NDArray[np.float64]

SMALL_SINE = 1e-9
"""Of half a turn: below it, sine and angle are one to rounding."""


@dataclass(frozen=True, slots=True)
class Posture:
    """The freedoms of many frames.

    Attributes
    ----------
    scalars : (frames, scalars) rad or m
    quaternions : (frames, balls, 4)
        Unit, scalar first: child in the joint's frame.
    """

    scalars: FloatArray
    quaternions: FloatArray

    def __len__(self) -> int:
        return len(self.scalars)

    def take(self, rows: NDArray[np.int64]) -> Posture:
        """The postures of some frames."""
        return Posture(self.scalars[rows], self.quaternions[rows])

    def replaced(self, rows: NDArray[np.int64], other: Posture) -> Posture:
        """A copy in which some frames are taken from `other`."""
        scalars, quaternions = self.scalars.copy(), self.quaternions.copy()
        scalars[rows], quaternions[rows] = other.scalars, other.quaternions
        return Posture(scalars, quaternions)

    def after(self, step: FloatArray) -> Posture:
        """The posture after a step (frames, scalars + 3 balls): x + dx and R Exp(dr)."""
        count = self.scalars.shape[1]
        scalars = self.scalars + step[:, :count]
        balls = self.quaternions.shape[1]
        if not balls:
            return Posture(scalars, self.quaternions)
        return Posture(scalars, turned(self.quaternions, step[:, count:].reshape(-1, balls, 3)))


def turned(quaternions: FloatArray, vectors: FloatArray) -> FloatArray:
    """(..., 4) Unit quaternions after small turns (..., 3) in the child's axes: q exp(d / 2)."""
    half = vectors / 2
    angle = np.sqrt((half * half).sum(axis=-1))
    part = np.sinc(angle / np.pi)
    w, x, y, z = np.moveaxis(quaternions, -1, 0)
    c, (a, b, d) = np.cos(angle), np.moveaxis(half * part[..., None], -1, 0)
    after = np.stack(
        [
            w * c - x * a - y * b - z * d,
            w * a + x * c + y * d - z * b,
            w * b - x * d + y * c + z * a,
            w * d + x * b - y * a + z * c,
        ],
        axis=-1,
    )
    return np.asarray(after / np.sqrt((after * after).sum(axis=-1))[..., None])


def rotations(quaternions: FloatArray) -> Rotation:
    """A stack of rotations from (n, 4) quaternions, scalar first."""
    return Rotation.from_quat(quaternions, scalar_first=True)


def quaternions_of(stack: Rotation) -> FloatArray:
    """(n, 4) unit quaternions, scalar first."""
    return np.asarray(stack.as_quat(scalar_first=True), dtype=np.float64)


def continuous(quaternions: FloatArray) -> FloatArray:
    """(frames, ..., 4) The same orientations, each in the sign that lies nearer to the one before."""
    nearer = (quaternions[1:] * quaternions[:-1]).sum(axis=-1, keepdims=True) >= 0
    first = np.ones((1, *quaternions.shape[1:-1], 1))
    turns = np.concatenate([first, np.where(nearer, 1.0, -1.0)])
    return np.asarray(quaternions * np.cumprod(turns, axis=0))


def held_over(quaternions: FloatArray, known: NDArray[np.bool_]) -> FloatArray:
    """(frames, 4) The same orientations, where one is not known the last that is (or the first)."""
    last = np.maximum.accumulate(np.where(known, np.arange(len(known)), -1))
    return quaternions[np.where(last < 0, int(np.argmax(known)), last)]


def upright_posture(scalars: FloatArray, balls: int, frames: int) -> Posture:
    """`frames` copies of one posture whose orientations are all identity."""
    identity = np.tile([1.0, 0.0, 0.0, 0.0], (frames, balls, 1))
    return Posture(np.tile(scalars, (frames, 1)), identity)


def turn_between(one: FloatArray, other: FloatArray) -> FloatArray:
    """(..., 3) log(R_one' R_other) of unit quaternions (..., 4): the turn in the first one's child axes."""
    w, v = one[..., :1], one[..., 1:]
    there_w, there_v = other[..., :1], other[..., 1:]
    across = np.stack(
        [
            v[..., 1] * there_v[..., 2] - v[..., 2] * there_v[..., 1],
            v[..., 2] * there_v[..., 0] - v[..., 0] * there_v[..., 2],
            v[..., 0] * there_v[..., 1] - v[..., 1] * there_v[..., 0],
        ],
        axis=-1,
    )
    cosine = w[..., 0] * there_w[..., 0] + (v * there_v).sum(axis=-1)
    along = w * there_v - there_w * v - across
    sine = np.sqrt((along * along).sum(axis=-1))
    # A quaternion and its negative are one rotation; the one with w >= 0 turns by half a turn at most.
    angle = 2 * np.arctan2(sine, np.abs(cosine))
    factor = np.where(sine > SMALL_SINE, angle / np.maximum(sine, SMALL_SINE), 2.0)
    return np.asarray(along * (np.where(cosine < 0, -factor, factor))[..., None])


def inverse_right_jacobian(vectors: FloatArray) -> FloatArray:
    """(..., 3, 3) d log(R Exp(d)) / d d at d = 0, for rotation vectors log R (..., 3).

    Chirikjian 2011, Stochastic Models, Information Theory, and Lie Groups, vol. 2, eq. 10.86:
    I + K/2 + (1/t^2 - (1 + cos t) / (2 t sin t)) K^2 with K the cross matrix and t the angle.
    """
    squared = (vectors * vectors).sum(axis=-1)
    angle = np.maximum(np.sqrt(squared), 1e-12)
    series = 1 / 12 + squared / 720
    exact = (1 - angle / 2 / np.tan(angle / 2)) / angle**2
    coefficient = np.where(angle < 1e-3, series, exact)
    x, y, z = np.moveaxis(vectors, -1, 0)
    # K^2 = v v' - t^2 I
    J = coefficient[..., None, None] * (vectors[..., :, None] * vectors[..., None, :])
    level = 1 - coefficient * squared
    for i in range(3):
        J[..., i, i] += level
    for i, j, half in ((1, 0, z / 2), (2, 1, x / 2), (0, 2, y / 2)):
        J[..., i, j] += half
        J[..., j, i] -= half
    return np.asarray(J)
