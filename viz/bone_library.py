"""The bones that ship with the package: small files that `build_bones` wrote, read once each.

A NumPy archive holds points in steps of `STEP` and sorted faces, both as 16-bit differences from
the one before, which pack well: a fifth of a PLY of the same triangles. Beside them stand the anchors: the
joint centres and landmarks of the reference person, by which `bone_fitting` lays the bone into
another one's segment.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FOLDER = Path(__file__).parent / "bone_meshes"

STEP = 5e-5
"""m; a twentieth of a millimetre does not show, and 16 bits of it reach 1.6 m."""


@dataclass(frozen=True, slots=True)
class StoredBone:
    """One bone of the reference person, in its segment's axes.

    Attributes
    ----------
    points : (n, 3) m
    faces : (m, 3) int
        Indices of points, counter-clockwise as seen from outside.
    anchors : name -> (3,) m
    """

    points: FloatArray
    faces: NDArray[np.int64]
    anchors: Mapping[str, FloatArray]


def store_bone(path: Path, bone: StoredBone) -> None:
    """Write a bone; the same bone gives the same bytes."""
    names = sorted(bone.anchors)
    steps = np.round(bone.points / STEP).astype(np.int64)
    first, second, third = sorted_faces(bone.faces).T
    np.savez_compressed(
        path,
        points=np.diff(steps.T, prepend=0).astype(np.int16),
        faces=np.stack([np.diff(first, prepend=0), second - first, third - first]).astype(
            np.uint16
        ),
        anchor_names=np.array(names),
        anchor_points=np.array([bone.anchors[name] for name in names], dtype=np.float64),
    )


def sorted_faces(faces: NDArray[np.int64]) -> NDArray[np.int64]:
    """The same triangles, each from its smallest index on, in the order of these."""
    turned = (np.argmin(faces, axis=1)[:, None] + np.arange(3)) % 3
    faces = np.take_along_axis(faces, turned, axis=1)
    return np.asarray(faces[np.lexsort(faces.T[::-1])])


def read_bone(path: Path) -> StoredBone:
    """Read what `store_bone` wrote."""
    with np.load(path) as kept:
        anchors = dict(zip(kept["anchor_names"].tolist(), kept["anchor_points"], strict=True))
        points = np.cumsum(kept["points"].astype(np.int64), axis=1).T * STEP
        first, second, third = kept["faces"].astype(np.int64)
        first = np.cumsum(first)
        return StoredBone(points, np.stack([first, first + second, first + third], axis=1), anchors)


@cache
def shipped_bone(name: str) -> StoredBone:
    """A bone of the package by its name."""
    return read_bone(FOLDER / f"{name}.npz")
