"""Upper arm and forearm as drawn: humerus, ulna, radius, in the reference posture's axes.

Palms face forward there, so the radius lies on the outer side of the ulna, both straight down.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Drum, Egg, Rod, frame_along, moved
from condyle.viz.shapes import Shape

FloatArray = NDArray[np.float64]

UPPER_ARM = {
    "proximal": (0.0, 0.0, 0.0),
    "distal": (0.0, -0.2817, 0.0),
    "EL": (0.0, -0.2789, 0.0314),
    "EM": (0.0, -0.2845, -0.0314),
}

ULNA = {
    "proximal": (0.0, 0.0, 0.0),
    "to.forearm": (0.0, -0.0016, 0.0179),
    "US": (0.0, -0.266, -0.027),
}

RADIUS = {
    "proximal": (0.0, 0.0, 0.0),
    "distal": (0.0, -0.2673, -0.0179),
    "RS": (0.0, -0.2704, 0.0091),
}

RADIUS_FROM_ULNA = (0.0, 0.0016, -0.0179)
"""m; the elbow's centre in the axes of `forearm`, where one segment has both bones."""

FOREARM = {
    **RADIUS,
    "elbow": RADIUS_FROM_ULNA,
    "US": tuple(np.add(ULNA["US"], RADIUS_FROM_ULNA)),
}

SPOOL = 0.0125
"""m; radius of the humerus' lower end where the ulna grips it."""


def humerus() -> Design:
    """Head, tubercles, shaft with the deltoid's ridge, spool and epicondyles."""
    shapes: list[Shape] = [
        Egg((0.0, 0.0, 0.0), (0.0235, 0.0235, 0.0235)),
        Rod([(-0.001, -0.008, 0.006), (0.002, -0.024, 0.010)], [0.0195, 0.0175]),
        Rod([(0.000, -0.003, 0.022), (0.002, -0.030, 0.016)], [0.0115, 0.0115]),
        Rod([(0.019, -0.008, 0.010), (0.010, -0.038, 0.010)], [0.0080, 0.0070]),
        Rod(
            [
                (0.002, -0.020, 0.010),
                (0.003, -0.055, 0.011),
                (0.003, -0.115, 0.008),
                (0.000, -0.190, 0.002),
                (0.001, -0.250, 0.000),
            ],
            [0.0190, 0.0135, 0.0120, 0.0103, 0.0115],
        ),
        Rod(
            [(0.006, -0.085, 0.013), (0.006, -0.118, 0.013), (0.004, -0.140, 0.009)],
            [0.0065, 0.0080, 0.006],
        ),
        Rod(
            [(0.001, -0.215, 0.003), (0.001, -0.255, 0.015), (0.000, -0.275, 0.025)],
            [0.0085, 0.0066, 0.0068],
        ),
        Rod(
            [(0.001, -0.225, -0.002), (0.001, -0.262, -0.014), (-0.001, -0.281, -0.025)],
            [0.0085, 0.0070, 0.0072],
        ),
        Egg((0.004, -0.2805, 0.0165), (0.0118, 0.0118, 0.0105)),
        Rod([(0.0, -0.282, -0.018), (0.0, -0.281, 0.010)], [SPOOL, 0.0105]),
    ]
    hollow = [
        Egg((-0.015, -0.262, -0.001), (0.0095, 0.012, 0.011)),
        Egg((0.014, -0.262, -0.002), (0.0065, 0.009, 0.010)),
    ]
    web = Egg((0.0, -0.262, 0.0), (0.0040, 0.014, 0.012))
    return Design(UPPER_ARM, [Part([*shapes, web], 2000, blend=0.010, carved=hollow)])


def ulna_part(shift: tuple[float, float, float] = (0.0, 0.0, 0.0)) -> Part:
    """Olecranon, the notch that grips the spool, shaft, head and styloid process."""

    def there(*points: tuple[float, float, float]) -> list[FloatArray]:
        return [moved(point, *shift) for point in points]

    shapes: list[Shape] = [
        Rod(
            there(
                (-0.013, 0.016, -0.005),
                (-0.021, 0.008, -0.005),
                (-0.020, -0.014, -0.005),
                (-0.011, -0.040, -0.007),
            ),
            [0.0070, 0.0095, 0.0105, 0.0095],
        ),
        Rod(
            there((-0.014, -0.018, -0.005), (0.005, -0.0195, -0.006), (0.012, -0.014, -0.006)),
            [0.0095, 0.0070, 0.0045],
        ),
        Rod(there((0.0, -0.024, -0.006), (-0.010, -0.060, -0.008)), [0.0080, 0.0060]),
        Rod(
            there(
                (-0.011, -0.040, -0.007),
                (-0.011, -0.100, -0.012),
                (-0.006, -0.175, -0.019),
                (-0.001, -0.248, -0.023),
            ),
            [0.0088, 0.0070, 0.0058, 0.0058],
        ),
        Rod(there((-0.001, -0.246, -0.023), (-0.001, -0.256, -0.023)), [0.0068, 0.0078]),
        Rod(there((-0.002, -0.255, -0.026), (-0.001, -0.264, -0.026)), [0.0042, 0.0026]),
    ]
    spool = Rod(there((0.0, 0.0, -0.022), (0.0, 0.0, 0.014)), [SPOOL + 0.0006] * 2)
    return Part(shapes, 1100, blend=0.006, carved=[spool])


def radius_part() -> Part:
    """Disc, neck, tuberosity, a shaft bowed outwards, the broad lower end."""
    shapes: list[Shape] = [
        Drum(
            np.array([0.0, -0.0065, 0.0]),
            frame_along((0.0, 1.0, 0.0)),
            (0.0112, 0.0112),
            0.0055,
            0.0025,
        ),
        Rod([(0.0, -0.008, 0.0), (0.0, -0.024, -0.001)], [0.0070, 0.0068]),
        Rod([(0.002, -0.026, -0.004), (0.002, -0.040, -0.004)], [0.0062, 0.0060]),
        Rod(
            [
                (0.0, -0.022, -0.001),
                (0.001, -0.060, 0.001),
                (0.002, -0.130, 0.006),
                (0.001, -0.200, 0.000),
                (0.001, -0.248, -0.007),
            ],
            [0.0068, 0.0066, 0.0070, 0.0080, 0.0100],
        ),
        Rod([(0.000, -0.250, -0.018), (0.001, -0.250, 0.001)], [0.0082, 0.0088]),
        Rod([(0.000, -0.2595, -0.016), (0.000, -0.2605, 0.001)], [0.0072, 0.0078]),
        Rod([(0.0, -0.255, 0.001), (0.0, -0.267, 0.0065)], [0.0075, 0.0038]),
    ]
    return Part(shapes, 1100, blend=0.006)


def ulna() -> Design:
    """The ulna alone, where the radius is a segment of its own."""
    return Design(ULNA, [ulna_part()])


def radius() -> Design:
    """The radius alone."""
    return Design(RADIUS, [radius_part()])


def forearm() -> Design:
    """Both, where one segment holds them, with the palm forward."""
    return Design(FOREARM, [radius_part(), ulna_part(RADIUS_FROM_ULNA)])
