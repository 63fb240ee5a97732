"""Orientations told as three angles, and how well each angle is known.

Closed forms of three intrinsic turns; the branch is the language's: with first and third axis alike
the middle angle as reported lies in [0, 180] degrees, else in [-90, 90]. Where a sequence is
singular only the sum or the difference of first and third is determined: the one that belongs to
the singularity a series comes nearest to is reported too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import AngleReport

FloatArray = NDArray[np.float64]

SINGULAR_SINE = 1e-7
"""Closer to a singularity than this the rates of first and third angle are taken at this distance."""


@dataclass(frozen=True, slots=True)
class ReportedAngles:
    """Three angles and the combination that stays determined.

    Attributes
    ----------
    values : (frames, 4) rad
        First, middle, third, then the sum; first, third and sum unwrapped along time.
    rates : (frames, 4, 3)
        Their derivative for a small rotation vector in the child's axes (R Exp(d)).
    """

    values: FloatArray
    rates: FloatArray


def report_angles(rotation: FloatArray, report: AngleReport) -> ReportedAngles:
    """The reported angles of a series of rotations.

    Parameters
    ----------
    rotation : (frames, 3, 3)
        Child in the joint's frame.
    report : AngleReport
    """
    raw = (
        _proper(rotation, report)
        if report.axes[0] == report.axes[2]
        else _cardan(rotation, report.axes)
    )
    first, middle, third, total, sense = raw
    signs = np.array(report.signs, dtype=float)
    rates = _rates(report.axes, middle, third)
    combined = rates[:, 0] + sense[:, None] * rates[:, 2]
    values = np.column_stack([first, middle, third, total]) * np.append(signs, signs[0])
    rates = np.concatenate([rates, combined[:, None]], axis=1)
    rates *= np.append(signs, signs[0])[None, :, None]
    return ReportedAngles(_unwrapped(values), rates)


def _nearer(sine: FloatArray) -> bool:
    """Whether a series comes nearer to the singularity at +1 than to the one at -1.

    One answer for the whole series, so that the sum does not jump where neither is near.
    """
    return bool(np.nanmax(sine, initial=-1.0) >= -np.nanmin(sine, initial=1.0))


def _parity(i: int, j: int, k: int) -> int:
    return 1 if (j - i) % 3 == 1 and (k - j) % 3 == 1 else -1


def _cardan(
    R: FloatArray, axes: tuple[int, int, int]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Three different axes: R = R_i(a) R_j(b) R_k(c), b in [-90, 90] degrees."""
    i, j, k = axes
    e = _parity(i, j, k)
    middle = np.arcsin(np.clip(e * R[:, i, k], -1, 1))
    first = np.arctan2(-e * R[:, j, k], R[:, k, k])
    third = np.arctan2(-e * R[:, i, j], R[:, i, i])
    up = np.full(len(R), _nearer(e * np.sin(middle)))
    plus = np.arctan2(e * (R[:, k, j] + R[:, j, i]), R[:, j, j] - R[:, k, i])
    minus = np.arctan2(e * (R[:, k, j] - R[:, j, i]), R[:, j, j] + R[:, k, i])
    sense = np.where(up, 1.0, -1.0)
    total = np.where(up, plus, minus)
    gone = np.hypot(R[:, i, i], R[:, i, j]) < SINGULAR_SINE
    first, third = np.where(gone, total, first), np.where(gone, 0.0, third)
    return first, middle, third, total, sense


def _proper(
    R: FloatArray, report: AngleReport
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """First and third axis alike: R = R_i(a) R_j(b) R_i(c), sign(b) as reported."""
    i, j, _ = report.axes
    k = 3 - i - j
    e = _parity(i, j, k)
    s = report.signs[1]
    cosine = np.clip(R[:, i, i], -1, 1)
    sine = np.hypot(R[:, i, j], R[:, i, k])
    middle = s * np.arctan2(sine, cosine)
    first = np.arctan2(s * R[:, j, i], -e * s * R[:, k, i])
    third = np.arctan2(s * R[:, i, j], e * s * R[:, i, k])
    near = np.full(len(R), _nearer(cosine))
    plus = np.arctan2(e * (R[:, k, j] - R[:, j, k]), R[:, j, j] + R[:, k, k])
    minus = np.arctan2(e * (R[:, k, j] + R[:, j, k]), R[:, j, j] - R[:, k, k])
    sense = np.where(near, 1.0, -1.0)
    total = np.where(near, plus, minus)
    gone = sine < SINGULAR_SINE
    first, third = np.where(gone, total, first), np.where(gone, 0.0, third)
    return first, middle, third, total, sense


def _rates(axes: tuple[int, int, int], middle: FloatArray, third: FloatArray) -> FloatArray:
    """(frames, 3, 3) d(first, middle, third) / d(rotation vector in the child's axes).

    The child's angular velocity is the sum of the three turns' own, each carried into the child:
    w = c' e_k + b' R_k(c)' e_j + a' (R_j(b) R_k(c))' e_i.
    """
    i, j, k = axes
    if i == k:
        sine = np.sin(middle)
        away = np.where(sine < 0, -SINGULAR_SINE, SINGULAR_SINE)
        middle = np.where(np.abs(sine) < SINGULAR_SINE, middle + away, middle)
    else:
        flat = np.abs(np.cos(middle)) < SINGULAR_SINE
        middle = np.where(flat, middle - np.sign(middle) * SINGULAR_SINE, middle)
    back_third, back_middle = _turn(k, -third), _turn(j, -middle)
    columns = np.stack(
        [
            back_third @ back_middle @ np.eye(3)[i],
            back_third @ np.eye(3)[j],
            np.broadcast_to(np.eye(3)[k], (len(middle), 3)),
        ],
        axis=2,
    )
    return np.asarray(np.linalg.inv(columns))


def _turn(axis: int, angle: FloatArray) -> FloatArray:
    R = np.zeros((len(angle), 3, 3))
    j, k = (axis + 1) % 3, (axis + 2) % 3
    R[:, axis, axis] = 1.0
    R[:, j, j] = R[:, k, k] = np.cos(angle)
    R[:, k, j] = np.sin(angle)
    R[:, j, k] = -R[:, k, j]
    return R


def _unwrapped(values: FloatArray) -> FloatArray:
    """First, third and sum without jumps of a full turn; NaN stays where it is."""
    values = values.copy()
    for column in (0, 2, 3):
        known = np.isfinite(values[:, column])
        values[known, column] = np.unwrap(values[known, column])
    return values
