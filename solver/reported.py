"""Postures told in the words of the model: every coordinate, every angle, each with its sd.

The covariance of a step goes through the derivative of each reported number; nothing is sampled.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

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
from condyle.solver.covariances import Covariances
from condyle.solver.frame_fit import FrameFits
from condyle.solver.joint_angles import report_angles
from condyle.solver.over_frames import over_frames
from condyle.solver.posture import Posture, rotations
from condyle.solver.results import Column, DoubtShares
from condyle.solver.time_derivatives import derivatives, whole_windows
from condyle.solver.trial_estimate import TrialEstimate

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

NEAR_SINGULAR = np.radians(5.0)
"""Closer to the singularity of a reported sequence than this, its angles have no rate worth telling."""
FRAMES_AT_ONCE = 512
"""Whose whole matrices are in memory together."""


@dataclass(frozen=True, slots=True)
class Piece:
    """Some columns with their values, and their derivatives (frames, columns, m) for m freedoms."""

    columns: list[Column]
    values: FloatArray
    freedoms: IntArray
    rates: FloatArray
    of_ball: bool


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
    pieces : the columns, joint by joint, with their derivatives
    """

    columns: tuple[Column, ...]
    values: FloatArray
    sd: FloatArray
    at_limit: BoolArray
    involved: BoolArray
    pieces: tuple[Piece, ...]


def report(kinematics: Kinematics, fits: FrameFits) -> Reported:
    """Everything the model names, in the order of its joints."""
    pieces = _pieces(kinematics, fits.posture)
    columns = tuple(column for piece in pieces for column in piece.columns)
    values = _side_by_side([piece.values for piece in pieces], len(fits.posture))
    involved = _touched(pieces, fits.involved)
    sd = np.where(involved, np.nan, _sd(pieces, fits.covariance))
    ranged = np.array([column.has_range for column in columns], dtype=bool)
    at_limit = _touched(pieces, fits.at_limit) & ranged
    return Reported(columns, values, sd, at_limit, involved, tuple(pieces))


def involvement(kinematics: Kinematics, posture: Posture, freedoms: BoolArray) -> BoolArray:
    """(frames, columns) Whether any of some freedoms (frames, freedoms) enters a number."""
    return _touched(_pieces(kinematics, posture), freedoms)


def report_derivatives(
    estimate: TrialEstimate, told: Reported, rate: float
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Rates and accelerations of everything reported, each with its sd.

    Returns
    -------
    rates, rates_sd, accelerations, accelerations_sd : (frames, columns)
        Per second and second squared; NaN near a reported singularity, and where any of the five
        frames that tell them is undetermined.
    """
    steep = _side_by_side([_steepness(piece) for piece in told.pieces], len(told.values))
    hidden = ~whole_windows(~told.involved) | (steep > 1 / np.sin(NEAR_SINGULAR))
    found = []
    first, second = derivatives(told.values, rate)
    for values, covariance in (
        (first, estimate.rate_covariance),
        (second, estimate.acceleration_covariance),
    ):
        missing = hidden | np.isnan(values)
        found += [
            np.where(missing, np.nan, values),
            np.where(missing, np.nan, _sd(told.pieces, covariance)),
        ]
    rates, rates_sd, accelerations, accelerations_sd = found
    return rates, rates_sd, accelerations, accelerations_sd


def doubt_shares(told: Reported, parts: Sequence[Covariances | None]) -> dict[str, DoubtShares]:
    """Median share of each part in the variance of each number that has one.

    Parameters
    ----------
    parts : covariances of white noise, of what persists, of calibration
        None: there is no such part.
    """
    names = [column.name for column in told.columns]
    variances = [None if part is None else _sd(told.pieces, part) ** 2 for part in parts]
    whole = np.sum([v for v in variances if v is not None], axis=0)
    shares = np.full((len(parts), len(names)), np.nan)
    for i, variance in enumerate(variances):
        if variance is not None:
            for j in range(len(names)):
                known = whole[:, j] > 0
                if known.any():
                    shares[i, j] = np.median(variance[known, j] / whole[known, j])
    has_one = np.isfinite(shares).any(axis=0)
    return {
        name: DoubtShares(*(float(share) for share in shares[:, j]))
        for j, name in enumerate(names)
        if has_one[j]
    }


def joint_covariance(told: Reported, covariance: Covariances) -> NDArray[np.float32]:
    """(frames, columns, columns) J C J' of all numbers together; NaN where one is undetermined.

    Parameters
    ----------
    covariance : Covariances
        With every entry.
    """
    frames, count = told.values.shape
    found = np.empty((frames, count, count), dtype=np.float32)
    for start in range(0, frames, FRAMES_AT_ONCE):
        rows = slice(start, min(start + FRAMES_AT_ONCE, frames))
        J = np.zeros((rows.stop - start, count, covariance.pattern.size))
        first = 0
        for piece in told.pieces:
            here = slice(first, first + len(piece.columns))
            J[:, here, piece.freedoms] = piece.rates[rows]
            first = here.stop
        found[rows] = J @ np.asarray(covariance.take(rows)) @ np.swapaxes(J, 1, 2)
    found[told.involved] = np.nan
    np.swapaxes(found, 1, 2)[told.involved] = np.nan
    return found


def reported_values(
    kinematics: Kinematics, posture: Posture
) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Name -> value (frames,) and derivative for a step (frames, freedoms)."""
    found = {}
    for piece in _pieces(kinematics, posture):
        for i, column in enumerate(piece.columns):
            rates = np.zeros((len(posture), kinematics.freedoms.size))
            rates[:, piece.freedoms] = piece.rates[:, i]
            found[column.name] = (piece.values[:, i], rates)
    return found


def _side_by_side(parts: list[FloatArray], frames: int) -> FloatArray:
    return np.concatenate([np.zeros((frames, 0)), *parts], axis=1)


def _sd(pieces: Sequence[Piece], covariance: Covariances) -> FloatArray:
    """(frames, columns) Root of J C J'."""
    parts = []
    for piece in pieces:
        block = covariance.block(piece.freedoms)
        variance = np.einsum("nci,nij,ncj->nc", piece.rates, block, piece.rates, optimize=True)
        parts.append(np.sqrt(np.maximum(variance, 0.0)))
    return _side_by_side(parts, len(covariance))


def _touched(pieces: Sequence[Piece], flags: BoolArray) -> BoolArray:
    """(frames, columns) Whether a flagged freedom enters a number."""
    parts = [
        ((piece.rates != 0) & flags[:, None, piece.freedoms]).any(axis=2).astype(float)
        for piece in pieces
    ]
    return _side_by_side(parts, len(flags)) > 0


def _steepness(piece: Piece) -> FloatArray:
    """(frames, columns) How much a reported angle changes for a turn; 0 for plain coordinates."""
    if not piece.of_ball:
        return np.zeros(piece.values.shape)
    return np.asarray(np.linalg.norm(piece.rates, axis=2))


def _pieces(kinematics: Kinematics, posture: Posture) -> list[Piece]:
    skeleton = kinematics.skeleton
    told = _coordinates(kinematics, posture)
    position = {c.name: i for i, c in enumerate(skeleton.coordinates)}
    pieces = []
    for joint in skeleton.joints:
        for name in _names(joint):
            if name in position:
                row = position.pop(name)
                column = _column(skeleton, skeleton.coordinates[row], joint)
                values = told.values[:, row : row + 1]
                pieces.append(Piece([column], values, *told.rates(row), of_ball=False))
        if isinstance(joint.motion, Floating | Spherical):
            pieces.append(_angles(kinematics, posture, joint, joint.motion.angles))
    return pieces


def _names(joint: Joint) -> list[str]:
    if isinstance(joint.motion, Floating):
        return list(joint.motion.position)
    if isinstance(joint.motion, Moves):
        return [move.coordinate for move in joint.motion.moves if move.coordinate is not None]
    return []


@dataclass(frozen=True, slots=True)
class _Coordinates:
    """Values (frames, coordinates), and those derivatives (frames, entries) that can be other than zero."""

    values: FloatArray
    derivatives: FloatArray
    row: IntArray
    column: IntArray

    def rates(self, row: int) -> tuple[IntArray, FloatArray]:
        """Which scalars move a coordinate, and how (frames, 1, scalars)."""
        entries = np.flatnonzero(self.row == row)
        return self.column[entries], self.derivatives[:, None, entries]


def _coordinates(kinematics: Kinematics, posture: Posture) -> _Coordinates:
    expression = kinematics.coordinate_values
    if not expression.numel():
        none = np.zeros(0, dtype=np.int64)
        return _Coordinates(np.zeros((len(posture), 0)), np.zeros((len(posture), 0)), none, none)
    jacobian = ca.jacobian(expression, kinematics.scalars)
    row, column = (np.array(part, dtype=np.int64) for part in jacobian.sparsity().get_triplet())
    entries: Any = ca.vertcat(*jacobian.nonzeros())  # type: ignore[call-overload]
    function = ca.Function("coordinates", [kinematics.scalars], [ca.densify(expression), entries])
    values, derivatives = over_frames(function)(posture.scalars)
    return _Coordinates(values, derivatives, row, column)


def _angles(kinematics: Kinematics, posture: Posture, joint: Joint, angles: AngleReport) -> Piece:
    ball = kinematics.freedoms.balls.index(joint.name)
    rotation = rotations(posture.quaternions[:, ball]).as_matrix()
    found = report_angles(rotation, angles)
    here = kinematics.freedoms.ball_slice(ball)
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
    freedoms = np.arange(here.start, here.stop)
    return Piece(columns, found.values, freedoms, found.rates, of_ball=True)


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
