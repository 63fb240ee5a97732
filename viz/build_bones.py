"""Write the bones that ship with the package: ``python -m condyle.viz.build_bones [BONE ...]``.

Half a minute once, and only after a design has changed; drawing reads the results. Each bone is
sampled, turned into triangles, thinned, and stored with the points it is placed by. The same
designs and libraries give the same bytes.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np

from condyle.viz.arm_bones import forearm, humerus, radius, ulna
from condyle.viz.bone_design import Design
from condyle.viz.bone_library import FOLDER, StoredBone, store_bone
from condyle.viz.foot_bones import foot, toes
from condyle.viz.hand_bones import (
    last_phalanx,
    middle_phalanx,
    palm,
    proximal_phalanx,
    thumb_last_phalanx,
    thumb_metacarpal,
    thumb_proximal_phalanx,
    whole_hand,
)
from condyle.viz.leg_bones import femur, shank, talus
from condyle.viz.pelvic_girdle import pelvis
from condyle.viz.rib_cage import rib_cage
from condyle.viz.shoulder_bones import clavicle, scapula
from condyle.viz.skull import skull
from condyle.viz.spine_bones import cervical_spine, lumbar_spine

DESIGNS: dict[str, Callable[[], Design]] = {
    design.__name__: design
    for design in (
        pelvis,
        femur,
        shank,
        talus,
        foot,
        toes,
        lumbar_spine,
        rib_cage,
        cervical_spine,
        skull,
        clavicle,
        scapula,
        humerus,
        ulna,
        radius,
        forearm,
        whole_hand,
        palm,
        thumb_metacarpal,
        thumb_proximal_phalanx,
        thumb_last_phalanx,
        proximal_phalanx,
        middle_phalanx,
        last_phalanx,
    )
}


def make_bone(name: str) -> StoredBone:
    """Sample and thin one bone's design."""
    design = DESIGNS[name]()
    points, faces = design.triangles()
    anchors = {anchor: np.asarray(at, dtype=np.float64) for anchor, at in design.anchors.items()}
    return StoredBone(points, faces, anchors)


def build(names: list[str], folder: Path) -> None:
    """Write the named bones, or all, and say how large they are."""
    folder.mkdir(exist_ok=True)
    for name in names or DESIGNS:
        bone, path = make_bone(name), folder / f"{name}.npz"
        store_bone(path, bone)
        print(f"{name}: {len(bone.faces)} faces, {path.stat().st_size / 1000:.1f} kB")


if __name__ == "__main__":
    unknown = set(sys.argv[1:]) - DESIGNS.keys()
    if unknown:
        sys.exit(f"No such bone: {', '.join(sorted(unknown))}. There are: {', '.join(DESIGNS)}.")
    build(sys.argv[1:], FOLDER)
