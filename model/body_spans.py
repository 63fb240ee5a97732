"""Where the parts of the body that tables describe begin and end on a skeleton.

Decided here: which segments make up a part, and which of their joints and landmarks stand for the table's
points. Segments are known by the names of the shipped models; a span is told in the axes of the
part's first segment. None: the skeleton lacks a point of it.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import cast

import numpy as np
from numpy.typing import NDArray

from condyle.model.anatomy import Anatomy, Span, span
from condyle.model.body_table_numbers import TrunkLengths
from condyle.model.skeleton import Person

FloatArray = NDArray[np.float64]

SIDES = ("_right", "_left")
HEEL_SHARE = 0.057 / 0.2581
"""The heel's back lies this share of foot length behind the ankle's centre [practice, as the models]."""

FINGERTIP_SHARE = 0.7900 / 0.3624
"""Wrist to fingertip over wrist to third knuckle: one centre told by two ends (de Leva 1996, men)."""

LINE_PARTS = {
    "head": ("head",),
    "upper trunk": ("thorax",),
    "middle trunk": ("abdomen",),
    "lower trunk": ("pelvis",),
    "upper arm": ("upper_arm",),
    "forearm": ("forearm",),
    "hand": ("hand",),
    "thigh": ("thigh",),
    "shank": ("shank",),
    "foot": ("foot", "talus", "toes"),
}
"""de Leva's part -> the segments that share it."""

AXES_PARTS = {
    "head and neck": ("head",),
    "torso": ("thorax", "abdomen"),
    "pelvis": ("pelvis",),
    **{
        name: LINE_PARTS[name]
        for name in ("upper arm", "forearm", "hand", "thigh", "shank", "foot")
    },
}
"""Dumas' part -> the segments that share it."""


def forearm_span(anatomy: Anatomy, side: str) -> Span | None:
    """Elbow centre to wrist centre; the elbow's is the ulna's origin where the model has an ulna."""
    forearm = f"forearm{side}"
    elbow = anatomy.origin(f"ulna{side}", forearm)
    wrist = anatomy.joint_between(forearm, f"hand{side}")
    return anatomy.tape(forearm) if elbow is None or wrist is None else span(elbow, wrist)


def sole_span(anatomy: Anatomy, side: str) -> Span | None:
    """The back of the heel to the tip of the toes, level, at the height of the heel bone's back."""
    foot, toes = f"foot{side}", f"toes{side}"
    if toes not in anatomy.segments:
        whole = anatomy.tape(foot)
        return (
            None
            if whole is None
            else span(whole.start, whole.end * [1, 0, 1] + whole.start * [0, 1, 0])
        )
    tip, origin = anatomy.tape(toes), anatomy.origin(toes, foot)
    heel_bone = anatomy.landmark(foot, f"CA{side}")
    if tip is None or origin is None or heel_bone is None:
        return None
    ankle = ankle_centre(anatomy, side)[0]
    length = ((origin + tip.end)[0] - ankle) / (1 - HEEL_SHARE)
    heel = np.array([ankle - HEEL_SHARE * length, heel_bone[1], 0.0])
    return span(heel, heel + np.array([length, 0.0, 0.0]))


def ankle_centre(anatomy: Anatomy, side: str) -> FloatArray:
    """(3,) m in the foot: the talus' origin, or the foot's own where there is no talus."""
    found = anatomy.origin(f"talus{side}", f"foot{side}")
    return np.zeros(3) if found is None else found


def middle_of_hips(anatomy: Anatomy) -> FloatArray | None:
    """(3,) m in the pelvis: between the hips, or the pelvis' origin in a model without thighs."""
    if "pelvis" not in anatomy.segments:
        return None
    hips = [anatomy.joint_between("pelvis", f"thigh{side}") for side in SIDES]
    known = [hip for hip in hips if hip is not None]
    return np.asarray(np.mean(known, axis=0) * [1, 1, 0]) if known else np.zeros(3)


def line_span(anatomy: Anatomy, trunk: TrunkLengths, part: str, side: str) -> Span | None:
    """Where de Leva's ends are."""
    if part in ("upper trunk", "middle trunk", "lower trunk"):
        return _trunk_span(anatomy, trunk, part)
    special = {"forearm": forearm_span, "foot": sole_span}
    if part in special:
        return special[part](anatomy, side)
    return anatomy.tape(f"{part.replace(' ', '_')}{side}")


def _trunk_span(anatomy: Anatomy, trunk: TrunkLengths, part: str) -> Span | None:
    """De Leva's cuts, at his heights from the notch down and from the hips up."""
    scale = cast(Person, anatomy.person).stature / trunk.stature
    up = np.array([0.0, scale, 0.0])
    notch, hips = anatomy.landmark("thorax", "IJ"), middle_of_hips(anatomy)
    if part == "upper trunk":
        return None if notch is None else span(notch, notch - trunk.upper * up)
    if part == "lower trunk":
        return None if hips is None else span(hips + trunk.lower * up, hips)
    thorax, pelvis = anatomy.origin("thorax", "abdomen"), anatomy.origin("pelvis", "abdomen")
    if notch is None or hips is None or thorax is None or pelvis is None:
        return None
    xiphoid, navel = thorax + notch - trunk.upper * up, pelvis + hips + trunk.lower * up
    # Standing people's trunk is shorter than that of de Leva's, who lay: the radii keep his length.
    return span(xiphoid * [0, 1, 0], navel * [0, 1, 0], trunk.middle * scale)


def _head_and_neck(anatomy: Anatomy, side: str) -> Span | None:
    """From the cervical joint, where the neck begins, to the vertex."""
    neck, vertex = anatomy.origin("neck", "head"), anatomy.landmark("head", "vertex")
    return None if neck is None or vertex is None else span(neck, vertex)


def _torso(anatomy: Anatomy, side: str) -> Span | None:
    """From the cervical joint down to the lumbar one, where the abdomen begins."""
    neck, lumbar = anatomy.joint_between("thorax", "neck"), anatomy.origin("abdomen", "thorax")
    return None if neck is None or lumbar is None else span(neck, lumbar)


def _pelvis(anatomy: Anatomy, side: str) -> Span | None:
    """From the lumbar joint to the middle of the hips."""
    lumbar, hips = anatomy.joint_between("pelvis", "abdomen"), middle_of_hips(anatomy)
    return None if lumbar is None or hips is None else span(lumbar, hips)


def _hand(anatomy: Anatomy, side: str) -> Span | None:
    """From the wrist to the tip of the third finger, straight on from its knuckle."""
    knuckle = anatomy.tape(f"hand{side}")
    if knuckle is None:
        return None
    return span(knuckle.start, knuckle.start + FINGERTIP_SHARE * (knuckle.end - knuckle.start))


AXES_SPANS: dict[str, Callable[[Anatomy, str], Span | None]] = {
    "head and neck": _head_and_neck,
    "torso": _torso,
    "pelvis": _pelvis,
    "upper arm": lambda anatomy, side: anatomy.tape(f"upper_arm{side}"),
    "forearm": forearm_span,
    "hand": _hand,
    "thigh": lambda anatomy, side: anatomy.tape(f"thigh{side}"),
    "shank": lambda anatomy, side: anatomy.tape(f"shank{side}"),
    "foot": sole_span,
}
"""Dumas' part -> where it begins and ends.

Hand and foot are whole, to the tip of the third finger and from the heel to the tip of the toes. That reading is
ours: with it their centres and radii are within a few mm of de Leva's, while with the palm or with ankle
and metatarsals the radii are half of his and the foot's centre lies above the ankle.
"""
