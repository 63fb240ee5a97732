"""A solved trial as motion for robotics tools: one column for every moving joint of the URDF.

Decided here: radians and metres; a floating joint as the pose of its segment in the laboratory as
recorded, its quaternion scalar first and continuous in sign. Joints that follow others have their
columns too, so that a reader needs neither mimic elements nor the table of functions.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from condyle.model.errors import CondyleError
from condyle.model.robot import RobotDescription, joint_numbers
from condyle.model.robot_chains import robot_description
from condyle.model.skeleton import Floating, Skeleton, Spherical
from condyle.solver.result_files import load_motion
from condyle.solver.result_tables import continuous_quaternions
from condyle.solver.results import FittedMotion
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

POSE = ("x", "y", "z", "qw", "qx", "qy", "qz")
"""What a floating joint's columns end in, after the joint's name and a dot."""


def motion_table(folder: Path, skeleton: Skeleton) -> pd.DataFrame:
    """Time (s), then each floating joint's pose, then each joint's number (rad or m).

    Parameters
    ----------
    folder : what `solve` wrote for one trial
    skeleton : the sized skeleton that it was solved with

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or one of another skeleton.
    """
    motion = load_motion(folder)
    upright = Upright(motion.up, "of the trial").laboratory_from_upright
    description = robot_description(skeleton, upright)
    columns: dict[str, FloatArray] = {"time": motion.time}
    columns |= _poses(motion, description, folder)
    columns |= joint_numbers(description, _drivers(folder, skeleton))
    return pd.DataFrame(columns)


def _poses(
    motion: FittedMotion, description: RobotDescription, folder: Path
) -> dict[str, FloatArray]:
    if set(motion.segment_names) != set(description.link_of_segment):
        raise _another_skeleton(folder, description.name)
    quaternions = continuous_quaternions(motion.laboratory_from_segment[..., :3, :3])
    columns: dict[str, FloatArray] = {}
    for joint, segment in description.segment_of_floating.items():
        i = motion.segment_names.index(segment)
        pose = np.hstack([motion.laboratory_from_segment[:, i, :3, 3], quaternions[:, i]])
        columns |= {f"{joint}.{part}": pose[:, k] for k, part in enumerate(POSE)}
    return columns


def _drivers(folder: Path, skeleton: Skeleton) -> dict[str, FloatArray]:
    """Free coordinates and reported angles, from degrees to radians."""
    units: dict[str, str] = {c.name: c.unit for c in skeleton.coordinates if c.follows is None}
    for joint in skeleton.joints:
        if isinstance(joint.motion, Floating | Spherical):
            units |= dict.fromkeys(joint.motion.angles.names, "rad")
    try:
        table = pd.read_parquet(folder / "coordinates.parquet", columns=list(units))
    except FileNotFoundError as fault:
        raise CondyleError(
            f"{folder}: coordinates.parquet is missing.\n  Solve the trial again."
        ) from fault
    except (ValueError, KeyError, OSError) as fault:
        raise _another_skeleton(folder, skeleton.name) from fault
    return {
        name: np.radians(table[name].to_numpy(np.float64))
        if unit == "rad"
        else table[name].to_numpy(np.float64)
        for name, unit in units.items()
    }


def _another_skeleton(folder: Path, name: str) -> CondyleError:
    return CondyleError(
        f"{folder}: this trial was not solved with {name}: segments or coordinates differ.\n"
        "  Give --subject FILE, the subject it was solved with, or solve the trial again."
    )
