"""Which bone a segment gets: by the landmarks of the trade that it carries, not by its name.

So a thigh of an animal, which has the name but no ISB landmarks, stays a plain shaft, and a person's model
with names of its own gets bones. Only finger bones, which have no such landmarks, go by name. Left
segments are looked at in the mirror: all that follows is a right side.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.viz.skeleton_plan import NEAR, SegmentPlan, side_of

FloatArray = NDArray[np.float64]

PARENT = "parent."
"""Before the name of a parent's landmark: known to a segment, but it does not turn with it."""


@dataclass(frozen=True, slots=True)
class Sign:
    """What tells a bone.

    Attributes
    ----------
    bone : str
        Name of the stored bone.
    needs : names
        Points that the segment must know, as `known_points` gives them.
    named : regular expression
        Of the segment's name without its side; any where it is empty.
    children : int, optional
        How many it must have.
    bare : bool
        Only where it carries no landmark itself.
    """

    bone: str
    needs: tuple[str, ...]
    named: str = ""
    children: int | None = None
    bare: bool = False


FINGER = "(index|middle|ring|little)"

SIGNS = (
    Sign("pelvis", ("ASIS_right", "ASIS_left", "PSIS_right", "PSIS_left")),
    Sign("rib_cage", ("IJ", "PX", "C7", "T8")),
    Sign("skull", ("vertex",)),
    Sign("skull", ("proximal",), named="head", bare=True),
    Sign("femur", ("GT", "distal")),
    Sign("femur", ("GT", "FE_lateral", "FE_medial")),
    Sign("shank", ("LM", "MM", "proximal")),
    Sign("foot", ("CA", "MT1", "MT5")),
    Sign("talus", (PARENT + "LM", PARENT + "MM"), children=1, bare=True),
    Sign("toes", (PARENT + "CA", PARENT + "MT1", PARENT + "MT5"), children=0, bare=True),
    Sign("lumbar_spine", (PARENT + "ASIS_right", PARENT + "ASIS_left", "up"), bare=True),
    Sign("cervical_spine", (PARENT + "C7", "up"), bare=True),
    Sign("clavicle", ("AC", "proximal")),
    Sign("scapula", ("AA", "TS", "AI")),
    Sign("humerus", ("EL", "EM", "proximal")),
    Sign("forearm", ("RS", "US")),
    Sign("radius", ("RS", "proximal")),
    Sign("ulna", ("US", "proximal")),
    Sign("whole_hand", ("MC2", "MC5"), children=0),
    Sign("palm", ("MC2", "MC5")),
    Sign("thumb_metacarpal", ("proximal", "distal"), named="thumb_metacarpal"),
    Sign("thumb_proximal_phalanx", ("proximal", "distal"), named="thumb_proximal"),
    Sign("thumb_last_phalanx", ("proximal", "distal"), named="thumb_distal"),
    Sign("proximal_phalanx", ("proximal", "distal"), named=f"{FINGER}_proximal"),
    Sign("middle_phalanx", ("proximal", "distal"), named=f"{FINGER}_middle"),
    Sign("last_phalanx", ("proximal", "distal"), named=f"{FINGER}_distal"),
)
"""The first that fits is taken."""


def bone_of(plan: SegmentPlan) -> str | None:
    """The stored bone for a segment, or None."""
    points, stem = known_points(plan), stem_of(plan.name, side_of(plan.name))
    for sign in SIGNS:
        if (
            points.keys() >= set(sign.needs)
            and sign.children in (None, len(plan.centres))
            and (not sign.named or re.fullmatch(sign.named, stem))
            and not (sign.bare and plan.landmarks)
        ):
            return sign.bone
    return None


def known_points(plan: SegmentPlan) -> dict[str, FloatArray]:
    """A segment's joint centres and landmarks (m) by names without its side, in the mirror for a left one.

    ``proximal`` is the joint on its parent; ``distal`` the only far joint, or the end that the
    only landmark of a last segment is; ``up`` the same, of a segment in the middle; ``child_right``,
    ``child_left`` and ``child_middle`` the only joint on that side; ``to.<segment>`` any joint; and
    ``parent.<landmark>`` a landmark of its parent.
    """
    side = side_of(plan.name)
    points = {stem_of(name, side): point for name, point in plan.landmarks.items()}
    points |= {f"to.{stem_of(name, side)}": point for name, point in plan.centres.items()}
    points |= {
        PARENT + stem_of(name, side): point
        for name, point in plan.parent_points.items()
        if name != plan.parent
    }
    if plan.parent is not None:
        points["proximal"] = plan.proximal
    points |= ends(plan, side)
    mirror = np.array([1.0, 1.0, -1.0 if side == "left" else 1.0])
    return {name: point * mirror for name, point in points.items()}


def ends(plan: SegmentPlan, side: str) -> dict[str, FloatArray]:
    """The points that are known by where they lie and not by their names."""
    far = plan.far_centres()
    if not plan.centres:
        marks = list(plan.landmarks.values())
        far = marks if len(marks) == 1 and np.linalg.norm(marks[0] - plan.proximal) > NEAR else []
    points = {"distal": far[0]} if len(far) == 1 else {}
    if side:
        return points
    if len(far) == 1 and plan.centres:
        points["up"] = far[0]
    for name in ("right", "left", ""):
        there = [point for child, point in plan.centres.items() if side_of(child) == name]
        if len(there) == 1:
            points[f"child_{name or 'middle'}"] = there[0]
    return points


def stem_of(name: str, side: str) -> str:
    """The name without the segment's own side."""
    return name.removesuffix(f"_{side}") if side else name
