"""How well the places on a fitted skeleton are known: covariances of markers and joint centres in one frame.

Results carry an sd for every coordinate, not how errors hang together, and a place depends on many: the hip's
and the knee's errors mostly cancel at the ankle, so sds alone would make every hand and foot look lost. Decided
here: the covariance is that of the frame's own markers (the inverse of the information in them, at the model's
sds, which hold skin and soft tissue), carried to the places by their derivatives. The results' sds say which
coordinates were open at all; what was held, at a limit or undetermined counts as known. Sizes and marker places
count as known too: what calibration left open is in the results' sds and not in these ellipsoids.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.errors import CondyleError
from condyle.model.growth import sized_joint_centres, sized_numbers
from condyle.model.kinematics import angle_report
from condyle.model.skeleton import LABORATORY, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.observability import covariance
from condyle.solver.posture import Posture, quaternions_of, upright_posture
from condyle.solver.results import FittedMotion
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

STEP = 1e-5
"""rad or m to either side: central differences of places are then good to 1e-8."""

SAME_PLACE = 2e-3
"""m; poses of the skeleton differ less from those in the results, or they are of two skeletons."""


@dataclass(frozen=True, slots=True)
class PosedSkeleton:
    """A skeleton in the posture of one frame of a solved trial.

    Attributes
    ----------
    numbers : of the sized skeleton, as its kinematics takes them
    """

    skeleton: Skeleton
    functions: SkeletonFunctions
    posture: Posture
    numbers: FloatArray
    upright: Upright


@dataclass(frozen=True, slots=True)
class KnownPlaces:
    """Places (n, 3) m with covariances (n, 3, 3) m^2, laboratory axes.

    Attributes
    ----------
    names : markers, then ``parent/child`` for joint centres
    pinned : names of coordinates that count as known: held, at a limit, or undetermined
    """

    names: tuple[str, ...]
    places: FloatArray
    covariances: FloatArray
    pinned: tuple[str, ...]


def pose_skeleton(
    skeleton: Skeleton, motion: FittedMotion, row: int, values: Mapping[str, float]
) -> PosedSkeleton:
    """Pose a skeleton as one row of a solved trial has it.

    Parameters
    ----------
    values : coordinate -> rad or m, in that row

    Raises
    ------
    CondyleError
        If the trial was solved with another skeleton.
    """
    upright = Upright(motion.up, motion.up_how)
    functions = SkeletonFunctions(skeleton)
    freedoms = functions.kinematics.freedoms
    numbers = sized_numbers(skeleton, upright.laboratory_from_upright)
    poses = motion.laboratory_from_segment[row]
    if motion.segment_names != skeleton.segment_names or not set(freedoms.scalars) <= set(values):
        raise _another_skeleton(motion, skeleton)
    scalars = np.array([values[name] for name in freedoms.scalars], dtype=np.float64)
    posture = upright_posture(scalars, len(freedoms.balls), 1)
    at_zero = functions.poses(posture, numbers)[0]
    for number, ball in enumerate(freedoms.balls):
        index, joint = next((i, j) for i, j in enumerate(skeleton.joints) if j.name == ball)
        parent = None if joint.parent == LABORATORY else skeleton.segment_index(joint.parent)
        turned = _between(at_zero, parent, index).T @ _between(poses, parent, index)
        posture.quaternions[0, number] = quaternions_of(Rotation.from_matrix(turned[None]))[0]
    posed = PosedSkeleton(skeleton, functions, posture, numbers, upright)
    apart = np.linalg.norm(functions.poses(posture, numbers)[0, :, :3, 3] - poses[:, :3, 3], axis=1)
    if not float(apart.max()) < SAME_PLACE:
        raise _another_skeleton(motion, skeleton)
    return posed


def _between(poses: FloatArray, parent: int | None, child: int) -> FloatArray:
    """(3, 3): the child's rotation in its parent, or in the laboratory."""
    if parent is None:
        return poses[child, :3, :3]
    return np.asarray(poses[parent, :3, :3].T @ poses[child, :3, :3])


def place_covariances(
    posed: PosedSkeleton, motion: FittedMotion, row: int, sd: Mapping[str, float]
) -> KnownPlaces:
    """Covariances of the used markers' fitted places and of the joint centres, in one row.

    Parameters
    ----------
    sd : coordinate or reported angle -> rad or m
        As the results state it; NaN where undetermined.
    """
    used, freedoms = motion.used[row], posed.functions.kinematics.freedoms
    stated = _stated(posed, sd)
    known = ~np.isfinite(stated) | (stated <= 0.0) | posed.functions.held
    positions = np.where(used[:, None], motion.measured[row], np.nan)[None]
    problem = frame_problem(posed.skeleton, posed.functions, positions, posed.upright)
    information = problem.information(posed.posture, np.array([0]))
    spread = covariance(information, ~known[None])[0]
    names, places, rates = _places(posed, used)
    named = [*freedoms.scalars, *(ball for ball in freedoms.balls for _ in range(3))]
    pinned = tuple(dict.fromkeys(name for name, fix in zip(named, known, strict=True) if fix))
    return KnownPlaces(names, places, rates @ spread @ np.swapaxes(rates, 1, 2), pinned)


def _stated(posed: PosedSkeleton, sd: Mapping[str, float]) -> FloatArray:
    """(freedoms,) The results' sds, an orientation's three angles in the places of its three numbers."""
    freedoms = posed.functions.kinematics.freedoms
    joints = {joint.name: joint for joint in posed.skeleton.joints}
    stated = [sd.get(name, np.nan) for name in freedoms.scalars]
    for ball in freedoms.balls:
        stated += [sd.get(name, np.nan) for name in angle_report(joints[ball]).names]
    return np.array(stated, dtype=np.float64)


def _places(
    posed: PosedSkeleton, used: NDArray[np.bool_]
) -> tuple[tuple[str, ...], FloatArray, FloatArray]:
    """Names, places (n, 3) and their rates (n, 3, freedoms)."""
    size = posed.functions.kinematics.freedoms.size
    steps = np.concatenate([np.zeros((1, size)), STEP * np.eye(size), -STEP * np.eye(size)])
    postures = posed.posture.take(np.zeros(len(steps), dtype=np.int64)).after(steps)
    markers = posed.functions.marker_positions(postures, posed.numbers)[:, used]
    poses = posed.functions.poses(postures, posed.numbers)
    names = [m for m, there in zip(posed.skeleton.marker_names, used, strict=True) if there]
    centres = []
    for parent, children in sized_joint_centres(posed.skeleton).items():
        pose = poses[:, posed.skeleton.segment_index(parent)]
        for child, place in children.items():
            names.append(f"{parent}/{child}")
            centres.append(pose[:, :3, :3] @ place + pose[:, :3, 3])
    everything = np.concatenate([markers, *(c[:, None] for c in centres)], axis=1)
    forward, backward = everything[1 : size + 1], everything[size + 1 :]
    rates = np.moveaxis((forward - backward) / (2.0 * STEP), 0, 2)
    return tuple(names), everything[0], rates


def _another_skeleton(motion: FittedMotion, skeleton: Skeleton) -> CondyleError:
    return CondyleError(
        f"{motion.name} was not solved with {skeleton.name}: segments, coordinates or sizes differ.\n"
        "  Give --subject FILE, the subject it was solved with, or solve the trial again."
    )
