"""The normal equations of one frame, without ever forming a Jacobian.

With isotropic marker weights, J'WJ is the joint-space inertia matrix of a skeleton whose point
masses are the marker weights, and J'Wr the joint forces of the forces W r at the markers
(composite rigid-body algorithm, Featherstone 2008, Rigid Body Dynamics Algorithms, ch. 6). Moments
and forces are summed once up the tree and projected on the screw of each freedom.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression
from condyle.model.kinematics import Kinematics, Screw
from condyle.model.skeleton import LABORATORY, Skeleton
from condyle.solver.over_frames import FrameFunction, over_frames
from condyle.solver.packed_matrices import Pattern

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Moments:
    """Weighted moments of the markers of a subtree, about the laboratory's origin.

    Attributes
    ----------
    mass : sum of w
    first : sum of w p
    second : sum of w p p', 3x3
    force, torque : sums of w r and p x (w r)
    outer : sum of p (w r)', 3x3
    """

    mass: Expression
    first: Expression
    second: Expression
    force: Expression
    torque: Expression
    outer: Expression

    def __add__(self, other: Moments) -> Moments:
        return Moments(
            self.mass + other.mass,
            self.first + other.first,
            self.second + other.second,
            self.force + other.force,
            self.torque + other.torque,
            self.outer + other.outer,
        )


NO_MARKERS = Moments(
    ca.SX(0), ca.SX.zeros(3), ca.SX(3, 3), ca.SX.zeros(3), ca.SX.zeros(3), ca.SX(3, 3)
)


def _subtree_moments(
    skeleton: Skeleton, points: Expression, residuals: Expression, weights: Expression
) -> list[Moments]:
    moments = [NO_MARKERS] * len(skeleton.segments)
    for i, marker in enumerate(skeleton.markers):
        p, w = points[3 * i : 3 * i + 3], weights[i]
        force = w * residuals[3 * i : 3 * i + 3]
        own = Moments(w, w * p, w * (p @ p.T), force, ca.cross(p, force), p @ force.T)
        segment = skeleton.segment_index(marker.segment)
        moments[segment] = moments[segment] + own
    for i, joint in reversed(list(enumerate(skeleton.joints))):
        if joint.parent != LABORATORY:
            parent = skeleton.segment_index(joint.parent)
            moments[parent] = moments[parent] + moments[i]
    return moments


def _impulse(screw: Screw, moments: Moments) -> tuple[Expression, Expression]:
    """Linear and angular momentum of the marker masses moving with a screw."""
    v, a = screw.linear, screw.angular
    inertia = ca.trace(moments.second) * ca.SX.eye(3) - moments.second
    linear = moments.mass * v + ca.cross(a, moments.first)
    return linear, ca.cross(moments.first, v) + inertia @ a


class NormalEquations:
    """H = J'WJ, g = J'Wr and cost = r'Wr / 2 for many frames at once.

    Attributes
    ----------
    kinematics : Kinematics
    pattern : Pattern
        Of H and of its curvature.
    """

    def __init__(self, kinematics: Kinematics, also: Iterable[tuple[int, int]] = ()) -> None:
        """Work out the functions; `also` are pairs (row >= column) that other terms will add to."""
        self.kinematics = kinematics
        skeleton = kinematics.skeleton
        measured = ca.SX.sym("measured", 3 * len(skeleton.markers))
        weights = ca.SX.sym("weights", len(skeleton.markers))
        points = kinematics.marker_positions
        residuals = measured - points
        moments = _subtree_moments(skeleton, points, residuals, weights)
        entries, gradient = self._project(moments)
        cost = ca.dot(ca.vec(ca.repmat(weights.T, 3, 1)), residuals**2) / 2
        bent = self._curvature(moments)
        self.pattern = Pattern({*entries, *bent, *also}, kinematics.freedoms.size)
        values = self._in_order(entries)
        self.function = ca.Function(
            "normal_equations",
            [kinematics.scalars, kinematics.quaternions, measured, weights, kinematics.numbers],
            [ca.densify(values), ca.densify(gradient), ca.densify(cost)],
            ["scalars", "quaternions", "measured", "weights", "numbers"],
            ["entries", "gradient", "cost"],
            {"cse": True},
        )
        self._evaluate: FrameFunction = over_frames(self.function)
        self._evaluate_curvature: FrameFunction = over_frames(
            ca.Function(
                "curvature",
                [kinematics.scalars, kinematics.quaternions, measured, weights, kinematics.numbers],
                [ca.densify(self._in_order(bent))],
                {"cse": True},
            )
        )

    def _in_order(self, entries: dict[tuple[int, int], Expression]) -> Expression:
        zero = ca.SX(0)
        return ca.vertcat(
            ca.SX(0, 1), *[entries.get((int(k), int(j)), zero) for k, j in self.pattern.pairs]
        )

    def _project(
        self, moments: list[Moments]
    ) -> tuple[dict[tuple[int, int], Expression], Expression]:
        """Entries of H (row >= column) and the vector g, from moments and screws."""
        ancestors = self._ancestors()
        entries: dict[tuple[int, int], Expression] = {}
        gradient = ca.SX.zeros(self.kinematics.freedoms.size)
        for i, screw in enumerate(self.kinematics.screws):
            load = moments[screw.joint]
            gradient[screw.freedom] += ca.dot(screw.linear, load.force) + ca.dot(
                screw.angular, load.torque
            )
            linear, angular = _impulse(screw, load)
            for j, other in enumerate(self.kinematics.screws):
                same_joint = other.joint == screw.joint and j <= i
                if not same_joint and other.joint not in ancestors[screw.joint]:
                    continue
                value = ca.dot(other.linear, linear) + ca.dot(other.angular, angular)
                both = 2 if (i != j and other.freedom == screw.freedom) else 1
                key = (
                    max(screw.freedom, other.freedom),
                    min(screw.freedom, other.freedom),
                )
                entries[key] = entries.get(key, ca.SX(0)) + both * value
        return entries, gradient

    def _curvature(self, moments: list[Moments]) -> dict[tuple[int, int], Expression]:
        """Entries of sum w r' d2p (row >= column): what H lacks of the cost's second derivative.

        A freedom above turns the velocity that one below gives: a x (v + b x p), for every p beyond;
        within one joint the bends say the rest.
        """
        ancestors, screws = self._ancestors(), self.kinematics.screws
        entries: dict[tuple[int, int], Expression] = {}

        def add(k: int, j: int, value: Expression) -> None:
            key = (max(k, j), min(k, j))
            entries[key] = entries.get(key, ca.SX(0)) + value

        for screw in screws:
            load = moments[screw.joint]
            pull = ca.cross(screw.linear, load.force)
            pull += load.outer @ screw.angular - ca.trace(load.outer) * screw.angular
            for other in screws:
                if other.joint in ancestors[screw.joint]:
                    both = 2 if other.freedom == screw.freedom else 1
                    add(screw.freedom, other.freedom, both * ca.dot(other.angular, pull))
        for bend in self.kinematics.bends:
            load = moments[bend.joint]
            value = ca.dot(bend.constant, load.force) + ca.trace(bend.linear @ load.outer)
            add(*bend.freedoms, value)
        return entries

    def _ancestors(self) -> list[set[int]]:
        """For each joint, the joints between its parent segment and the laboratory."""
        skeleton = self.kinematics.skeleton
        ancestors: list[set[int]] = []
        for joint in skeleton.joints:
            if joint.parent == LABORATORY:
                ancestors.append(set())
            else:
                parent = skeleton.segment_index(joint.parent)
                ancestors.append(ancestors[parent] | {parent})
        return ancestors

    def __call__(self, *inputs: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H (frames, n, n), g (frames, n) and cost (frames,); inputs as `packed` takes them."""
        values, gradient, cost = self.packed(*inputs)
        return self.pattern.dense(values), gradient, cost

    def curvature(self, *inputs: FloatArray) -> FloatArray:
        """(frames, n, n) sum of w r' d2p: H minus this is the cost's exact second derivative."""
        return self.pattern.dense(self.packed_curvature(*inputs))

    def packed(
        self,
        scalars: FloatArray,
        quaternions: FloatArray,
        measured: FloatArray,
        weights: FloatArray,
        numbers: FloatArray,
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Evaluate for every frame.

        Parameters
        ----------
        scalars : (frames, scalars)
        quaternions : (frames, balls, 4)
        measured : (frames, markers, 3) m, finite everywhere
        weights : (frames, markers) 1/m^2, 0 where a marker is missing
        numbers : (numbers,)

        Returns
        -------
        H (frames, entries) packed by `pattern`, g (frames, n), cost (frames,)
        """
        frames = len(scalars)
        values, gradient, cost = self._evaluate(
            scalars,
            quaternions.reshape(frames, -1),
            measured.reshape(frames, -1),
            weights,
            numbers,
        )
        return values, gradient, cost[:, 0]

    def packed_curvature(
        self,
        scalars: FloatArray,
        quaternions: FloatArray,
        measured: FloatArray,
        weights: FloatArray,
        numbers: FloatArray,
    ) -> FloatArray:
        """The curvature (frames, entries), packed by `pattern`; inputs as `packed` takes them."""
        frames = len(scalars)
        (values,) = self._evaluate_curvature(
            scalars,
            quaternions.reshape(frames, -1),
            measured.reshape(frames, -1),
            weights,
            numbers,
        )
        return values
