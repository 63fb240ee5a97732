"""Foot and toes as drawn: heel, instep and five rays, from the heel and metatarsal landmarks.

Only the outer two rays and the second have landmarks; the others are spread between them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Egg, Rod, moved
from condyle.viz.shapes import Limb, Shape

FloatArray = NDArray[np.float64]

FOOT = {
    "proximal": (0.0, 0.0, 0.0),
    "CA": (-0.052, -0.023, 0.0),
    "MT1": (0.136, -0.040, -0.020),
    "MT2": (0.138, -0.041, 0.002),
    "MT5": (0.111, -0.046, 0.045),
}

TOES_IN_FOOT = (0.1235, -0.043, 0.0125)
"""m; origin of `toes` in `foot`: their axes are parallel in the reference posture."""

TOES = {
    "proximal": (0.0, 0.0, 0.0),
    **{
        f"parent.{name}": tuple(np.subtract(FOOT[name], TOES_IN_FOOT))
        for name in ("CA", "MT1", "MT2", "MT5")
    },
}

SPREAD = (0.0, 0.25, 0.5, 0.75, 1.0)

BASES = (
    (0.052, -0.022, -0.014),
    (0.056, -0.018, -0.003),
    (0.052, -0.021, 0.007),
    (0.046, -0.027, 0.017),
    (0.036, -0.035, 0.026),
)
"""m; where the metatarsals begin, first to fifth."""


def heads() -> FloatArray:
    """(5, 3) m: metatarsal heads on a shallow arc from first to fifth, drawn in under the skin."""
    first, second, fifth = (np.array(FOOT[name]) for name in ("MT1", "MT2", "MT5"))
    t = np.array(SPREAD)[:, None]
    arc = first + t * (fifth - first)
    arc = arc + np.sin(np.pi * t) / np.sin(np.pi / 4.0) * (second - arc[1])
    middle = arc.mean(axis=0)
    half = 0.5 * float(np.linalg.norm(fifth - first))
    return np.asarray(middle + (arc - middle) * (1.0 - 1.1 * SKIN / half) - (0.0, 0.004, 0.0))


def foot() -> Design:
    """Heel bone, the small bones of the instep, five metatarsals."""
    return Design(FOOT, [heel(), instep(), *metatarsals()])


def heel() -> Part:
    """The heel bone: a beam from the heel's tuber forward and outwards, with a shelf under the talus."""
    heel_bone = below_skin(np.array(FOOT["CA"]), np.zeros(3), 0.021)
    shapes: list[Shape] = [
        Egg(moved(heel_bone, 0.002, -0.010, 0.0), (0.019, 0.022, 0.0155)),
        Rod([moved(heel_bone, 0.004, -0.001, 0.0), (-0.004, -0.018, 0.004)], [0.0150, 0.0130]),
        Rod(
            [moved(heel_bone, 0.006, -0.016, 0.0), (0.006, -0.027, 0.007), (0.026, -0.027, 0.013)],
            [0.0120, 0.0125, 0.0115],
        ),
        Rod([(0.002, -0.020, 0.0), (0.006, -0.019, -0.014)], [0.0080, 0.0065]),
    ]
    return Part(shapes, 900, blend=0.008)


def instep() -> Part:
    """Navicular, three cuneiforms, cuboid: pebbles that just grow together."""
    pebbles: list[Shape] = [
        Egg((0.037, -0.012, -0.007), (0.0080, 0.0125, 0.0165)),
        Egg((0.034, -0.030, 0.017), (0.0150, 0.0095, 0.0105)),
    ]
    pebbles += [
        Egg((x - 0.008, y + 0.001, z), (0.0095, size, 0.0078))
        for (x, y, z), size in zip(BASES[:3], (0.0115, 0.0100, 0.0095), strict=True)
    ]
    return Part(pebbles, 800, blend=0.0025, grid=0.0012)


def metatarsals() -> list[Part]:
    """Five slender bones with a broad base and a round head."""
    parts = []
    for base, head, size in zip(BASES, heads(), (1.25, 0.95, 0.92, 0.90, 0.95), strict=True):
        start = np.array(base)
        middle = 0.5 * (start + head) + (0.0, 0.0035, 0.0)
        radii = [0.0078 * size, 0.0050 * size, 0.0062 * size]
        knob = Egg(head, (0.0078 * size, 0.0076 * size, 0.0072 * size))
        parts.append(Part([Rod([start, middle, head], radii), knob], 280, blend=0.004, grid=0.0012))
    under = heads()[0] + (0.0, -0.009, 0.0)
    parts.append(Part([Egg(under, (0.0055, 0.0040, 0.0075))], 80))
    return parts


def toes() -> Design:
    """Two bones in the great toe, three in each other, pointing ahead and a little down."""
    parts = []
    shares = ((0.56, 0.44), *(((0.50, 0.26, 0.24),) * 4))
    for head, lengths, reach, size in zip(
        heads() - np.array(TOES_IN_FOOT) + (0.0, -0.003, 0.0),
        shares,
        (0.056, 0.047, 0.042, 0.037, 0.032),
        (1.30, 0.92, 0.88, 0.85, 0.85),
        strict=True,
    ):
        start = moved(head, 0.009 * size, 0.0, 0.0)
        for index, share in enumerate(lengths):
            end = start + reach * share * np.array([1.0, (0.02, -0.22, -0.25)[index], 0.0])
            parts.append(toe_bone(start, end, size * (1.0 - 0.06 * index)))
            start = end
    return Design(TOES, parts)


def toe_bone(start: FloatArray, end: FloatArray, size: float) -> Part:
    """A phalanx: broad at its base, slim in the middle; short ones are little more than pebbles."""
    step = end - start
    base, tip = start + 0.14 * step, start + 0.86 * step
    shapes: list[Shape] = [
        Limb(base, tip, 0.0056 * size, 0.0048 * size, 0.80),
        Egg(base, (0.0050 * size, 0.0062 * size, 0.0068 * size)),
    ]
    return Part(shapes, 130, blend=0.003, grid=0.0010)
