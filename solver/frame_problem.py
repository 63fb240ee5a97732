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
from condyle.solver.compiled_step import CompiledStep, joined_pairs, stepper_of
from condyle.solver.cone_limits import limit_terms, limited_balls
from condyle.solver.damped_step import Stepper, diagonal
from condyle.solver.least_squares import Bounds
from condyle.solver.normal_equations import NormalEquations
from condyle.solver.over_frames import FrameFunction, over_frames
from condyle.solver.posture import (
    Posture,
    upright_posture,
)
from condyle.solver.rest_pulls import pulled_balls
from condyle.solver.robust_loss import Loss
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
    moves_segment : (freedoms, segments) bool
        Whether a freedom moves a segment at all.
    moves_marker : (freedoms, markers) bool
        Whether a freedom moves a marker at all.
    stepper : Stepper
        What finds the steps of a fit, in the backend in use.
    """

    def __init__(self, skeleton: Skeleton) -> None:
        self.skeleton = skeleton
        self.kinematics = Kinematics(skeleton)
        self.ties = TieEquations(self.kinematics)
        also = joined_pairs(self.kinematics.freedoms, self.ties)
        self.normal_equations = NormalEquations(self.kinematics, also)
        self.limited_balls = limited_balls(self.kinematics)
        self.pulled_balls = pulled_balls(self.kinematics)
        inputs = [self.kinematics.scalars, self.kinematics.quaternions, self.kinematics.numbers]
        self._markers: FrameFunction = over_frames(
            ca.Function("markers", inputs, [ca.densify(self.kinematics.marker_positions)])
        )
        poses = [
            ca.vertcat(ca.vec(rotation.T), origin)
            for rotation, origin in zip(
                self.kinematics.rotations, self.kinematics.origins, strict=True
            )
        ]
        self._poses: FrameFunction = over_frames(
            ca.Function("poses", inputs, [ca.densify(ca.vertcat(*poses))])
        )
        self.moves_segment = self._moves_segment()
        owners = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
        self.moves_marker = self.moves_segment[:, np.array(owners, dtype=int)]
        self.stepper: Stepper = stepper_of(self.normal_equations.pattern)

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

    def _moves_segment(self) -> BoolArray:
        skeleton, freedoms = self.skeleton, self.kinematics.freedoms
        ancestors: list[set[int]] = []
        for i, joint in enumerate(skeleton.joints):
            above = set()
            if joint.parent != LABORATORY:
                above = ancestors[skeleton.segment_index(joint.parent)]
            ancestors.append(above | {i})
        moves = np.zeros((freedoms.size, len(skeleton.segments)), dtype=bool)
        for screw in self.kinematics.screws:
            moves[screw.freedom] |= [screw.joint in above for above in ancestors]
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
    pull_share : (freedoms,) or None
        What the pulls to rest weigh, relative to one measurement of `rest_sd` a frame.
    loss : Loss or None
        In place of the markers' squares.
    """

    functions: SkeletonFunctions
    measured: FloatArray
    weights: FloatArray
    numbers: FloatArray
    tie_softness: float = 0.0
    pull_share: FloatArray | None = None
    loss: Loss | None = None

    def __len__(self) -> int:
        return len(self.measured)

    @property
    def stepper(self) -> Stepper:
        """What finds its steps; see `least_squares.Structured`."""
        return self.functions.stepper

    def __call__(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H, g and cost of some frames at a posture; see `least_squares.Problem`."""
        H, g, cost = self._packed(posture, rows)
        return self.functions.normal_equations.pattern.dense(H), g, cost

    def curvature(self, posture: Posture, rows: IntArray) -> FloatArray:
        """What H lacks of the second derivative: that of the markers; ties and pulls bend little."""
        return self.functions.normal_equations.pattern.dense(self._bend(posture, rows))

    def for_stepper(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H, g and cost, H as `stepper` takes it: packed for the compiled one."""
        packed = isinstance(self.stepper, CompiledStep)
        return self._packed(posture, rows) if packed else self(posture, rows)

    def bend_for_stepper(self, posture: Posture, rows: IntArray) -> FloatArray:
        """The curvature as `stepper` takes it."""
        packed = isinstance(self.stepper, CompiledStep)
        return self._bend(posture, rows) if packed else self.curvature(posture, rows)

    def diagonal(self, H: FloatArray) -> FloatArray:
        """(frames, freedoms) Diagonals of matrices in the form that `stepper` takes."""
        if H.ndim == 3:
            return diagonal(H)
        return np.asarray(H[:, np.diag(self.functions.normal_equations.pattern.position)])

    def _packed(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Everything, H packed."""
        H, g, cost = self._soft(posture, rows)
        for ball in self.functions.limited_balls:
            self._add_ball(ball.ball, limit_terms(ball, posture), H, g, cost)
        return H, g, cost

    def _bend(self, posture: Posture, rows: IntArray) -> FloatArray:
        return self.functions.normal_equations.packed_curvature(
            posture.scalars,
            posture.quaternions,
            self.measured[rows],
            self._squared_and_weights(posture, rows)[1],
            self.numbers,
        )

    def information(self, posture: Posture, rows: IntArray) -> FloatArray:
        """(frames, freedoms, freedoms) J'WJ + prior, whatever limit is reached."""
        return self.functions.normal_equations.pattern.dense(self._soft(posture, rows)[0])

    def _soft(self, posture: Posture, rows: IntArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Everything but the limits, H packed."""
        squared, weights = self._squared_and_weights(posture, rows)
        H, g, cost = self.functions.normal_equations.packed(
            posture.scalars,
            posture.quaternions,
            self.measured[rows],
            weights,
            self.numbers,
        )
        if self.loss is not None:
            share = self.loss.weight(squared)
            cost += (self.loss.value(squared) - share * squared).sum(axis=1) / 2
        self._add_ties(posture, H, g, cost)
        self._add_scalar_pulls(posture, H, g, cost)
        for pull in self.functions.pulled_balls:
            here = self.functions.kinematics.freedoms.ball_slice(pull.ball)
            weight = 1.0 if self.pull_share is None else float(self.pull_share[here].mean())
            self._add_ball(pull.ball, pull.terms(posture, share=weight), H, g, cost)
        return H, g, cost

    def _add_ball(
        self,
        ball: int,
        terms: tuple[FloatArray, FloatArray, FloatArray],
        H: FloatArray,
        g: FloatArray,
        cost: FloatArray,
    ) -> None:
        here = self.functions.kinematics.freedoms.ball_slice(ball)
        freedoms = np.arange(here.start, here.stop)
        self.functions.normal_equations.pattern.add(H, freedoms, terms[0])
        g[:, here] += terms[1]
        cost += terms[2]

    def _squared_and_weights(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray]:
        """(frames, markers) e^2, empty without a loss, and what each marker weighs in the equations."""
        weights = self.weights[rows]
        if self.loss is None:
            return np.zeros((len(rows), 0)), weights
        squared = self.squared_errors(posture, rows)
        return squared, weights * self.loss.weight(squared)

    def squared_errors(self, posture: Posture, rows: IntArray) -> FloatArray:
        """(frames, markers) e^2, the squared distance over the squared sd; 0 where missing."""
        away = self.measured[rows] - self.functions.marker_positions(posture, self.numbers)
        return np.asarray(self.weights[rows] * (away**2).sum(axis=2))

    def with_loss(self, loss: Loss | None) -> FrameProblem:
        """The same problem with another loss."""
        return replace(self, loss=loss)

    def with_weights(self, weights: FloatArray) -> FrameProblem:
        """The same problem, markers weighing otherwise."""
        return replace(self, weights=weights)

    def with_pull_share(self, share: FloatArray) -> FrameProblem:
        """The same problem, its pulls to rest weighing (freedoms,) times as much."""
        return replace(self, pull_share=share)

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
        return np.asarray(self.shown() | self.pulled()[None, :])

    def shown(self) -> BoolArray:
        """(frames, freedoms) Whether a weighing marker or a tie moves with a freedom."""
        # A product of truth values; of numbers, it would wake the threads of BLAS for nothing.
        shown = (self.weights > 0) @ self.functions.moves_marker.T
        return np.asarray(shown | self.functions.ties.moved_by[None, :])

    def pulled(self) -> BoolArray:
        """(freedoms,) Which freedoms have a `rest_sd`."""
        freedoms = self.functions.kinematics.freedoms
        pulled = np.zeros(freedoms.size, dtype=bool)
        for k, coordinate in enumerate(self._free_coordinates()):
            pulled[k] = coordinate.rest_sd is not None
        for pull in self.functions.pulled_balls:
            pulled[freedoms.ball_slice(pull.ball)] = True
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
        moved = np.flatnonzero(ties.moved_by)
        own = J[:, :, moved]
        self.functions.normal_equations.pattern.add(H, moved, np.swapaxes(own, 1, 2) @ own)
        g -= np.einsum("nri,nr->ni", J, residual)
        cost += (residual**2).sum(axis=1) / 2

    def _add_scalar_pulls(
        self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray
    ) -> None:
        position = self.functions.normal_equations.pattern.position
        for k, coordinate in enumerate(self._free_coordinates()):
            if coordinate.rest_sd is None:
                continue
            share = 1.0 if self.pull_share is None else float(self.pull_share[k])
            sd = coordinate.rest_sd / np.sqrt(share)
            departure = (coordinate.rest - posture.scalars[:, k]) / sd
            H[:, position[k, k]] += sd**-2
            g[:, k] += departure / sd
            cost += departure**2 / 2
