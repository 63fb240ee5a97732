"""Ties as rows of the least-squares problem: what must stay together, to within its sd.

Each tie's equations are residuals in metres over its sd; they are few and dense, so their
derivatives come from CasADi and are added to the normal equations of the markers.
"""

from __future__ import annotations

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression
from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import LABORATORY, MeetsPoint, OnEllipsoid, OnPlane, StaysAt, Tie
from condyle.solver.over_frames import FrameFunction, over_frames
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


class TieEquations:
    """The residuals of a skeleton's ties, for many frames at once.

    Attributes
    ----------
    expression : SX (rows) m
        Signed, not yet over the sd.
    sd : (rows,) m
    names : (rows,) the tie that each row belongs to
    """

    def __init__(self, kinematics: Kinematics) -> None:
        ties = kinematics.skeleton.ties
        places = kinematics.numbers[kinematics.layout.ties]
        rows, first = [], 0
        for tie in ties:
            count = 3 if isinstance(tie.kind, OnEllipsoid) else 2
            rows.append(_residual(kinematics, tie, places[3 * first : 3 * (first + count)]))
            first += count
        self.expression: Expression = ca.vertcat(ca.SX(0, 1), *rows)
        counts = [row.numel() for row in rows]
        self.names = tuple(t.name for t, n in zip(ties, counts, strict=True) for _ in range(n))
        self.sd = np.repeat([tie.sd for tie in ties], counts).astype(np.float64)
        self._size = kinematics.freedoms.size
        self._evaluate = self._function(kinematics) if ties else None

    def __len__(self) -> int:
        return len(self.sd)

    @property
    def moved_by(self) -> BoolArray:
        """(freedoms,) Which freedoms enter any tie; that they can be told from it is not said."""
        return self._moved if len(self) else np.zeros(self._size, dtype=bool)

    def residuals(self, posture: Posture, numbers: FloatArray) -> tuple[FloatArray, FloatArray]:
        """(frames, rows) m, and their derivatives for a step (frames, rows, freedoms)."""
        frames = len(posture)
        if self._evaluate is None:
            return np.zeros((frames, 0)), np.zeros((frames, 0, self._size))
        balls = posture.quaternions.reshape(frames, -1)
        values, J = self._evaluate(posture.scalars, balls, numbers)
        return values, J.reshape(frames, len(self), self._size)

    def freedom_taken(self, posture: Posture, numbers: FloatArray) -> int:
        """How many freedoms the ties take away at the first frame of a posture: rank of J."""
        _, J = self.residuals(posture.take(np.array([0])), numbers)
        return int(np.linalg.matrix_rank(J[0], tol=1e-8)) if len(self) else 0

    def largest(self, posture: Posture, numbers: FloatArray) -> dict[str, float]:
        """Tie -> its largest departure (m) over the frames, the length of its equations together."""
        values, _ = self.residuals(posture, numbers)
        names = np.array(self.names)
        return {
            name: float(np.linalg.norm(values[:, names == name], axis=1).max())
            for name in dict.fromkeys(self.names)
        }

    def _function(self, kinematics: Kinematics) -> FrameFunction:
        after, step = kinematics.perturbed(self.expression)
        J = ca.substitute(ca.jacobian(after, step), step, ca.SX.zeros(step.numel()))
        pattern = ca.jacobian(after, step).sparsity()
        self._moved = np.array(
            [any(pattern.has_nz(r, k) for r in range(len(self))) for k in range(self._size)]
        )
        return over_frames(
            ca.Function(
                "ties",
                [kinematics.scalars, kinematics.quaternions, kinematics.numbers],
                [ca.densify(self.expression), ca.densify(ca.vec(J.T))],
                {"cse": True},
            )
        )


def _residual(kinematics: Kinematics, tie: Tie, places: Expression) -> Expression:
    point = _in_laboratory(kinematics, tie.segment, places[:3])
    other, kind = places[3:6], tie.kind
    if isinstance(kind, MeetsPoint):
        return point - _in_laboratory(kinematics, kind.segment, other)
    if isinstance(kind, StaysAt):
        away = point - _in_laboratory(kinematics, kind.segment, other)
        return ca.norm_2(away) - kind.distance
    point_in_other = _from_laboratory(kinematics, kind.of, point)
    if isinstance(kind, OnPlane):
        return ca.dot(ca.DM(kind.normal), point_in_other - other)
    return _ellipsoid(point_in_other - other, places[6:9])


def _ellipsoid(from_centre: Expression, radii: Expression) -> Expression:
    """(f - 1) / |grad f| with f = sum (x / r)^2: metres from the surface, to first order."""
    f = ca.sumsqr(from_centre / radii)
    return (f - 1) / ca.norm_2(2 * from_centre / radii**2)


def _in_laboratory(kinematics: Kinematics, segment: str, place: Expression) -> Expression:
    if segment == LABORATORY:
        return place
    index = kinematics.skeleton.segment_index(segment)
    return kinematics.rotations[index] @ place + kinematics.origins[index]


def _from_laboratory(kinematics: Kinematics, segment: str, point: Expression) -> Expression:
    if segment == LABORATORY:
        return point
    index = kinematics.skeleton.segment_index(segment)
    return kinematics.rotations[index].T @ (point - kinematics.origins[index])
