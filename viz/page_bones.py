"""The bones of a page: the same surfaces as in a picture, with fewer triangles, for they travel."""

from __future__ import annotations

import fast_simplification
import numpy as np
from numpy.typing import NDArray

from condyle.solver.results import FittedMotion
from condyle.viz.bone_library import sorted_faces
from condyle.viz.bones import build_bones
from condyle.viz.packing import Package
from condyle.viz.shapes import Surface

FloatArray = NDArray[np.float64]

MOST_FACES = 30_000
"""Triangles of a whole skeleton: at the size of a page's player more do not show."""

FEWEST_FACES = 150
"""A bone with no more triangles keeps them all."""

STEP = 1e-4
"""m; bone points are rounded to a tenth of a millimetre."""


def lighter(bone: Surface, share: float) -> tuple[FloatArray, NDArray[np.int64]]:
    """A bone's points (m) and faces, about that share of them."""
    if share >= 1.0 or len(bone.faces) <= FEWEST_FACES:
        return bone.points, bone.faces
    wanted = max(share, FEWEST_FACES / len(bone.faces))
    points, faces = fast_simplification.simplify(
        bone.points.astype(np.float32), bone.faces.astype(np.int32), target_reduction=1.0 - wanted
    )[:2]
    return np.asarray(points, dtype=np.float64), np.asarray(faces, dtype=np.int64)


def pack_bones(motion: FittedMotion, package: Package) -> None:
    """Add `bone points N` and `bone faces N` for each segment N, in its own axes."""
    bones = build_bones(motion)
    share = MOST_FACES / max(sum(len(bone.faces) for bone in bones), 1)
    for index, bone in enumerate(bones):
        points, faces = lighter(bone, share)
        first, second, third = sorted_faces(faces).T.astype(np.float64)
        package.add(f"bone points {index}", points.T, step=STEP)
        package.add(
            f"bone faces {index}", np.stack([first, second - first, third - first]), step=1.0
        )
