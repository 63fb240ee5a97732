"""Postures told in the words of the model: every coordinate, every angle, each with its sd.

The covariance of a step goes through the derivative of each reported number; nothing is sampled.
"""

from __future__ import annotations

from dataclasses import dataclass

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import (
    AngleReport,
    Coordinate,
    Floating,
    Joint,
    Move,
    Moves,
    Skeleton,
    Spherical,
)
from condyle.solver.frame_fit import FrameFits
from condyle.solver.joint_angles import report_angles
from condyle.solver.over_frames import Replay
from condyle.solver.posture import Posture, rotations
from condyle.solver.results import Column

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Reported:
    """Columns of a trial; see `results.TrialFit` for their meaning.

    Attributes
    ----------
    columns : Columns
    values, sd : (frames, columns) rad or m
    at_limit : (frames, columns) bool
    involved : (frames, columns) bool
        Whether an undetermined freedom enters the number.
    """

    columns: tuple[Column, ...]
    values: FloatArray
    sd: FloatArray
    at_limit: BoolArray
    involved: BoolArray


@dataclass(frozen=True, slots=True)
class _Piece:
    """Some columns with their values and their derivatives for a step (frames, columns, n)."""

    columns: list[Column]
    values: FloatArray
    rates: FloatArray


def report(kinematics: Kinematics, fits: FrameFits) -> Reported:
    """Everything the model names, in the order of its joints."""
    pieces = _pieces(kinematics, fits.posture)
    columns = tuple(column for piece in pieces for column in piece.columns)
    frames, size = fits.involved.shape
    values = np.concatenate([np.zeros((frames, 0)), *[piece.values for piece in pieces]], axis=1)
    rates = np.concatenate(
        [np.zeros((frames, 0, size)), *[piece.rates for piece in pieces]], axis=1
    )
    moved = rates != 0
    variance = np.einsum("nci,nij,ncj->nc", rates, fits.covariance, rates, optimize=True)
    involved = (moved & fits.involved[:, None, :]).any(axis=2)
    sd = np.where(involved, np.nan, np.sqrt(np.maximum(variance, 0.0)))
    ranged = np.array([column.has_range for column in columns], dtype=bool)
    at_limit = (moved & fits.at_limit[:, None, :]).any(axis=2) & ranged
    return Reported(columns, values, sd, at_limit, involved)


def reported_values(
    kinematics: Kinematics, posture: Posture
) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Name -> value (frames,) and derivative for a step (frames, freedoms)."""
    found = {}
    for piece in _pieces(kinematics, posture):
        for i, column in enumerate(piece.columns):
            found[column.name] = (piece.values[:, i], piece.rates[:, i])
    return found


def _pieces(kinematics: Kinematics, posture: Posture) -> list[_Piece]:
    skeleton = kinematics.skeleton
    values, rates = _coordinates(kinematics, posture)
    position = {c.name: i for i, c in enumerate(skeleton.coordinates)}
    pieces = []
    for joint in skeleton.joints:
        names = [name for name in _names(joint) if name in position]
        if names:
            rows = [position.pop(name) for name in names]
            columns = [_column(skeleton, skeleton.coordinates[row], joint) for row in rows]
            pieces.append(_Piece(columns, values[:, rows], rates[:, rows]))
        if isinstance(joint.motion, Floating | Spherical):
            pieces.append(_angles(kinematics, posture, joint, joint.motion.angles))
    return pieces


def _names(joint: Joint) -> list[str]:
    if isinstance(joint.motion, Floating):
        return list(joint.motion.position)
    if isinstance(joint.motion, Moves):
        return [move.coordinate for move in joint.motion.moves if move.coordinate is not None]
    return []


def _coordinates(kinematics: Kinematics, posture: Posture) -> tuple[FloatArray, FloatArray]:
    """Values (frames, coordinates) and derivatives (frames, coordinates, freedoms)."""
    expression = kinematics.coordinate_values
    jacobian = ca.densify(ca.jacobian(expression, kinematics.scalars))
    count, scalars = expression.numel(), len(kinematics.freedoms.scalars)
    frames = len(posture)
    rates = np.zeros((frames, count, kinematics.freedoms.size))
    if not count:
        return np.zeros((frames, 0)), rates
    function = ca.Function(
        "coordinates", [kinematics.scalars], [ca.densify(expression), ca.vec(jacobian.T)]
    )
    values, flat = Replay(function)(posture.scalars)
    rates[:, :, :scalars] = flat.reshape(frames, count, scalars)
    return values, rates


def _angles(kinematics: Kinematics, posture: Posture, joint: Joint, angles: AngleReport) -> _Piece:
    ball = kinematics.freedoms.balls.index(joint.name)
    rotation = rotations(posture.quaternions[:, ball]).as_matrix()
    found = report_angles(rotation, angles)
    rates = np.zeros((len(posture), 4, kinematics.freedoms.size))
    rates[:, :, kinematics.freedoms.ball_slice(ball)] = found.rates
    axes = "xyz"
    motion = joint.motion
    limited = isinstance(motion, Spherical) and (motion.cone, motion.twist) != (None, None)
    columns = [
        Column(
            name,
            "rad",
            f"{order} of three intrinsic turns of {joint.child}, about "
            f"{'-' if sign < 0 else ''}{axes[axis]}, at joint {joint.name}",
            has_range=limited,
        )
        for order, name, axis, sign in zip(
            ("first", "second", "third"), angles.names, angles.axes, angles.signs, strict=True
        )
    ]
    columns.append(
        Column(
            angles.sum_name,
            "rad",
            f"the combination of {angles.names[0]} and {angles.names[2]} that stays determined "
            "where their sequence is singular",
            has_range=False,
        )
    )
    return _Piece(columns, found.values, rates)


def _column(skeleton: Skeleton, coordinate: Coordinate, joint: Joint) -> Column:
    if isinstance(joint.motion, Floating):
        axis = "XYZ"[joint.motion.position.index(coordinate.name)]
        meaning = f"position of {joint.child} along laboratory {axis}"
    else:
        move = _first_move(joint, coordinate.name)
        verb = "turns about" if move.kind == "rotate" else "shifts along"
        meaning = f"{joint.child} {verb} {_axis_text(move)} at joint {joint.name}"
    if coordinate.follows is not None:
        meaning += f", following {coordinate.follows}"
    if coordinate.held is not None:
        meaning += ", held"
    return Column(coordinate.name, coordinate.unit, meaning, coordinate.has_range)


def _first_move(joint: Joint, name: str) -> Move:
    if not isinstance(joint.motion, Moves):
        raise TypeError(f"{joint.name} has no moves")
    return next(move for move in joint.motion.moves if move.coordinate == name)


def _axis_text(move: Move) -> str:
    for axis, letter in enumerate("xyz"):
        if abs(abs(move.axis[axis]) - 1) < 1e-12:
            return f"{'-' if move.axis[axis] < 0 else ''}{letter}"
    return "({:.3f}, {:.3f}, {:.3f})".format(*move.axis)
