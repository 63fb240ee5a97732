"""The numbers of two published tables of body segment parameters, as printed, and how sure they are.

de Leva 1996, J Biomech 29:1223, table 4 (Zatsiorsky & Seluyanov's people, ends moved to the joints):
    read in a transcription of the whole table. The lengths of the trunk's parts are from memory;
    they add up to the table's trunk within 0.1 mm.
Dumas, Cheze & Verriest 2007, J Biomech 40:543 (McConville's and Young's people, ISB axes):
    read in a transcription. The corrigendum (2007, J Biomech 40:1651) was not seen: treat torso and pelvis
    as loose.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, TypeAlias

from condyle.model.skeleton import Vector

BodyTable: TypeAlias = Literal["de_leva_female", "de_leva_male", "dumas_female", "dumas_male"]
"""A published table of masses, centres and radii of gyration, for women or for men."""


@dataclass(frozen=True, slots=True)
class LinePart:
    """A part of the body whose centre is told along the line between two points.

    Attributes
    ----------
    share : float
        Of body mass.
    along : float
        Where the centre lies, as a share of the line, from its proximal or upper end.
    radii : Vector
        Of gyration about the centre for turning about x, y, z (forward, up, right), over the length.
    """

    share: float
    along: float
    radii: Vector


@dataclass(frozen=True, slots=True)
class AxesPart:
    """A part of the body whose centre is told in axes that start at its proximal joint.

    Attributes
    ----------
    share : float
        Of body mass.
    centre : Vector
        Over the length; for the right side (left: z changes sign).
    radii : Vector
        For turning about x, y, z, over the length.
    products : Vector
        xy, xz, yz as radii over the length, with their sign (left: xz and yz change sign).
    """

    share: float
    centre: Vector
    radii: Vector
    products: Vector


@dataclass(frozen=True, slots=True)
class TrunkLengths:
    """m, of people of one mean stature: notch to xiphoid, xiphoid to navel, navel to hips."""

    stature: float
    upper: float
    middle: float
    lower: float


def _line(
    percent: float, along: float, sagittal: float, transverse: float, long: float
) -> LinePart:
    """In the order of de Leva's columns; the axes are forward, rightward, along the segment."""
    return LinePart(percent / 100, along, (sagittal, long, transverse))


def _foot(
    percent: float, along: float, sagittal: float, transverse: float, long: float
) -> LinePart:
    """The foot's long axis points forward, and de Leva's sagittal axis up."""
    return LinePart(percent / 100, along, (long, sagittal, transverse))


DE_LEVA: dict[BodyTable, dict[str, LinePart]] = {
    "de_leva_female": {
        "head": _line(6.68, 0.5894, 0.330, 0.359, 0.318),
        "upper trunk": _line(15.45, 0.2077, 0.746, 0.502, 0.718),
        "middle trunk": _line(14.65, 0.4512, 0.433, 0.354, 0.415),
        "lower trunk": _line(12.47, 0.4920, 0.433, 0.402, 0.444),
        "upper arm": _line(2.55, 0.5754, 0.278, 0.260, 0.148),
        "forearm": _line(1.38, 0.4559, 0.261, 0.257, 0.094),
        # One public copy prints .631 as the first radius; .531 fits the hand's other ends.
        "hand": _line(0.56, 0.7474, 0.531, 0.454, 0.335),
        "thigh": _line(14.78, 0.3612, 0.369, 0.364, 0.162),
        "shank": _line(4.81, 0.4352, 0.267, 0.263, 0.092),
        "foot": _foot(1.29, 0.4014, 0.299, 0.279, 0.139),
    },
    "de_leva_male": {
        "head": _line(6.94, 0.5976, 0.362, 0.376, 0.312),
        "upper trunk": _line(15.96, 0.2999, 0.716, 0.454, 0.659),
        "middle trunk": _line(16.33, 0.4502, 0.482, 0.383, 0.468),
        "lower trunk": _line(11.17, 0.6115, 0.615, 0.551, 0.587),
        "upper arm": _line(2.71, 0.5772, 0.285, 0.269, 0.158),
        "forearm": _line(1.62, 0.4574, 0.276, 0.265, 0.121),
        "hand": _line(0.61, 0.7900, 0.628, 0.513, 0.401),
        "thigh": _line(14.16, 0.4095, 0.329, 0.329, 0.149),
        "shank": _line(4.33, 0.4395, 0.251, 0.246, 0.102),
        "foot": _foot(1.37, 0.4415, 0.257, 0.245, 0.124),
    },
}

TRUNK_LENGTHS: dict[BodyTable, TrunkLengths] = {  # from memory
    "de_leva_female": TrunkLengths(1.735, 0.1425, 0.2053, 0.1815),
    "de_leva_male": TrunkLengths(1.741, 0.1707, 0.2155, 0.1457),
}


def _axes(percent: float, centre: Vector, radii: Vector, products: Vector) -> AxesPart:
    """All but the mass in percent of the length, as printed; products printed imaginary are negative."""
    x, y, z = (value / 100 for value in centre)
    rx, ry, rz = (value / 100 for value in radii)
    xy, xz, yz = (value / 100 for value in products)
    return AxesPart(percent / 100, (x, y, z), (rx, ry, rz), (xy, xz, yz))


DUMAS: dict[BodyTable, dict[str, AxesPart]] = {
    "dumas_female": {
        "head and neck": _axes(6.7, (-7.0, 59.7, 0), (32, 27, 34), (-6, 1, -1)),
        "torso": _axes(30.4, (-1.6, -43.6, -0.6), (29, 27, 29), (22, 5, -5)),
        "pelvis": _axes(14.6, (-0.9, -23.2, 0.2), (91, 100, 79), (-34, -1, -1)),
        "upper arm": _axes(2.2, (-7.3, -45.4, -2.8), (33, 17, 33), (3, -5, -14)),
        "forearm": _axes(1.3, (2.1, -41.1, 1.9), (26, 14, 25), (10, 4, -13)),
        "hand": _axes(0.5, (3.3, -32.7, 2.1), (27, 18, 25), (12, 10, -12)),
        "thigh": _axes(14.6, (-7.7, -37.7, 0.9), (31, 19, 32), (7, -2, -7)),
        "shank": _axes(4.5, (-4.9, -40.4, 3.1), (28, 10, 28), (2, 1, 6)),
        "foot": _axes(1.0, (44.3, 4.4, -2.5), (12, 25, 25), (-7, 5, -3)),
    },
    "dumas_male": {
        "head and neck": _axes(6.7, (-6.2, 55.5, 0.1), (31, 25, 33), (-9, -2, 3)),
        "torso": _axes(33.3, (-3.6, -42.0, -0.2), (27, 25, 28), (18, 2, -4)),
        "pelvis": _axes(14.2, (2.8, -28.0, -0.6), (101, 106, 95), (-25, -12, -8)),
        "upper arm": _axes(2.4, (1.7, -45.2, -2.6), (31, 14, 32), (6, 5, 2)),
        "forearm": _axes(1.7, (1.0, -41.7, 1.4), (28, 11, 27), (3, 2, -8)),
        "hand": _axes(0.6, (3.5, -35.7, 3.2), (26, 16, 24), (9, 7, -8)),
        "thigh": _axes(12.3, (-4.1, -42.9, 3.3), (29, 15, 30), (7, -2, -7)),
        "shank": _axes(4.8, (-4.8, -41.0, 0.7), (28, 10, 28), (-4, -2, 5)),
        "foot": _axes(1.2, (43.6, -2.5, -0.7), (11, 25, 25), (9, -6, 0)),
    },
}
