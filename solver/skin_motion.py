"""Where a marker sits, frame by frame: its place, and how the skin carries it as joints move.

In the axes of its segment a marker departs from its grown nominal place by

    d  +  (c + sum_j a_j z_j)   in frames of movement,     d   in the static,

d being how it was put on, ~ N(0, placed_within^2); c and a_j what muscles and skin do once the person
moves, z_j how far each joint beside the segment has turned since the static. All are linear, so that
the estimate holds them like any other unknown, and nothing of the frames' residuals is taken for white
that moves with the joints. Without c and a_j, more frames make a hip worse and its sd absurd.

The prior of c and a comes from the marker's `sd`, its whole expected error: see the constants. Soft parts
carry the markers of a segment together, most of all as one rigid piece that shifts and turns on the bone
(Andersen et al. 2012, J Biomech 45:2326; Dumas, Camomilla et al. 2014, J Biomech 47:3282; both from memory):
so a third of the variance is each marker's own, a third a common shift and a third a common turn.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import LABORATORY, Joint, Moves, Skeleton, Spherical
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, rotations

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

SHIFT_SHARE = 0.3
"""sd of c over a marker's `sd`: what differs between standing and moving, whatever the posture."""
UNKNOWN_PLACE_SD = 1e4
"""m; in place of infinity, so that every matrix stays definite. It pulls nothing by a nanometre."""
SMALLEST_CLUSTER = 0.02
"""m; markers closer to an axis than this say nothing of a turn about it."""
SKIN_ANGLE = 1.0
"""rad; a turn of one joint beside it by which a marker is carried by its `sd`: by 0.8 of it at 46 degrees. With
`REST_SHARE` for what is not linear in the turns, the two come to the whole `sd` there."""
REST_SHARE = 0.6
"""Of a marker's `sd`: what is left in a frame of movement that is not linear in the turns."""


@dataclass(frozen=True, slots=True)
class SkinMotion:
    """What carries each marker: rows of unknowns, three components each.

    Attributes
    ----------
    marker : (rows,)
        The marker that a row belongs to.
    precision : (3 rows, 3 rows)
        Prior of all components: 1/m^2, or rad^2/m^2; 0 where nothing is known.
    regressors : (frames, rows)
        What each component is multiplied with: 1, or rad.
    """

    marker: IntArray
    precision: FloatArray
    regressors: FloatArray

    def __len__(self) -> int:
        return len(self.marker)

    def departures(self, unknowns: FloatArray, markers: int) -> FloatArray:
        """(frames, markers, 3) m, from the grown nominal places, for unknowns (rows, 3)."""
        which = np.zeros((len(self), markers))
        which[np.arange(len(self)), self.marker] = 1.0
        weighted = self.regressors[:, :, None] * unknowns
        return np.asarray(np.einsum("krc,rm->kmc", weighted, which, optimize=True))


def skin_motion(
    functions: SkeletonFunctions,
    seen: BoolArray,
    moving: BoolArray,
    turns: FloatArray,
) -> SkinMotion:
    """The unknowns of every marker that is seen.

    Parameters
    ----------
    seen : (frames, markers) bool
    moving : (frames,) bool
        Frames of movement; the others are of the static.
    turns : (frames, freedoms) rad
        From `turns_since`; 0 in the static.
    """
    skeleton = functions.skeleton
    rows: list[_Row] = []
    columns: list[FloatArray] = []
    for m, marker in enumerate(skeleton.markers):
        if not seen[:, m].any():
            continue
        known = marker.at is not None
        rows.append(_Row(m, marker.placed_within if known else UNKNOWN_PLACE_SD, None))
        columns.append(np.ones(len(seen)))
        if not seen[moving, m].any():
            continue
        rows.append(_Row(m, SHIFT_SHARE * marker.sd, -1))
        columns.append(moving.astype(np.float64))
        for freedom in freedoms_beside(functions, marker.segment):
            if turns[:, freedom].any():
                rows.append(_Row(m, marker.sd / SKIN_ANGLE, freedom))
                columns.append(np.where(moving, turns[:, freedom], 0.0))
    return SkinMotion(
        np.array([row.marker for row in rows], dtype=np.int64),
        _precision(skeleton, rows),
        np.stack(columns, axis=1),
    )


@dataclass(frozen=True, slots=True)
class _Row:
    """One marker's own unknowns for one cause: None its place, -1 movement as such, else a freedom."""

    marker: int
    sd: float
    cause: int | None


def _precision(skeleton: Skeleton, rows: list[_Row]) -> FloatArray:
    """(3 rows, 3 rows) Inverse of the prior covariance: markers of a segment go together for each cause."""
    precision = np.zeros((3 * len(rows), 3 * len(rows)))
    together: dict[tuple[str, int], list[int]] = {}
    for r, row in enumerate(rows):
        if row.cause is None:
            here = slice(3 * r, 3 * r + 3)
            precision[here, here] = np.eye(3) / row.sd**2
        else:
            segment = skeleton.markers[row.marker].segment
            together.setdefault((segment, row.cause), []).append(r)
    for members in together.values():
        places = np.array([skeleton.markers[rows[r].marker].at or (0.0,) * 3 for r in members])
        sd = np.array([rows[r].sd for r in members])
        index = (3 * np.array(members)[:, None] + np.arange(3)).ravel()
        precision[np.ix_(index, index)] = np.linalg.inv(_carried_together(places, sd))
    return precision


def _carried_together(places: FloatArray, sd: FloatArray) -> FloatArray:
    """(3 n, 3 n) m^2, the covariance of n markers of one segment: own, shifted and turned together."""
    count, typical = len(sd), float(np.sqrt(np.mean(sd**2)))
    own = np.kron(np.diag(sd**2 / 3), np.eye(3))
    shift = np.kron(np.ones((count, count)), np.eye(3)) * typical**2 / 3
    away = places - places.mean(axis=0)
    turned = np.zeros((3 * count, 3))
    for axis in range(3):
        across = np.cross(np.eye(3)[axis], away)
        size = np.sqrt((across**2).sum() / (2 * count))
        # A turn about an axis moves its markers by a third of the variance, on average per component.
        turned[:, axis] = across.ravel() / max(size, SMALLEST_CLUSTER) / np.sqrt(3)
    return np.asarray(own + shift + turned @ turned.T * typical**2 / 3)


def freedoms_beside(functions: SkeletonFunctions, segment: str) -> list[int]:
    """The turning freedoms of the joints that a segment takes part in; not how it floats."""
    skeleton, freedoms = functions.skeleton, functions.kinematics.freedoms
    units = {c.name: c.unit for c in skeleton.coordinates}
    found: list[int] = []
    for joint in skeleton.joints:
        if segment not in (joint.parent, joint.child) or joint.parent == LABORATORY:
            continue
        if isinstance(joint.motion, Spherical):
            ball = freedoms.ball_slice(freedoms.balls.index(joint.name))
            found += range(ball.start, ball.stop)
        for name in _drivers(joint, skeleton):
            if units[name] == "rad":
                found.append(freedoms.scalars.index(name))
    return list(dict.fromkeys(found))


def turns_since(functions: SkeletonFunctions, posture: Posture, start: Posture) -> FloatArray:
    """(frames, freedoms) How far each freedom has moved since a posture of one frame."""
    balls = []
    for b in range(posture.quaternions.shape[1]):
        first = rotations(start.quaternions[:1, b]).inv()
        turn = first * rotations(posture.quaternions[:, b])
        balls.append(turn.as_rotvec())
    return np.concatenate([posture.scalars - start.scalars[:1], *balls], axis=1)


def _drivers(joint: Joint, skeleton: Skeleton) -> list[str]:
    """Free coordinates that move a joint, by themselves or through another."""
    if not isinstance(joint.motion, Moves):
        return []
    follows = {c.name: c.follows for c in skeleton.coordinates}
    names = []
    for move in joint.motion.moves:
        name = move.coordinate or move.follows
        while name is not None and follows.get(name) is not None:
            name = follows[name]
        if name is not None:
            names.append(name)
    return names
