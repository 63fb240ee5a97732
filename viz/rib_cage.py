"""The rib cage as drawn: twelve vertebrae, twelve pairs of ribs with their cartilage, the sternum.

All in the axes of `thorax` (Wu et al. 2005), whose origin is the notch IJ. A rib runs from its
vertebra back to its angle, round the side, down to its bony end, and on as cartilage.
"""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_design import Design, Part, Swept
from condyle.viz.bone_solids import TO_THE_OTHER_SIDE, Egg, Rod, both_sides, spline, swept
from condyle.viz.shapes import Shape
from condyle.viz.spine_bones import THORACIC, row, vertebra

FloatArray = NDArray[np.float64]

ANCHORS = {
    "IJ": (0.0, 0.0, 0.0),
    "PX": (0.042, -0.1707, 0.0),
    "C7": (-0.095, 0.070, 0.0),
    "T8": (-0.137, -0.128, 0.0),
    "proximal": (-0.081, -0.247, 0.0),
    "to.neck": (-0.042, 0.062, 0.0),
    "to.clavicle_right": (-0.008, 0.0, 0.025),
    "to.clavicle_left": (-0.008, 0.0, -0.025),
}

SPINE = (
    (-0.081, -0.247),
    (-0.089, -0.185),
    (-0.0875, -0.120),
    (-0.080, -0.055),
    (-0.063, 0.010),
    (-0.042, 0.062),
)
"""(x, y) m: the middle line of the bodies, from the disc under T12 to the one over T1."""

SMALLEST = 0.72
"""Height of the first thoracic vertebra as a share of the last."""


class Rib(NamedTuple):
    """Where a right rib runs, m: its angle (x, z), its outermost point (x, z), its bony end, its cartilage."""

    angle: tuple[float, float]
    side: tuple[float, float]
    end: tuple[float, float, float]
    cartilage: tuple[tuple[float, float, float], ...] = ()


RIBS = (
    Rib((-0.070, 0.038), (-0.042, 0.056), (-0.010, 0.004, 0.036), ((-0.006, -0.012, 0.021),)),
    Rib((-0.096, 0.045), (-0.050, 0.084), (0.000, -0.038, 0.052), ((0.007, -0.047, 0.018),)),
    Rib((-0.112, 0.051), (-0.052, 0.104), (0.011, -0.068, 0.062), ((0.012, -0.069, 0.018),)),
    Rib((-0.121, 0.055), (-0.052, 0.117), (0.020, -0.096, 0.070), ((0.018, -0.090, 0.019),)),
    Rib(
        (-0.126, 0.058),
        (-0.052, 0.126),
        (0.027, -0.126, 0.077),
        ((0.030, -0.124, 0.052), (0.024, -0.110, 0.019)),
    ),
    Rib(
        (-0.129, 0.060),
        (-0.052, 0.132),
        (0.031, -0.157, 0.084),
        ((0.035, -0.157, 0.060), (0.028, -0.127, 0.018)),
    ),
    Rib(
        (-0.130, 0.061),
        (-0.052, 0.136),
        (0.031, -0.188, 0.092),
        ((0.039, -0.186, 0.066), (0.031, -0.140, 0.016)),
    ),
    Rib(
        (-0.130, 0.061),
        (-0.053, 0.138),
        (0.022, -0.214, 0.104),
        ((0.034, -0.210, 0.085), (0.039, -0.178, 0.056)),
    ),
    Rib(
        (-0.129, 0.061),
        (-0.056, 0.137),
        (0.007, -0.235, 0.113),
        ((0.022, -0.234, 0.100), (0.034, -0.206, 0.080)),
    ),
    Rib(
        (-0.126, 0.059),
        (-0.062, 0.133),
        (-0.014, -0.253, 0.118),
        ((0.003, -0.252, 0.111), (0.023, -0.231, 0.097)),
    ),
    Rib((-0.119, 0.055), (-0.082, 0.116), (-0.056, -0.270, 0.116)),
    Rib((-0.110, 0.050), (-0.104, 0.070), (-0.091, -0.276, 0.086)),
)

RIB_HEIGHT, RIB_DEPTH = 0.0064, 0.0036
"""m; half axes of a rib's section."""

STEPS, SIDES = 22, 7
"""Rings along a rib and points around it."""


def rib_cage() -> Design:
    """Vertebrae, ribs and sternum."""
    heights = np.linspace(1.0, SMALLEST, 12)
    places = row(SPINE, heights)
    parts: list[Part | Swept] = []
    for (centre, up), share in zip(places, heights, strict=True):
        size = replace(THORACIC, height=THORACIC.height * share / heights.mean())
        parts.append(vertebra(size, centre, up))
    for rib, (centre, _) in zip(RIBS, reversed(places), strict=True):
        right = rib_surface(rib, centre)
        parts += [Swept(right), Swept(reflection(right))]
    return Design(ANCHORS, [*parts, sternum()])


def reflection(
    surface: tuple[FloatArray, NDArray[np.int64]],
) -> tuple[FloatArray, NDArray[np.int64]]:
    """The surface on the other side of the median plane, wound outwards again."""
    return surface[0] * TO_THE_OTHER_SIDE, surface[1][:, ::-1]


def rib_path(rib: Rib, vertebra_centre: FloatArray) -> FloatArray:
    """(n, 3) m: the middle line of a right rib with its cartilage."""
    x, y, _ = vertebra_centre
    drop = y - rib.end[1]
    points = [
        (x - 0.008, y + 0.008, 0.013),
        (x - 0.026, y + 0.004, 0.030),
        (rib.angle[0], y - 0.16 * drop, rib.angle[1]),
    ]
    if rib.cartilage:
        aside = 0.5 * (rib.angle[1] + rib.side[1]) + 0.012
        points.append((0.55 * rib.angle[0] + 0.45 * rib.side[0], y - 0.36 * drop, aside))
    points += [(rib.side[0], y - 0.62 * drop, rib.side[1]), rib.end, *rib.cartilage]
    return spline(points, STEPS)


def rib_surface(rib: Rib, vertebra_centre: FloatArray) -> tuple[FloatArray, NDArray[np.int64]]:
    """A right rib: flat against the chest, thinner at its head and where nothing holds its tip."""
    path = rib_path(rib, vertebra_centre)
    inside = np.array([-0.045, 0.0, 0.0]) + path * [0.0, 1.0, 0.0]
    t = np.linspace(0.0, 1.0, STEPS)
    slim = np.interp(t, [0.0, 0.12, 0.3, 1.0], [0.72, 0.80, 1.0, 1.0 if rib.cartilage else 0.55])
    return swept(path, path - inside, RIB_HEIGHT * slim, RIB_DEPTH * slim**0.5, sides=SIDES)


def sternum() -> Part:
    """Manubrium with the notch between the collar bones, body, and the tip PX."""
    shapes: list[Shape] = [
        Egg((-0.001, -0.020, 0.0), (0.0065, 0.020, 0.018)),
        Rod([(0.004, -0.040, 0.0), (0.013, -0.068, 0.0)], [0.0075, 0.0075]),
        *both_sides(
            Egg((-0.005, -0.005, 0.017), (0.0075, 0.009, 0.011)),
            Rod(
                [(0.002, -0.034, 0.006), (0.012, -0.075, 0.007), (0.028, -0.138, 0.010)],
                [0.0065, 0.0060, 0.0065],
            ),
        ),
        Rod([(0.009, -0.055, 0.0), (0.017, -0.090, 0.0), (0.031, -0.145, 0.0)], [0.0070] * 3),
        Rod([(0.030, -0.140, 0.0), (0.041, -0.168, 0.0)], [0.0070, 0.0030]),
    ]
    return Part(shapes, 900, blend=0.006)
