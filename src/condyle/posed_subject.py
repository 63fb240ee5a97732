"""A solved trial's subject in the posture of one frame: its joint axes, and how well its places are known."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from condyle.model.errors import CondyleError
from condyle.model.kinematics import angle_report
from condyle.model.skeleton import Floating, Skeleton, Spherical
from condyle.solver.place_uncertainty import PosedSkeleton, place_covariances, pose_skeleton
from condyle.solver.results import FittedMotion

if TYPE_CHECKING:
    from condyle.viz.extras import Axes, Clouds


def posed_subject(trial: Path, motion: FittedMotion, row: int, skeleton: Skeleton) -> PosedSkeleton:
    """The skeleton as one row of a trial's results has it."""
    return pose_skeleton(skeleton, motion, row, _numbers(trial, skeleton, row, ""))


def joint_axes(posed: PosedSkeleton) -> Axes:
    """The axis of every coordinate that turns something, but for those of the root."""
    from condyle.viz.coordinate_senses import RestingModel, coordinate_senses
    from condyle.viz.extras import Axes

    here = RestingModel(posed.skeleton, posed.functions, posed.posture, posed.numbers)
    roots = {j.name for j in posed.skeleton.joints if isinstance(j.motion, Floating)}
    senses = [s for s in coordinate_senses(here) if s.turns and s.joint not in roots]
    return Axes(
        np.array([s.centre for s in senses]).reshape(-1, 3),
        np.array([s.direction for s in senses]).reshape(-1, 3),
    )


def known_places(
    trial: Path, posed: PosedSkeleton, motion: FittedMotion, row: int
) -> tuple[Clouds, tuple[str, ...]]:
    """Places with covariances, and the coordinates that count as known."""
    from condyle.viz.extras import Clouds

    sd = _numbers(trial, posed.skeleton, row, ".sd")
    known = place_covariances(posed, motion, row, sd)
    return Clouds(known.places, known.covariances), known.pinned


def _numbers(trial: Path, skeleton: Skeleton, row: int, ending: str) -> dict[str, float]:
    """Coordinates and reported angles of one row, or their sds, in rad and m."""
    units: dict[str, str] = {c.name: c.unit for c in skeleton.coordinates if c.follows is None}
    for joint in skeleton.joints:
        if isinstance(joint.motion, Floating | Spherical):
            units |= dict.fromkeys(angle_report(joint).names, "rad")
    columns = [f"{name}{ending}" for name in units]
    try:
        table = pd.read_parquet(trial / "coordinates.parquet", columns=columns)
    except (ValueError, KeyError, OSError) as fault:
        raise CondyleError(
            f"{trial}: coordinates.parquet is missing, or is not of {skeleton.name}.\n"
            "  Give --subject FILE, the subject it was solved with, or solve the trial again."
        ) from fault
    values = table.iloc[row].to_numpy(dtype=np.float64)
    return {
        name: float(np.radians(value) if unit == "rad" else value)
        for (name, unit), value in zip(units.items(), values, strict=True)
    }
