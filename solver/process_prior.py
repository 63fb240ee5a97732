"""How a person moves from frame to frame: what a trial's estimate expects before it sees markers.

The difference of order p of each freedom is white noise (p = 3: white jerk, p = 4: white snap),

    prior cost = sum over k, d of  r_d |(D^p q)_kd|^2 / 2,

the discrete form of an integrated Wiener process (Wahba 1978, J R Stat Soc B 40:364; second order
would leave the acceleration without a finite variance). Orientations are differenced on the
manifold, in the chart of the middle frame of each window: sum_i c_i log(R_m' R_i).

A freedom with a `rest_sd` is mean-reverting: with a pull r L |q - rest|^2 / 2 in every frame the
process has the spectrum (1/r) / (|1 - e^iw|^2p + L), whose stationary variance is `rest_sd`^2 for the
L of :func:`mean_reversion`.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import comb

import numpy as np
from numpy.typing import NDArray

from condyle.solver.posture import Posture, inverse_right_jacobian, turn_between

FloatArray = NDArray[np.float64]


def difference_weights(order: int) -> FloatArray:
    """(order + 1,) Coefficients of a forward difference, oldest frame first."""
    return np.array([(-1.0) ** (order - i) * comb(order, i) for i in range(order + 1)])


def mean_reversion(stationary_sd: FloatArray, density: FloatArray, order: int) -> FloatArray:
    """The pull L beside r that gives a process its stationary sd.

    Parameters
    ----------
    stationary_sd : (n,) rad or m
    density : (n,) 1/rad^2 or 1/m^2
        The precision of the difference of order p in true units.
    order : int

    Notes
    -----
    The integral of dw / 2pi / (w^2p + L) over all w is L^(1/2p - 1) / (2p sin(pi / 2p)), which is
    the discrete one where the process is slow against the frame rate.
    """
    twice = 2 * order
    base = 1 / (density * stationary_sd**2 * twice * np.sin(np.pi / twice))
    return np.asarray(base ** (twice / (twice - 1)))


@dataclass(frozen=True, slots=True)
class ProcessPrior:
    """White differences of one order, weighted by freedom.

    Attributes
    ----------
    order : int
    ratio : (freedoms,)
        r above: the precision of a difference in the units of the frames' own cost.
    linked : (frames - order, freedoms) bool
        False where a window holds a frame in which the freedom is not estimated.
    """

    order: int
    ratio: FloatArray
    linked: NDArray[np.bool_]

    def residuals(self, posture: Posture) -> tuple[FloatArray, FloatArray]:
        """Differences, and their derivatives for the balls.

        Returns
        -------
        differences : (windows, freedoms)
        turns : (order + 1, windows, balls, 3, 3)
            Derivative of a ball's difference for a small turn of each frame of its window.
        """
        c, order = difference_weights(self.order), self.order
        windows = len(posture) - order
        scalars = np.diff(posture.scalars, order, axis=0)
        balls = posture.quaternions.shape[1]
        turns = np.zeros((order + 1, windows, balls, 3, 3))
        differences = np.zeros((windows, balls, 3))
        frames = [posture.quaternions[i : i + windows] for i in range(order + 1)]
        middle = order // 2
        for i, frame in enumerate(frames if balls else []):
            if i == middle:
                continue
            away = turn_between(frames[middle], frame)
            differences += c[i] * away
            turns[i] = c[i] * inverse_right_jacobian(away)
            # Jr^-1(-a) is the transpose of Jr^-1(a).
            turns[middle] -= np.swapaxes(turns[i], -1, -2)
        flat = differences.reshape(windows, -1)
        return np.concatenate([scalars, flat], axis=1), turns

    def weights(self) -> FloatArray:
        """(windows, freedoms) Precision of each difference; 0 where unlinked."""
        return np.where(self.linked, self.ratio, 0.0)

    def cost(self, posture: Posture) -> FloatArray:
        """(windows,) r |D^p q|^2 / 2."""
        differences, _ = self.residuals(posture)
        return np.asarray((self.weights() * differences**2).sum(axis=1) / 2)

    def force(self, differences: FloatArray, turns: FloatArray) -> FloatArray:
        """(frames, freedoms) Minus the gradient of the prior cost."""
        pushed = self.weights() * differences
        windows, size = pushed.shape
        count = size - 3 * turns.shape[2]
        force = np.zeros((windows + self.order, size))
        of_balls = pushed[:, count:].reshape(windows, -1, 3)
        for i, c in enumerate(difference_weights(self.order)):
            force[i : i + windows, :count] -= c * pushed[:, :count]
            turned = np.einsum("nbij,nbi->nbj", turns[i], of_balls)
            force[i : i + windows, count:] -= turned.reshape(windows, -1)
        return force

    def times(self, x: FloatArray, turns: FloatArray) -> FloatArray:
        """J'J x (frames, freedoms), weighted."""
        windows, balls = turns.shape[1:3]
        count = x.shape[1] - 3 * balls
        moved = np.zeros((windows, x.shape[1]))
        for i, c in enumerate(difference_weights(self.order)):
            part = x[i : i + windows]
            moved[:, :count] += c * part[:, :count]
            of_balls = part[:, count:].reshape(windows, balls, 3)
            turned = np.einsum("nbij,nbj->nbi", turns[i], of_balls)
            moved[:, count:] += turned.reshape(windows, -1)
        return -self.force(moved, turns)

    def diagonal(self, turns: FloatArray) -> FloatArray:
        """(frames, freedoms) Of J'J, weighted."""
        weights = self.weights()
        windows, size = weights.shape
        count = size - 3 * turns.shape[2]
        found = np.zeros((windows + self.order, size))
        of_balls = weights[:, count:].reshape(windows, -1, 3)
        for i, c in enumerate(difference_weights(self.order)):
            found[i : i + windows, :count] += c**2 * weights[:, :count]
            turned = np.einsum("nbij,nbi->nbj", turns[i] ** 2, of_balls)
            found[i : i + windows, count:] += turned.reshape(windows, -1)
        return found

    def add_to_band(self, band: FloatArray, turns: FloatArray) -> None:
        """Add J'J to a lower band of (frames x freedoms) rows; see `block_banded`."""
        weights = self.weights()
        windows, size = weights.shape
        balls = turns.shape[2]
        count = size - 3 * balls
        c = difference_weights(self.order)
        for later in range(self.order + 1):
            for earlier in range(later + 1):
                apart = (later - earlier) * size
                columns = slice(earlier * size, (earlier + windows) * size)
                view = band[apart, columns].reshape(windows, size)
                view[:, :count] += c[later] * c[earlier] * weights[:, :count]
                for ball in range(balls):
                    first = count + 3 * ball
                    block = np.einsum(
                        "nki,nk,nkj->nij",
                        turns[later, :, ball],
                        weights[:, first : first + 3],
                        turns[earlier, :, ball],
                    )
                    _add_block(band, block, apart, earlier * size + first, size)


def _add_block(
    band: FloatArray, block: FloatArray, apart: int, first_column: int, stride: int
) -> None:
    """Add 3x3 blocks whose top left entries lie `apart` below the diagonal, one every `stride`."""
    windows = len(block)
    for row in range(3):
        for column in range(3):
            below = apart + row - column
            if below < 0:
                continue
            start = first_column + column
            band[below, start : start + (windows - 1) * stride + 1 : stride] += block[
                :, row, column
            ]
