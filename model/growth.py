"""How a skeleton grows: size factors in, the numbers of a sized skeleton out.

Landmarks, joint centres, marker places and dependent translations grow axis by axis with their
segment's factors; the law stands here once, as a CasADi expression, so that calibration can
differentiate it and everything else can evaluate it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression, rotation_of_turn
from condyle.model.skeleton import (
    LABORATORY,
    Joint,
    Move,
    Moves,
    OnEllipsoid,
    OnPlane,
    Segment,
    Skeleton,
    Turn,
    Vector,
)

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class NumberLayout:
    """Where each number of a sized skeleton stands in the flat vector that kinematics takes.

    The order: joint places in the parent, the same in the child, gains of dependent translations,
    marker places, the rotation laboratory-from-upright (row by row), small turns of joint axes,
    tie places.
    """

    joints: int
    translations: int
    markers: int
    turns: int
    tie_places: int

    @property
    def at(self) -> slice:
        """(3 joints) Joint centres in the parent, m."""
        return slice(0, 3 * self.joints)

    @property
    def in_child(self) -> slice:
        """(3 joints) Joint centres in the child, m."""
        return slice(3 * self.joints, 6 * self.joints)

    @property
    def gains(self) -> slice:
        """(translations) Growth of each dependent translation."""
        return slice(6 * self.joints, 6 * self.joints + self.translations)

    @property
    def marker_at(self) -> slice:
        """(3 markers) Marker places in their segments, m."""
        start = self.gains.stop
        return slice(start, start + 3 * self.markers)

    @property
    def laboratory_from_upright(self) -> slice:
        """(9) Rotation, row by row."""
        return slice(self.marker_at.stop, self.marker_at.stop + 9)

    @property
    def axis_turns(self) -> slice:
        """(3 turns) Rotation vectors of small turns of joint axes, in the parent, rad."""
        start = self.laboratory_from_upright.stop
        return slice(start, start + 3 * self.turns)

    @property
    def ties(self) -> slice:
        """(3 tie places) For each tie its point, the other place, and an ellipsoid's radii, m."""
        return slice(self.axis_turns.stop, self.axis_turns.stop + 3 * self.tie_places)

    @property
    def size(self) -> int:
        """Length of the flat vector."""
        return int(self.ties.stop)


def dependent_translations(skeleton: Skeleton) -> list[tuple[Joint, Move]]:
    """The translations that follow another coordinate, in the order of the gains."""
    return [
        (joint, move)
        for joint in skeleton.joints
        if isinstance(joint.motion, Moves)
        for move in joint.motion.moves
        if move.kind == "translate" and move.function is not None
    ]


def turning_joints(skeleton: Skeleton) -> list[Joint]:
    """The joints whose axes may turn a little, in the order of the turns."""
    freed = {name for name, joint in skeleton.sizing.joints.items() if joint.axis_sd is not None}
    return [j for j in skeleton.joints if j.axis_turn is not None or j.name in freed]


def tie_places(skeleton: Skeleton) -> list[tuple[str, Vector]]:
    """(segment, place of the reference person) of everything of a tie that grows, in order."""
    places = []
    for tie in skeleton.ties:
        places.append((tie.segment, tie.point))
        kind = tie.kind
        if isinstance(kind, OnPlane):
            places.append((kind.of, kind.through))
        elif isinstance(kind, OnEllipsoid):
            places += [(kind.of, kind.centre), (kind.of, kind.radii)]
        else:
            places.append((kind.segment, kind.point))
    return places


def number_layout(skeleton: Skeleton) -> NumberLayout:
    """Where the numbers of this skeleton stand."""
    return NumberLayout(
        joints=len(skeleton.joints),
        translations=len(dependent_translations(skeleton)),
        markers=len(skeleton.markers),
        turns=len(turning_joints(skeleton)),
        tie_places=len(tie_places(skeleton)),
    )


def grown_numbers_expression(
    skeleton: Skeleton,
    factors: Expression,
    marker_at: Expression,
    upright: Expression,
    *,
    departures: Mapping[str, Expression] | None = None,
    axis_turns: Mapping[str, Expression] | None = None,
) -> Expression:
    """The flat vector of numbers as an expression.

    Parameters
    ----------
    factors : (3 segments) size factors, x, y, z of each segment in turn
    marker_at : (3 markers) m, in the sized segments
    upright : (9) laboratory-from-upright, row by row
    departures : joint -> (3) m, of its centre from the grown one, in the sized parent
    axis_turns : joint -> (3) rad, in place of what the skeleton has
    """
    departures, axis_turns = departures or {}, axis_turns or {}
    row = {segment.name: 3 * i for i, segment in enumerate(skeleton.segments)}

    def of(segment: str) -> Expression:
        if segment == LABORATORY:
            return ca.SX.ones(3)
        return factors[row[segment] : row[segment] + 3]

    at = [
        ca.SX(ca.DM(joint.placed))
        if joint.placed
        else of(joint.parent) * ca.DM(joint.at) + departures.get(joint.name, 0)
        for joint in skeleton.joints
    ]
    in_child = [of(joint.child) * ca.DM(joint.in_child) for joint in skeleton.joints]
    gains = []
    for joint, move in dependent_translations(skeleton):
        turn = joint.turned if isinstance(joint.turned, Turn) else None
        axis_in_parent = rotation_of_turn(turn) @ np.array(move.axis)
        gains.append(ca.norm_2(of(joint.parent) * ca.DM(axis_in_parent)))
    turns = [
        axis_turns.get(j.name, ca.SX(ca.DM(j.axis_turn or (0.0, 0.0, 0.0))))
        for j in turning_joints(skeleton)
    ]
    ties = [of(segment) * ca.DM(place) for segment, place in tie_places(skeleton)]
    return ca.densify(ca.vertcat(*at, *in_child, *gains, marker_at, upright, *turns, *ties))


def grown_marker_at_expression(skeleton: Skeleton, factors: Expression) -> Expression:
    """(3 markers) Nominal marker places grown with their segments; 0 where a place is unknown."""
    row = {segment.name: 3 * i for i, segment in enumerate(skeleton.segments)}
    places = [
        factors[row[m.segment] : row[m.segment] + 3] * ca.DM(m.at if m.at is not None else [0] * 3)
        for m in skeleton.markers
    ]
    return ca.densify(ca.vertcat(ca.SX(0, 1), *places))


def size_factors(skeleton: Skeleton) -> FloatArray:
    """(segments, 3) The growth factors of a sized skeleton; ones for the reference person."""
    sizes = skeleton.sizes
    ones = (1.0, 1.0, 1.0)
    return np.array([sizes[s.name].factors if s.name in sizes else ones for s in skeleton.segments])


def sized_marker_at(skeleton: Skeleton) -> FloatArray:
    """(markers, 3) m in the sized segments: as placed, else the nominal place grown, else NaN."""
    factors = size_factors(skeleton)
    places = np.full((len(skeleton.markers), 3), np.nan)
    for i, marker in enumerate(skeleton.markers):
        if marker.placed is not None:
            places[i] = marker.placed
        elif marker.at is not None:
            places[i] = factors[skeleton.segment_index(marker.segment)] * np.array(marker.at)
    return places


def sized_numbers(skeleton: Skeleton, laboratory_from_upright: FloatArray) -> FloatArray:
    """The flat vector of numbers of a skeleton as it stands; unknown marker places are 0."""
    expression = grown_numbers_expression(
        skeleton,
        ca.SX(ca.DM(size_factors(skeleton).ravel())),
        ca.SX(ca.DM(np.nan_to_num(sized_marker_at(skeleton)).ravel())),
        ca.SX(ca.DM(laboratory_from_upright.ravel())),
    )
    return np.asarray(ca.evalf(expression), dtype=np.float64).ravel()


def sized_landmarks(skeleton: Skeleton) -> dict[str, dict[str, FloatArray]]:
    """Segment -> landmark -> (3,) m in the sized segment."""
    factors = size_factors(skeleton)
    return {
        segment.name: {
            name: factors[i] * np.array(place) for name, place in segment.landmarks.items()
        }
        for i, segment in enumerate(skeleton.segments)
    }


def sized_joint_centres(skeleton: Skeleton) -> dict[str, dict[str, FloatArray]]:
    """Segment -> child segment -> (3,) m, the child's joint centre in the sized segment."""
    factors = size_factors(skeleton)
    centres: dict[str, dict[str, FloatArray]] = {s.name: {} for s in skeleton.segments}
    for joint in skeleton.joints:
        if joint.parent != LABORATORY:
            growth = factors[skeleton.segment_index(joint.parent)]
            grown = growth * np.array(joint.at)
            centres[joint.parent][joint.child] = np.array(joint.placed) if joint.placed else grown
    return centres


def sized_lengths(skeleton: Skeleton) -> dict[str, float]:
    """Segment -> m, what a tape would measure on the sized segment."""
    factors = size_factors(skeleton)
    return {
        segment.name: float(
            np.linalg.norm(factors[i] * (np.array(segment.length[1]) - np.array(segment.length[0])))
        )
        for i, segment in enumerate(skeleton.segments)
        if segment.length is not None
    }


def grown_gyration(gyration: Vector, factors: Vector) -> Vector:
    """Radii of gyration after growth: second moments grow, not radii.

    s_x^2 = (r_y^2 + r_z^2 - r_x^2) / 2 is the mean square distance along x; it is multiplied by
    f_x^2, and r_x^2 = s_y^2 + s_z^2 gives the radii back (definition of the inertia tensor).
    """
    r2 = np.square(gyration)
    s2 = (r2.sum() / 2 - r2) * np.square(factors)
    x, y, z = np.sqrt(s2.sum() - s2)
    return (float(x), float(y), float(z))


def grown_segment(segment: Segment, factors: Mapping[str, Vector]) -> Segment:
    """The segment with its centre of mass and gyration grown; mass is left as it is."""
    f = factors.get(segment.name, (1.0, 1.0, 1.0))
    centre, gyration = segment.centre_of_mass, segment.gyration
    grown_centre = None
    if centre is not None:
        grown_centre = (centre[0] * f[0], centre[1] * f[1], centre[2] * f[2])
    grown = grown_gyration(gyration, f) if gyration is not None else None
    return replace(segment, centre_of_mass=grown_centre, gyration=grown)
