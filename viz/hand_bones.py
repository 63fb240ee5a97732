"""The hand as drawn: carpus, metacarpals, phalanges, in the axes of `hand` (X to the palm).

A model without fingers gets a whole hand at rest, its fingers a little bent; one with fingers gets
the palm, and a phalanx for each of theirs.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import direction
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Egg, Rod, moved
from condyle.viz.shapes import Shape

FloatArray = NDArray[np.float64]

HAND = {
    "proximal": (0.0, 0.0, 0.0),
    "MC2": (-0.008, -0.088, 0.022),
    "MC5": (-0.008, -0.074, -0.032),
}


class Ray(NamedTuple):
    """One finger: where its metacarpal begins and ends (m), its thickness, its phalanges' lengths (m)."""

    base: tuple[float, float, float]
    knuckle: tuple[float, float, float]
    thickness: float
    phalanges: tuple[float, ...]


RAYS = (
    Ray((-0.001, -0.033, 0.0115), (0.0, -0.0860, 0.0210), 1.00, (0.0461, 0.0269, 0.0182)),
    Ray((-0.002, -0.033, 0.0000), (0.0, -0.0862, 0.0), 1.03, (0.0500, 0.0320, 0.0203)),
    Ray((-0.002, -0.031, -0.0100), (0.0, -0.0800, -0.0185), 0.93, (0.0459, 0.0310, 0.0201)),
    Ray((-0.001, -0.028, -0.0185), (0.0, -0.0720, -0.0340), 0.88, (0.0384, 0.0220, 0.0175)),
)
"""Index to little finger; knuckles and lengths as in the model `hand`."""

PALM = {
    **HAND,
    **{
        f"to.{name}_proximal": ray.knuckle
        for name, ray in zip(("index", "middle", "ring", "little"), RAYS, strict=True)
    },
}

THUMB_BASE = (0.010, -0.022, 0.026)
THUMB_ALONG = (0.44, -0.68, 0.59)
THUMB_LENGTHS = (0.0472, 0.0368, 0.0297)
"""m and direction: the saddle joint, and the thumb at rest, as in the model `hand`."""

CARPUS = (
    ((0.003, -0.0095, 0.0130), (0.0080, 0.0085, 0.0082)),
    ((0.001, -0.0070, -0.0005), (0.0085, 0.0078, 0.0080)),
    ((-0.002, -0.0105, -0.0135), (0.0078, 0.0078, 0.0076)),
    ((0.009, -0.0130, -0.0150), (0.0055, 0.0060, 0.0055)),
    ((0.007, -0.0210, 0.0200), (0.0076, 0.0074, 0.0074)),
    ((0.000, -0.0240, 0.0110), (0.0080, 0.0074, 0.0066)),
    ((0.000, -0.0215, 0.0000), (0.0085, 0.0110, 0.0072)),
    ((0.000, -0.0215, -0.0120), (0.0085, 0.0090, 0.0078)),
)
"""Centre and half axes (m): scaphoid, lunate, triquetrum, pisiform; trapezium, trapezoid, capitate, hamate."""

AT_REST = (22.0, 30.0, 18.0)
"""Degrees by which knuckle, middle and last joint of a resting finger are bent."""

LONG = {"proximal": (0.0, 0.0, 0.0), "distal": (0.0, -0.046, 0.0)}
SHORT = {"proximal": (0.0, 0.0, 0.0), "distal": (0.0, -0.029, 0.0)}
LAST = {"proximal": (0.0, 0.0, 0.0), "distal": (0.0, -0.020, 0.0)}

THUMB = tuple(
    {"proximal": (0.0, 0.0, 0.0), "distal": (0.0, -length, 0.0)} for length in THUMB_LENGTHS
)
THUMB_SIZES = (1.25, 1.22, 1.19)
"""Thickness of metacarpal and phalanges, times the middle finger's."""


def palm() -> Design:
    """Carpus and metacarpals, without the thumb's."""
    return Design(PALM, [carpus(), *(metacarpal(ray) for ray in RAYS)])


def whole_hand() -> Design:
    """Carpus, metacarpals, and fingers at rest."""
    parts = [carpus(), *(metacarpal(ray) for ray in RAYS)]
    for ray in RAYS:
        start = np.array(ray.knuckle)
        bend = 0.0
        for length, angle in zip(ray.phalanges, AT_REST, strict=True):
            bend += np.radians(angle)
            along = np.array([np.sin(bend), -np.cos(bend), 0.0])
            palmar = np.array([np.cos(bend), np.sin(bend), 0.0])
            parts.append(bone(start, along, palmar, length, ray.thickness, tip=length < 0.0205))
            start = start + length * along
    return Design(HAND, [*parts, *thumb()])


def thumb() -> list[Part]:
    """Metacarpal and two phalanges, the last bent a little to the palm."""
    start, along = np.array(THUMB_BASE), direction(np.array(THUMB_ALONG))
    palmar = direction(np.array([0.45, -0.40, -0.80]))
    parts = []
    for index, (length, bend) in enumerate(zip(THUMB_LENGTHS, (0.0, 8.0, 14.0), strict=True)):
        angle = np.radians(bend)
        along, palmar = (
            np.cos(angle) * along + np.sin(angle) * palmar,
            np.cos(angle) * palmar - np.sin(angle) * along,
        )
        parts.append(bone(start, along, palmar, length, THUMB_SIZES[index], tip=index == 2))
        start = start + length * along
    return parts


def carpus() -> Part:
    """Eight pebbles that just grow together."""
    return Part([Egg(centre, radii) for centre, radii in CARPUS], 1100, blend=0.0024, grid=0.001)


def metacarpal(ray: Ray) -> Part:
    """Base, a shaft hollow to the palm, and the knuckle's head."""
    base, head = np.array(ray.base), np.array(ray.knuckle)
    size = ray.thickness
    middle = 0.5 * (base + head) + (-0.0025, 0.0, 0.0)
    shapes: list[Shape] = [
        Rod([base, middle, head], [0.0062 * size, 0.0041 * size, 0.0056 * size]),
        Egg(moved(head, 0.0, 0.001, 0.0), (0.0078 * size, 0.0072 * size, 0.0066 * size)),
    ]
    return Part(shapes, 260, blend=0.004, grid=0.001)


def bone(
    start: FloatArray,
    along: FloatArray,
    palmar: FloatArray,
    length: float,
    size: float,
    *,
    tip: bool,
) -> Part:
    """A phalanx from joint to joint, or the last one with its tuft; `size` is its thickness."""
    side = np.cross(along, palmar)
    base, end = start + 0.0042 * size * along, start + (length - 0.003 * size) * along
    middle = 0.5 * (base + end) - 0.0008 * palmar
    axes = np.stack([palmar, along, side], axis=1)
    shapes: list[Shape] = [
        Egg(base, (0.0056 * size, 0.0042 * size, 0.0068 * size), axes),
    ]
    if tip:
        shapes += [
            Rod([base, end], [0.0044 * size, 0.0030 * size]),
            Egg(end, (0.0030 * size, 0.0030 * size, 0.0048 * size), axes),
        ]
        return Part(shapes, 200, blend=0.003, grid=0.0008)
    for sign in (-1.0, 1.0):
        knob = end + sign * 0.0029 * size * side
        shapes.append(Egg(knob, (0.0046 * size, 0.0042 * size, 0.0033 * size), axes))
    shapes.append(Rod([base, middle, end], [0.0052 * size, 0.0036 * size, 0.0044 * size]))
    return Part(shapes, 280, blend=0.003, grid=0.0008)


def alone(anchors: Mapping[str, Sequence[float]], size: float, *, tip: bool = False) -> Design:
    """One bone of a finger in its own segment, pointing down."""
    start, end = np.array(anchors["proximal"]), np.array(anchors["distal"])
    length = float(np.linalg.norm(end - start))
    return Design(
        anchors,
        [bone(start, np.array([0.0, -1.0, 0.0]), np.array([1.0, 0.0, 0.0]), length, size, tip=tip)],
    )


def proximal_phalanx() -> Design:
    """The bone next to the knuckle."""
    return alone(LONG, 1.0)


def middle_phalanx() -> Design:
    """The middle bone of a finger."""
    return alone(SHORT, 0.95)


def last_phalanx() -> Design:
    """The bone under the nail."""
    return alone(LAST, 0.95, tip=True)


def thumb_metacarpal() -> Design:
    """The thumb's own metacarpal."""
    return alone(THUMB[0], THUMB_SIZES[0])


def thumb_proximal_phalanx() -> Design:
    """The thumb's longer phalanx."""
    return alone(THUMB[1], THUMB_SIZES[1])


def thumb_last_phalanx() -> Design:
    """The bone under the thumb's nail."""
    return alone(THUMB[2], THUMB_SIZES[2], tip=True)
