"""The study made anew: ``python -m condyle.demo_data.make [DIR]``.

Without DIR the files that ship are written over. Nothing is drawn that is not seeded, so the same
sources give the same study.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.demo_data.cameras import record
from condyle.demo_data.movements import RATE, Plan, reach_aside_plan, static_plan, step_up_plan
from condyle.demo_data.person import invent_person
from condyle.demo_data.reaching import UPRIGHT, posture_of
from condyle.demo_data.skin import skin_displacements
from condyle.demo_data.study import PERSON_TRUTH, recording_file, truth_file
from condyle.demo_data.truth import TrialTruth, write_person, write_truth
from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.recording.c3d_writing import write_c3d
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values

FloatArray = NDArray[np.float64]


def make_study(directory: Path) -> None:
    """Write every file of the study into a folder that exists."""
    invented = invent_person()
    skeleton = invented.skeleton
    functions = SkeletonFunctions(skeleton)
    write_person(directory / PERSON_TRUTH, invented)
    static: dict[str, FloatArray] = {}
    for plan in (static_plan(), step_up_plan(), reach_aside_plan()):
        posture = posture_of(plan, skeleton)
        told = reported_values(functions.kinematics, posture)
        values = {name: value for name, (value, _) in told.items()}
        static = static or values
        displaced = skin_displacements(skeleton, values, static)
        positions = marker_positions(functions, posture, displaced)
        recording = record(plan.name, plan.first_frame, skeleton.marker_names, positions)
        write_c3d(directory / recording_file(plan.name), recording)
        write_truth(directory / truth_file(plan.name), trial_truth(plan, skeleton, values))


def marker_positions(
    functions: SkeletonFunctions, posture: Posture, displaced: FloatArray
) -> FloatArray:
    """(frames, markers, 3) m in the laboratory, skin displaced (in the segments)."""
    skeleton = functions.skeleton
    numbers = sized_numbers(skeleton, UPRIGHT.laboratory_from_upright)
    segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
    poses = functions.poses(posture, numbers)[:, segments]
    marker_in_segment = sized_marker_at(skeleton) + displaced
    turned = np.einsum("nmij,nmj->nmi", poses[..., :3, :3], marker_in_segment)
    return np.asarray(turned + poses[..., :3, 3])


def trial_truth(plan: Plan, skeleton: Skeleton, values: dict[str, FloatArray]) -> TrialTruth:
    """The truth on the recording's own clock."""
    units = {name: "rad" for name in values}
    units |= {coordinate.name: coordinate.unit for coordinate in skeleton.coordinates}
    frame = plan.first_frame + np.arange(len(plan.forward), dtype=np.int64)
    return TrialTruth(frame, (frame - 1) / RATE, values, units)


def main(arguments: list[str]) -> None:
    """Write the study into the folder that was given, else over the files that ship."""
    directory = Path(arguments[0]) if arguments else Path(__file__).parent
    directory.mkdir(parents=True, exist_ok=True)
    make_study(directory)


if __name__ == "__main__":
    main(sys.argv[1:])
