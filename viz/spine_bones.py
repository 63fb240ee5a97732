"""The spine as drawn: neck and loin; the rib cage takes its vertebrae from here.

A vertebra is a drum with an arch behind it: two laminae that meet, a spinous process, two transverse
processes and the joints between neighbours. What differs along the spine is a few lengths.
"""

from __future__ import annotations

import itertools
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import direction
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Drum, Egg, Points, Rod, both_sides, frame_along, spline
from condyle.viz.shapes import Shape

FloatArray = NDArray[np.float64]
Place = Callable[[float, float, float], FloatArray]

DISC = 0.17
"""A disc's share of the height from the middle of one disc to the next."""


@dataclass(frozen=True, slots=True)
class Vertebra:
    """Lengths of one vertebra, m, in its own axes: x forward, y along the spine, z to the right.

    Attributes
    ----------
    height : float
        From the middle of the disc below to that of the disc above.
    depth, width : float
        Half axes of the body.
    canal : float
        From the body's back to the arch.
    spine_tip : (x, y)
        The tip of the spinous process, from the body's centre.
    blade : float
        How far the spinous process reaches up and down from its middle line.
    transverse_tip : (x, y, z)
        The tip of the right transverse process, from the body's centre.
    bar : float
        Radius of arch and processes.
    """

    height: float
    depth: float
    width: float
    canal: float
    spine_tip: tuple[float, float]
    blade: float
    transverse_tip: tuple[float, float, float]
    bar: float
    faces: int


LUMBAR = Vertebra(
    height=0.0342,
    depth=0.0175,
    width=0.0245,
    canal=0.017,
    spine_tip=(-0.062, -0.009),
    blade=0.0065,
    transverse_tip=(-0.026, 0.002, 0.042),
    bar=0.0048,
    faces=620,
)

THORACIC = Vertebra(
    height=0.0257,
    depth=0.0145,
    width=0.0150,
    canal=0.015,
    spine_tip=(-0.050, -0.020),
    blade=0.0,
    transverse_tip=(-0.030, 0.006, 0.029),
    bar=0.0040,
    faces=400,
)

CERVICAL = Vertebra(
    height=0.0150,
    depth=0.0085,
    width=0.0125,
    canal=0.014,
    spine_tip=(-0.038, -0.006),
    blade=0.0,
    transverse_tip=(-0.006, -0.002, 0.026),
    bar=0.0033,
    faces=400,
)

LOIN = ((0.0, 0.0), (0.009, 0.042), (0.007, 0.088), (-0.011, 0.130), (-0.030, 0.168))
"""(x, y) m in `abdomen`: the row of bodies bows forward, so that L3 lies deepest under its skin."""

NECK = ((0.0, 0.0), (0.010, 0.032), (0.018, 0.064), (0.0205, 0.086), (0.020, 0.105))
"""(x, y) m in `neck`: from the disc under C7 to between the condyles of the skull."""


def vertebra(size: Vertebra, centre: FloatArray, up: FloatArray) -> Part:
    """A vertebra with its body's centre there, standing along `up`."""
    axes = frame_along(up)

    def at(x: float, y: float, z: float) -> FloatArray:
        return np.asarray(centre + axes @ np.array([x, -z, y]))

    body = Drum(
        centre, axes, (size.depth, size.width), 0.5 * (1.0 - DISC) * size.height, 0.12 * size.height
    )
    shapes: list[Shape] = [body, *spinous_process(size, at), *both_sides(*half_arch(size, at))]
    return Part(shapes, size.faces, blend=0.75 * size.bar)


def half_arch(size: Vertebra, at: Place) -> list[Shape]:
    """Pedicle, lamina, transverse and articular processes of the right side."""
    back, bar, rise = -size.depth, size.bar, 0.13 * size.height
    pillar = 0.55 * size.width + bar
    root = at(back - 0.4 * size.canal, rise, pillar)
    behind = at(back - size.canal, -0.5 * rise, 0.0)
    return [
        Rod([at(back + bar, rise, 0.9 * pillar), root], [1.1 * bar, bar]),
        Rod([root, behind], [1.1 * bar, 1.2 * bar]),
        Rod([root, at(*size.transverse_tip)], [bar, 0.8 * bar]),
        Rod(
            [
                at(back - 0.55 * size.canal, 0.46 * size.height, pillar),
                at(back - 0.65 * size.canal, -0.46 * size.height, 0.9 * pillar),
            ],
            [1.2 * bar, 1.3 * bar],
        ),
    ]


def spinous_process(size: Vertebra, at: Place) -> list[Shape]:
    """One bar from the arch to the tip, or three above one another where it is a blade."""
    start = -size.depth - size.canal
    x, y = size.spine_tip
    heights = (0.0,) if size.blade == 0.0 else (-size.blade, 0.0, size.blade)
    return [
        Rod([at(start, 0.6 * h, 0.0), at(x, y + h, 0.0)], [size.bar, 0.95 * size.bar])
        for h in heights
    ]


def row(line: Points, heights: FloatArray) -> list[tuple[FloatArray, FloatArray]]:
    """Centre and upward direction of vertebrae of such heights (shares) along a line (x, y), from below."""
    curve = spline([(x, y, 0.0) for x, y in line], 201)
    edges = np.concatenate([[0.0], np.cumsum(heights) / np.sum(heights)]) * 200.0
    ends = [
        np.stack([np.interp(edge, np.arange(201), curve[:, k]) for k in range(3)]) for edge in edges
    ]
    return [(0.5 * (a + b), direction(b - a)) for a, b in itertools.pairwise(ends)]


def lumbar_spine() -> Design:
    """L5 to L1, from the lumbosacral to the thoracolumbar joint."""
    places = row(LOIN, np.ones(5))
    parts = [vertebra(LUMBAR, centre, up) for centre, up in places]
    return Design({"proximal": (0.0, 0.0, 0.0), "distal": (-0.030, 0.168, 0.0)}, parts)


def cervical_spine() -> Design:
    """C7 to the atlas, from the disc under C7 to the skull."""
    places = row(NECK, np.array([1.0, 1.0, 1.0, 1.0, 1.0, 1.15, 0.85]))
    prominent = replace(CERVICAL, spine_tip=(-0.052, -0.002), bar=0.0037)
    axis = replace(CERVICAL, spine_tip=(-0.041, -0.009), bar=0.0042, height=0.017)
    sizes = [prominent, CERVICAL, CERVICAL, CERVICAL, CERVICAL, axis]
    parts = [
        vertebra(size, centre, up) for size, (centre, up) in zip(sizes, places[:6], strict=True)
    ]
    parts.append(atlas(places[6][0]))
    return Design({"proximal": (0.0, 0.0, 0.0), "distal": (0.020, 0.105, 0.0)}, parts)


def atlas(centre: FloatArray) -> Part:
    """The ring that carries the skull, and the tooth of the axis in it."""
    x, y, _ = centre
    arch = [(x + 0.013, y, 0.0), (x + 0.009, y, 0.013), (x - 0.002, y + 0.001, 0.021)]
    behind = [(x - 0.004, y, 0.021), (x - 0.020, y - 0.001, 0.017), (x - 0.031, y - 0.002, 0.0)]
    shapes: list[Shape] = [
        Rod([(x + 0.004, y - 0.016, 0.0), (x + 0.005, y + 0.005, 0.0)], [0.0055, 0.0045]),
        *both_sides(
            Rod(arch, [0.0042, 0.0042, 0.006]),
            Rod(behind, [0.005, 0.0036, 0.0040]),
            Egg((x - 0.001, y + 0.001, 0.020), (0.0085, 0.0065, 0.0065)),
            Rod([(x - 0.002, y, 0.022), (x - 0.005, y, 0.036)], [0.0045, 0.0035]),
        ),
    ]
    return Part(shapes, CERVICAL.faces, blend=0.003)
