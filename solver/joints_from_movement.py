"""Centre and axis of a joint straight from a recording: names of markers in, one joint out.

For whoever wants a functional joint without a model. Calibration weighs the same evidence against
priors and other markers, and is the better choice where a model is at hand.
"""

from __future__ import annotations

from collections.abc import Sequence
from difflib import get_close_matches
from typing import Literal, TypeAlias

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.recording.recording import Recording
from condyle.solver.cluster_poses import LEAST_MARKERS, cluster_poses
from condyle.solver.functional_joints import (
    JointAxis,
    JointCentre,
    symmetrical_axis,
    symmetrical_centre,
)
from condyle.solver.sphere_centre import sphere_centre

FloatArray = NDArray[np.float64]
CentreMethod: TypeAlias = Literal["symmetrical", "spheres"]


def joint_centre(
    recording: Recording,
    *,
    parent: Sequence[str],
    child: Sequence[str],
    method: CentreMethod = "symmetrical",
) -> JointCentre:
    """The centre of a ball joint between two clusters of markers.

    Parameters
    ----------
    recording : of movement about at least two axes
    parent, child : labels of three or more markers on each segment
    method : "symmetrical" or "spheres"
        SCoRE (Ehrig et al. 2006), or Gamage & Lasenby 2002 with the correction of Halvorsen 2003.

    Returns
    -------
    JointCentre
        In the laboratory, frame by frame, and in the clusters' own axes: see :func:`condyle.solver.cluster_poses.cluster_poses`. A measuring
        aid, not a diagnosis; decisions about treatment belong to licensed practice.

    Raises
    ------
    FitError
        If a label is not in the recording, or too few frames know both segments.
    """
    parent_poses = cluster_poses(_positions(recording, "parent", parent))
    of_child = _positions(recording, "child", child)
    if method == "spheres":
        return sphere_centre(parent_poses, of_child)
    if method == "symmetrical":
        return symmetrical_centre(parent_poses, cluster_poses(of_child))
    raise FitError(f"no method is called '{method}'.\n  There are: symmetrical, spheres.")


def joint_axis(recording: Recording, *, parent: Sequence[str], child: Sequence[str]) -> JointAxis:
    """The axis of a hinge between two clusters of markers: SARA (Ehrig et al. 2007).

    Parameters, axes and errors as in :func:`joint_centre`.
    """
    parent_poses = cluster_poses(_positions(recording, "parent", parent))
    return symmetrical_axis(parent_poses, cluster_poses(_positions(recording, "child", child)))


def _positions(recording: Recording, segment: str, labels: Sequence[str]) -> FloatArray:
    """(frames, labels, 3) m."""
    if len(set(labels)) < LEAST_MARKERS:
        raise FitError(
            f"the {segment} has {len(set(labels))} markers.\n"
            f"  Name {LEAST_MARKERS} or more that do not lie on a line."
        )
    for label in labels:
        if label not in recording.labels:
            near = get_close_matches(label, recording.labels, n=1)
            hint = f"Did you mean '{near[0]}'? " if near else ""
            raise FitError(
                f"{recording.source} has no marker '{label}'.\n"
                f"  {hint}Its markers: {', '.join(recording.labels)}."
            )
    return recording.positions[:, [recording.labels.index(label) for label in labels]]
