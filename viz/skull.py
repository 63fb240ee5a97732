"""The skull as drawn: cranium, face and jaw, in the axes of `head` (X in the Frankfurt plane).

The origin lies midway between the occipital condyles. Lengths are those of an adult as common
anatomy has them (about 185 long, 145 wide, 120 from the root of the nose to the chin).
"""

from __future__ import annotations

import numpy as np

from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Egg, Reflected, Rod, both_sides
from condyle.viz.shapes import Plate, Shape

OUTER_WALL = (
    ((0.067, 0.052, 0.0500), (0.067, 0.014, 0.0505), (0.038, 0.036, 0.0400)),
    ((0.067, 0.014, 0.0505), (0.046, 0.006, 0.0400), (0.038, 0.036, 0.0400)),
)
"""m; triangles that close the right orbit towards the temple."""

ANCHORS = {"proximal": (0.0, 0.0, 0.0), "vertex": (0.0, 0.151, 0.0)}


def skull() -> Design:
    """Cranium with face, and the jaw below it."""
    return Design(ANCHORS, [cranium(), *cheek_arches(), jaw()])


def cranium() -> Part:
    """Vault, face with orbits and nose, cheek bones, upper teeth, base."""
    return Part(
        [*vault(), *face()], 4600, blend=0.010, carved=[*openings(), *temples()], grid=0.002
    )


def vault() -> list[Shape]:
    """The brain's case: narrower in front than behind, with mastoids and condyles below."""
    return [
        Egg((-0.012, 0.072, 0.0), (0.082, 0.074, 0.070)),
        Egg((0.030, 0.076, 0.0), (0.064, 0.066, 0.056)),
        Egg((-0.044, 0.050, 0.0), (0.044, 0.046, 0.056)),
        *both_sides(
            Egg((-0.022, 0.082, 0.022), (0.058, 0.050, 0.050)),
            Rod([(-0.010, 0.018, 0.056), (-0.003, -0.010, 0.052)], [0.011, 0.0070]),
            Rod([(-0.008, 0.003, 0.012), (0.008, 0.001, 0.010)], [0.0065, 0.0065]),
        ),
        Rod([(-0.078, 0.022, 0.0), (-0.089, 0.026, 0.0)], [0.010, 0.007]),
    ]


def face() -> list[Shape]:
    """Brow, nose, cheek bones with their arches, upper jaw and teeth."""
    return [
        Egg((0.062, 0.006, 0.0), (0.026, 0.034, 0.032)),
        Rod(
            [(0.093, 0.056, 0.0), (0.101, 0.040, 0.0), (0.106, 0.028, 0.0)], [0.0055, 0.005, 0.0035]
        ),
        *both_sides(
            Rod(
                [(0.091, 0.062, 0.006), (0.088, 0.063, 0.028), (0.070, 0.050, 0.050)],
                [0.008, 0.0075, 0.0065],
            ),
            Rod(
                [(0.070, 0.050, 0.050), (0.066, 0.034, 0.051), (0.068, 0.014, 0.050)],
                [0.0060, 0.0050, 0.0065],
            ),
            Rod(
                [(0.092, 0.050, 0.008), (0.084, 0.028, 0.014), (0.083, 0.014, 0.020)],
                [0.005, 0.0055, 0.006],
            ),
            Rod(
                [(0.083, 0.010, 0.022), (0.079, 0.007, 0.036), (0.066, 0.010, 0.050)],
                [0.0085, 0.0080, 0.0085],
            ),
            Rod([(0.070, 0.002, 0.036), (0.060, -0.020, 0.030)], [0.010, 0.009]),
            Rod(
                [
                    (0.091, -0.022, 0.004),
                    (0.086, -0.023, 0.016),
                    (0.074, -0.024, 0.025),
                    (0.052, -0.024, 0.028),
                ],
                [0.0085, 0.0085, 0.0085, 0.0080],
            ),
            Rod(
                [
                    (0.0945, -0.033, 0.003),
                    (0.089, -0.034, 0.016),
                    (0.076, -0.034, 0.025),
                    (0.054, -0.033, 0.029),
                ],
                [0.0048, 0.0048, 0.0052, 0.0055],
            ),
        ),
    ]


def openings() -> list[Shape]:
    """What is hollow: the orbits, the nose, the palate."""
    return [
        *both_sides(
            Egg((0.084, 0.034, 0.0325), (0.024, 0.0165, 0.0180)),
            Egg((0.064, 0.033, 0.0255), (0.024, 0.012, 0.0110)),
            Egg((0.090, 0.001, 0.0060), (0.024, 0.011, 0.0072)),
        ),
        Egg((0.092, 0.013, 0.0), (0.022, 0.019, 0.0070)),
        Egg((0.060, -0.034, 0.0), (0.030, 0.012, 0.019)),
    ]


def temples() -> list[Shape]:
    """The hollows behind the eyes, where the chewing muscles lie."""
    return both_sides(Egg((0.034, 0.030, 0.068), (0.026, 0.050, 0.018)))


def cheek_arches() -> list[Part]:
    """The bars from the cheek bones to before the ears, and the orbits' outer walls.

    They bridge what is carved out of the cranium, so they are parts of their own.
    """
    points = [
        (0.068, 0.010, 0.050),
        (0.052, 0.011, 0.061),
        (0.024, 0.017, 0.067),
        (-0.002, 0.024, 0.062),
    ]
    right: list[Shape] = [
        Rod(points, [0.0065, 0.0050, 0.0045, 0.0065]),
        Plate(np.array(OUTER_WALL), 0.0024),
    ]
    left: list[Shape] = [Reflected(shape) for shape in right]
    return [Part(side, 420, grid=0.0013) for side in (right, left)]


def jaw() -> Part:
    """Condyles, rami, body, chin and lower teeth."""
    joint, corner, tip = (0.012, 0.019, 0.050), (0.022, -0.042, 0.047), (0.047, 0.010, 0.048)
    bend = (0.050, -0.038, 0.043)
    ramus = np.array([[joint, corner, bend], [joint, bend, tip]])
    notch = Egg((0.030, 0.026, 0.050), (0.0095, 0.015, 0.012))
    right: list[Shape] = [
        Rod([joint, (0.017, -0.010, 0.049), corner], [0.0058, 0.0050, 0.0055]),
        Egg((0.012, 0.020, 0.050), (0.0055, 0.0055, 0.0100)),
        Plate(ramus, 0.0036),
        Rod([tip, (0.048, -0.012, 0.046), bend], [0.0038, 0.0042, 0.006]),
        Rod(
            [corner, (0.050, -0.056, 0.041), (0.080, -0.064, 0.022), (0.088, -0.065, 0.0)],
            [0.0055, 0.0068, 0.0075, 0.0085],
        ),
        Rod(
            [(0.046, -0.043, 0.040), (0.072, -0.050, 0.027), (0.087, -0.052, 0.0)],
            [0.0062, 0.0062, 0.0065],
        ),
        Rod(
            [
                (0.054, -0.043, 0.030),
                (0.075, -0.0435, 0.024),
                (0.087, -0.0435, 0.013),
                (0.0905, -0.0435, 0.0),
            ],
            [0.0048, 0.0046, 0.0044, 0.0044],
        ),
    ]
    chin = Egg((0.0915, -0.065, 0.0), (0.0060, 0.0080, 0.013))
    return Part([*both_sides(*right), chin], 2000, blend=0.006, carved=both_sides(notch))
