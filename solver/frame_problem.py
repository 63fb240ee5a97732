"""What one frame's fit minimises: weighted marker residuals and weak pulls to rest.

cost = sum w |y - p(q)|^2 / 2 + sum (tie / sd)^2 / 2 + sum ((q - rest) / rest_sd)^2 / 2, with the pull of
a spherical joint on the components of log R. Missing markers weigh nothing.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import LABORATORY, Coordinate, Skeleton
from condyle.solver.cone_limits import add_limits, limited_balls
from condyle.solver.least_squares import Bounds
from condyle.solver.normal_equations import NormalEquations
from condyle.solver.over_frames import FrameFunction, Replay
from condyle.solver.posture import (
    Posture,
    upright_posture,
)
from condyle.solver.rest_pulls import add_ball_pull, pulled_balls
from condyle.solver.tie_equations import TieEquations

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


class SkeletonFunctions:
    """Everything about one skeleton that can be evaluated over frames; built once, used often.

    Attributes
    ----------
    kinematics : Kinematics
    normal_equations : NormalEquations
    ties : TieEquations
    limited_balls : spherical joints with a cone or a twist range
    pulled_balls : spherical joints with a pull to rest
    moves_marker : (freedoms, markers) bool
        Whether a freedom moves a marker at all.
    """

    def __init__(self, skeleton: Skeleton) -> None:
        self.skeleton = skeleton
        self.kinematics = Kinematics(skeleton)
        self.normal_equations = NormalEquations(self.kinematics)
        self.ties = TieEquations(self.kinematics)
        self.limited_balls = limited_balls(self.kinematics)
        self.pulled_balls = pulled_balls(self.kinematics)
        inputs = [self.kinematics.scalars, self.kinematics.quaternions, self.kinematics.numbers]
        self._markers: FrameFunction = Replay(
            ca.Function("markers", inputs, [ca.densify(self.kinematics.marker_positions)])
        )
        poses = [
            ca.vertcat(ca.vec(rotation.T), origin)
            for rotation, origin in zip(
                self.kinematics.rotations, self.kinematics.origins, strict=True
            )
        ]
        self._poses: FrameFunction = Replay(
            ca.Function("poses", inputs, [ca.densify(ca.vertcat(*poses))])
        )
        self.moves_marker = self._moves_marker()

    @property
    def held(self) -> BoolArray:
        """(freedoms,) Coordinates that the model holds."""
        held = np.zeros(self.kinematics.freedoms.size, dtype=bool)
        free = [c for c in self.skeleton.coordinates if c.follows is None]
        held[: len(free)] = [c.held is not None for c in free]
        return held

    def marker_positions(self, posture: Posture, numbers: FloatArray) -> FloatArray:
        """(frames, markers, 3) m, laboratory axes."""
        frames = len(posture)
        flat = posture.quaternions.reshape(frames, -1)
        return self._markers(posture.scalars, flat, numbers)[0].reshape(frames, -1, 3)

    def poses(self, posture: Posture, numbers: FloatArray) -> FloatArray:
        """(frames, segments, 4, 4) laboratory-from-segment."""
        frames = len(posture)
        flat = posture.quaternions.reshape(frames, -1)
        values = self._poses(posture.scalars, flat, numbers)[0].reshape(frames, -1, 12)
        poses = np.zeros((frames, values.shape[1], 4, 4))
        poses[..., :3, :3] = values[..., :9].reshape(frames, -1, 3, 3)
        poses[..., :3, 3] = values[..., 9:]
        poses[..., 3, 3] = 1.0
        return poses

    def _moves_marker(self) -> BoolArray:
        skeleton, freedoms = self.skeleton, self.kinematics.freedoms
        ancestors: list[set[int]] = []
        for i, joint in enumerate(skeleton.joints):
            above = set()
            if joint.parent != LABORATORY:
                above = ancestors[skeleton.segment_index(joint.parent)]
            ancestors.append(above | {i})
        moves = np.zeros((freedoms.size, len(skeleton.markers)), dtype=bool)
        for screw in self.kinematics.screws:
            for m, marker in enumerate(skeleton.markers):
                if screw.joint in ancestors[skeleton.segment_index(marker.segment)]:
                    moves[screw.freedom, m] = True
        return moves


@dataclass(frozen=True, slots=True)
class FrameProblem:
    """The sum of squares of each frame of a trial.

    Attributes
    ----------
    functions : SkeletonFunctions
    measured : (frames, markers, 3) m, finite everywhere (0 where missing)
    weights : (frames, markers) 1/m^2, 0 where missing or not used
    numbers : (numbers,)
        Of the sized skeleton, laid out as kinematics takes them.
    tie_softness : float
        m; what is added to every tie's sd, in quadrature, while a fit is still far away.
    """

    functions: SkeletonFunctions
    measured: FloatArray
    weights: FloatArray
    numbers: FloatArray
    tie_softness: float = 0.0

    def __len__(self) -> int:
        return len(self.measured)

    def __call__(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H, g and cost of some frames at a posture; see `least_squares.Problem`."""
        H, g, cost = self._soft(posture, rows)
        for ball in self.functions.limited_balls:
            here = self.functions.kinematics.freedoms.ball_slice(ball.ball)
            add_limits(ball, posture, here, H, g, cost)
        return H, g, cost

    def curvature(self, posture: Posture, rows: IntArray) -> FloatArray:
        """What H lacks of the second derivative: that of the markers; ties and pulls bend little."""
        return self.functions.normal_equations.curvature(
            posture.scalars,
            posture.quaternions,
            self.measured[rows],
            self.weights[rows],
            self.numbers,
        )

    def information(self, posture: Posture, rows: IntArray) -> FloatArray:
        """(frames, freedoms, freedoms) J'WJ + prior, whatever limit is reached."""
        return self._soft(posture, rows)[0]

    def _soft(self, posture: Posture, rows: IntArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Everything but the limits."""
        H, g, cost = self.functions.normal_equations(
            posture.scalars,
            posture.quaternions,
            self.measured[rows],
            self.weights[rows],
            self.numbers,
        )
        self._add_ties(posture, H, g, cost)
        self._add_scalar_pulls(posture, H, g, cost)
        for pulled in self.functions.pulled_balls:
            here = self.functions.kinematics.freedoms.ball_slice(pulled[0])
            add_ball_pull(pulled, posture, here, H, g, cost)
        return H, g, cost

    def with_weights(self, weights: FloatArray) -> FrameProblem:
        """The same problem, markers weighing otherwise."""
        return replace(self, weights=weights)

    def with_tie_softness(self, softness: float) -> FrameProblem:
        """The same problem, its ties held less tightly."""
        return replace(self, tie_softness=softness)

    def take(self, rows: IntArray) -> FrameProblem:
        """The problem of some frames."""
        return replace(self, measured=self.measured[rows], weights=self.weights[rows])

    def rest(self) -> Posture:
        """Every coordinate at rest (or held), every orientation at identity."""
        rest = np.array([c.rest if c.held is None else c.held for c in self._free_coordinates()])
        balls = len(self.functions.kinematics.freedoms.balls)
        return upright_posture(rest, balls, len(self))

    def bounds(self) -> Bounds:
        """Limits from ranges; held coordinates and those that nothing here can see are pinned."""
        coordinates = self._free_coordinates()
        frames = len(self)
        lower = np.array([c.lower if c.held is None else c.held for c in coordinates])
        upper = np.array([c.upper if c.held is None else c.held for c in coordinates])
        pinned = ~self.seen() | self.functions.held
        return Bounds(np.tile(lower, (frames, 1)), np.tile(upper, (frames, 1)), pinned)

    def seen(self) -> BoolArray:
        """(frames, freedoms) Whether a weighing marker or a tie moves with a freedom, or a pull holds it."""
        moves = self.functions.moves_marker
        seen = (self.weights > 0).astype(float) @ moves.T.astype(float) > 0
        return np.asarray(seen | (self.pulled() | self.functions.ties.moved_by)[None, :])

    def pulled(self) -> BoolArray:
        """(freedoms,) Which freedoms have a `rest_sd`."""
        freedoms = self.functions.kinematics.freedoms
        pulled = np.zeros(freedoms.size, dtype=bool)
        for k, coordinate in enumerate(self._free_coordinates()):
            pulled[k] = coordinate.rest_sd is not None
        for ball, _ in self.functions.pulled_balls:
            pulled[freedoms.ball_slice(ball)] = True
        return pulled

    def _free_coordinates(self) -> list[Coordinate]:
        return [c for c in self.functions.skeleton.coordinates if c.follows is None]

    def _add_ties(self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray) -> None:
        ties = self.functions.ties
        if not len(ties):
            return
        residual, J = ties.residuals(posture, self.numbers)
        sd = np.hypot(ties.sd, self.tie_softness)
        residual, J = residual / sd, J / sd[:, None]
        H += np.swapaxes(J, 1, 2) @ J
        g -= np.einsum("nri,nr->ni", J, residual)
        cost += (residual**2).sum(axis=1) / 2

    def _add_scalar_pulls(
        self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray
    ) -> None:
        for k, coordinate in enumerate(self._free_coordinates()):
            if coordinate.rest_sd is None:
                continue
            departure = (coordinate.rest - posture.scalars[:, k]) / coordinate.rest_sd
            H[:, k, k] += coordinate.rest_sd**-2
            g[:, k] += departure / coordinate.rest_sd
            cost += departure**2 / 2
