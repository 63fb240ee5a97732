"""From a plan to joint coordinates: the pelvis travels, the feet stay where they were put.

A leg has six freedoms and a foot's pose takes six, so the legs follow from pelvis and feet without
anything being chosen: Newton's method on foot poses, all frames at once. What is above the pelvis
is told by `upper_body`. No marker and nothing of the fit is involved.
"""

from __future__ import annotations

from dataclasses import dataclass

import casadi as ca
import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.demo_data.foot_tracks import FootTrack
from condyle.demo_data.movements import RATE, Plan
from condyle.demo_data.upper_body import angle, shoulder
from condyle.model.growth import size_factors, sized_lengths, sized_numbers
from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Skeleton
from condyle.solver.over_frames import Replay
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

UPRIGHT = Upright("+Z", "as invented")
"""The invented laboratory: Z up, which is not the model's own axis."""

TOE_JOINT_ON_SOLE = (0.1235, -0.056, 0.0125)
"""m in the reference foot: below the toe joint, as deep as the sole (ankle height 0.039 of stature,
Drillis & Contini 1966)."""

SMOOTHING = 0.16
"""s, to either side: how far ahead the pelvis makes room for a leg that will not reach."""

STARTING_POSTURE = {"hip_flexion": 0.5, "knee_flexion": 0.8, "ankle_dorsiflexion": 0.2}
"""rad; a bent knee, so that Newton's method stays on the side on which knees bend."""

LONGEST_STEP, TOLERANCE, MOST_STEPS = 0.2, 1e-12, 60
"""rad; m; Newton steps. A leg far from singular takes about ten."""

LEG = ("hip_", "knee_", "ankle_", "subtalar_")
"""How the names of the coordinates begin that follow from pelvis and feet."""

PROBE = 0.1
"""m; the poses of feet are compared at three points this far along their axes."""


@dataclass(frozen=True, slots=True)
class PelvisPath:
    """The pelvis in the walking person's axes.

    Attributes
    ----------
    origin : (frames, 3) m
    orientation : (frames,)
    """

    origin: FloatArray
    orientation: Rotation


def posture_of(plan: Plan, skeleton: Skeleton) -> Posture:
    """The posture of every frame of a plan.

    Raises
    ------
    ValueError
        Where a foot is out of reach: the plan is at fault.
    """
    pelvis = pelvis_path(plan, skeleton)
    room_from_person = heading_turn(plan)
    kinematics = Kinematics(skeleton)
    names = kinematics.freedoms.scalars
    scalars = np.zeros((len(pelvis.origin), len(names)))
    origin = in_laboratory(room_from_person.apply(pelvis.origin))
    scalars[:, [names.index(f"pelvis_{axis}") for axis in "xyz"]] = origin
    for side, track in (("right", plan.right), ("left", plan.left)):
        for name, value in STARTING_POSTURE.items():
            scalars[:, names.index(f"{name}_{side}")] = value
        # the toes stay on the ground while the heel rises
        toes = names.index(f"toes_extension_{side}")
        scalars[:, toes] = np.maximum(track.pitch, 0.0)
    time = np.arange(len(scalars)) / RATE
    for k, name in enumerate(names):
        if not name.startswith(("pelvis_", "toes_", *LEG)):
            scalars[:, k] = angle(plan.name, name, time)
    balls = {
        "root": room_from_person * pelvis.orientation,
        **{f"shoulder_{side}": shoulder(plan.name, side, time) for side in ("right", "left")},
    }
    quaternions = np.stack(
        [quaternions_of(balls[name]) for name in kinematics.freedoms.balls], axis=1
    )
    targets = np.concatenate(
        [foot_targets(track, skeleton, room_from_person) for track in (plan.right, plan.left)],
        axis=1,
    )
    return reached(kinematics, Posture(scalars, quaternions), targets)


def heading_turn(plan: Plan) -> Rotation:
    """The walking person's axes in the upright laboratory."""
    return Rotation.from_euler("y", plan.heading)


def in_laboratory(points: FloatArray) -> FloatArray:
    """Upright points (..., 3) as the laboratory writes them."""
    return np.asarray(points @ UPRIGHT.laboratory_from_upright.T)


def pelvis_path(plan: Plan, skeleton: Skeleton) -> PelvisPath:
    """Where the pelvis goes: as high as planned, but never higher than both legs reach."""
    angles = np.column_stack([plan.rotation, plan.obliquity, -plan.tilt])
    orientation = Rotation.from_euler("YXZ", angles)
    lengths = sized_lengths(skeleton)
    ceilings = []
    for side, track in (("right", plan.right), ("left", plan.left)):
        leg = plan.straightness * (lengths[f"thigh_{side}"] + lengths[f"shank_{side}"])
        hip = next(j for j in skeleton.joints if j.name == f"hip_{side}")
        grown = np.array(hip.at) * size_factors(skeleton)[skeleton.segment_index("pelvis")]
        hip_from_pelvis = orientation.apply(grown)
        ankle = ankle_centre(track, skeleton)
        away = plan.forward + hip_from_pelvis[:, 0] - ankle[:, 0]
        aside = plan.rightward + hip_from_pelvis[:, 2] - ankle[:, 2]
        reach = np.sqrt(leg**2 - away**2 - aside**2)
        ceilings.append(ankle[:, 1] + reach - hip_from_pelvis[:, 1])
    level = min(ceiling[0] for ceiling in ceilings)
    height = below(np.minimum.reduce([level + plan.height, *ceilings]))
    return PelvisPath(np.column_stack([plan.forward, height, plan.rightward]), orientation)


def below(ceiling: FloatArray) -> FloatArray:
    """A smooth curve nowhere above the ceiling: its least value nearby, averaged as far around."""
    reach = round(SMOOTHING * RATE)
    padded = np.pad(ceiling, 2 * reach, mode="edge")
    least = np.lib.stride_tricks.sliding_window_view(padded, 2 * reach + 1).min(axis=1)
    window = np.hanning(2 * reach + 3)[1:-1]
    return np.convolve(least, window / window.sum(), mode="valid")


def ankle_centre(track: FootTrack, skeleton: Skeleton) -> FloatArray:
    """(frames, 3) m, about: the talus is taken to be level with the foot."""
    subtalar = next(j for j in skeleton.joints if j.name == "subtalar_right")
    talus = size_factors(skeleton)[skeleton.segment_index("talus_right")]
    above = track.orientation().apply(-np.array(subtalar.at) * talus)
    return np.asarray(foot_origin(track, skeleton) + above)


def foot_origin(track: FootTrack, skeleton: Skeleton) -> FloatArray:
    """(frames, 3) m, the foot's own origin in the walking person's axes."""
    growth = size_factors(skeleton)[skeleton.segment_index("foot_right")]
    sole = np.array(TOE_JOINT_ON_SOLE) * growth * (1, 1, track.side)
    return np.asarray(track.toe_joint - track.orientation().apply(sole))


def foot_targets(track: FootTrack, skeleton: Skeleton, room_from_person: Rotation) -> FloatArray:
    """(frames, 9) m, the three probe points of a foot in the laboratory."""
    origin = room_from_person.apply(foot_origin(track, skeleton))
    axes = (room_from_person * track.orientation()).as_matrix()
    points = origin[:, None, :] + PROBE * np.swapaxes(axes, 1, 2)
    return in_laboratory(points).reshape(len(points), 9)


def reached(kinematics: Kinematics, start: Posture, targets: FloatArray) -> Posture:
    """The posture in which both feet are at their targets."""
    names = kinematics.freedoms.scalars
    legs = [i for i, n in enumerate(names) if n.startswith(LEG)]
    probes = probe_function(kinematics, legs)
    numbers = sized_numbers(kinematics.skeleton, UPRIGHT.laboratory_from_upright)
    scalars, quaternions = start.scalars.copy(), start.quaternions.reshape(len(start), -1)
    for _ in range(MOST_STEPS):
        points, flat = probes(scalars, quaternions, numbers)
        misfit = targets - points
        if np.abs(misfit).max() < TOLERANCE:
            return Posture(scalars, start.quaternions)
        J = flat.reshape(len(scalars), -1, len(legs))
        normal = np.swapaxes(J, 1, 2) @ J
        step = np.linalg.solve(normal, np.einsum("nij,ni->nj", J, misfit)[..., None])[..., 0]
        longest = np.abs(step).max(axis=1, keepdims=True)
        scalars[:, legs] += step * np.minimum(1.0, LONGEST_STEP / np.maximum(longest, 1e-30))
    frame = int(np.abs(misfit).max(axis=1).argmax())
    raise ValueError(f"a foot is out of reach, farthest in frame {frame} of the plan")


def probe_function(kinematics: Kinematics, legs: list[int]) -> Replay:
    """Scalars, quaternions and numbers to the probe points (18) and their derivatives (18 legs)."""
    points = []
    for segment in ("foot_right", "foot_left"):
        index = kinematics.skeleton.segment_index(segment)
        rotation, origin = kinematics.rotations[index], kinematics.origins[index]
        points += [origin + PROBE * rotation[:, axis] for axis in range(3)]
    stacked = ca.vertcat(*points)
    columns = ca.vertcat(*[kinematics.scalars[i] for i in legs])
    unknown = ca.SX.sym("unknown", len(legs))
    J = ca.jacobian(ca.substitute(stacked, columns, unknown), unknown)
    J = ca.substitute(J, unknown, columns)
    inputs = [kinematics.scalars, kinematics.quaternions, kinematics.numbers]
    outputs = [ca.densify(stacked), ca.densify(ca.vec(J.T))]
    return Replay(ca.Function("probes", inputs, outputs))
