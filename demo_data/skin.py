"""Skin that slides over bone: markers that leave their place as the joints beside them bend.

Decided here: the law. In the segment's axes marker m is displaced by

    A (u_m sin(p - p0) + v_m sin(d - d0)) / sqrt(2)

with p and d the angles of the joints above and below, p0 and d0 their mean in the static trial, and
u_m, v_m fixed unit vectors, half of their direction shared by the segment's markers (skin moves as
a sheet) and half their own. It is locked to the movement, as real skin is (Leardini 2005, Gait &
Posture 21:212), so averaging over frames does not remove it.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from condyle.demo_data.person import SEED
from condyle.model.skeleton import Skeleton

FloatArray = NDArray[np.float64]

AMPLITUDES = {
    "pelvis": 0.005,
    "thigh": 0.013,
    "shank": 0.007,
    "foot": 0.002,
    "thorax": 0.005,
    "head": 0.001,
    "clavicle": 0.010,
    "upper_arm": 0.010,
    "ulna": 0.003,
    "forearm": 0.003,
    "hand": 0.002,
}
"""m at right angles. Peters 2010 reviews up to 30 mm and more for the thigh, 15 mm for the shank, a
few mm for the foot (from memory, loose bound); Fiorentino et al. 2017 measured 3 to 54 mm over
pelvis and thigh. Trunk and arms by our own judgement: shoulder and upper arm most. A moderate, lean
person."""

BESIDE = {
    "pelvis": ("hip_flexion_right", "hip_flexion_left"),
    "thigh": ("hip_flexion", "knee_flexion"),
    "shank": ("knee_flexion", "ankle_dorsiflexion"),
    "foot": ("ankle_dorsiflexion", "subtalar_inversion"),
    "thorax": ("shoulder_elevation_right", "shoulder_elevation_left"),
    "head": ("neck_flexion", "neck_twist"),
    "clavicle": ("shoulder_elevation", "clavicle_elevation"),
    "upper_arm": ("shoulder_elevation", "elbow_flexion"),
    "ulna": ("elbow_flexion", "forearm_pronation"),
    "forearm": ("elbow_flexion", "forearm_pronation"),
    "hand": ("forearm_pronation", "wrist_flexion"),
}
"""The angles that a segment's skin follows; a limb's are those of its own side."""


def skin_displacements(
    skeleton: Skeleton, told: Mapping[str, FloatArray], static: Mapping[str, FloatArray]
) -> FloatArray:
    """(frames, markers, 3) m in the markers' segments.

    Parameters
    ----------
    told, static : reported name -> (frames,) rad
        Of this trial and of the static one.
    """
    directions = skin_directions(skeleton)
    moved = []
    for i, marker in enumerate(skeleton.markers):
        kind, side = without_side(marker.segment)
        names = [f"{name}_{side}" if side else name for name in BESIDE[kind]]
        bent = np.column_stack([np.sin(told[name] - static[name].mean()) for name in names])
        moved.append(AMPLITUDES[kind] / np.sqrt(2) * bent @ directions[i])
    return np.stack(moved, axis=1)


def without_side(segment: str) -> tuple[str, str]:
    """Kind of segment, and its side if it has one."""
    for side in ("right", "left"):
        if segment.endswith(f"_{side}"):
            return segment.removesuffix(f"_{side}"), side
    return segment, ""


def skin_directions(skeleton: Skeleton) -> FloatArray:
    """(markers, 2, 3) unit vectors u and v; always the same ones."""
    rng = np.random.default_rng([SEED, 1])
    shared = {name: unit(rng.normal(size=(2, 3))) for name in skeleton.segment_names}
    own = unit(rng.normal(size=(len(skeleton.markers), 2, 3)))
    return unit(own + np.stack([shared[marker.segment] for marker in skeleton.markers]))


def unit(vectors: FloatArray) -> FloatArray:
    """Vectors (..., 3) of length one."""
    return np.asarray(vectors / np.linalg.norm(vectors, axis=-1, keepdims=True))
