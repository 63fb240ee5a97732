"""Where published regressions put the hip's centre, from the spines of the pelvis.

Decided here: the axes the formulas are read in, their coefficients, and how far to trust them. Plain
arithmetic throughout, so that one function serves numbers and CasADi expressions alike.

The landmarks are bone, not markers: nothing is taken off for skin or half a marker. Whoever has
only markers takes that off first, or lets calibration estimate the landmarks.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot, pi, sqrt
from typing import Any, Literal, TypeAlias

import numpy as np

from condyle.model.skeleton import Regression, Vector

Side: TypeAlias = Literal["right", "left"]
Coefficients: TypeAlias = tuple[float, float, float, float]

CORRELATION_OF_SIDES = 0.5
"""Of a regression's errors on the right and on the left, z counted outwards on both sides.

Assumed: no publication at hand gives it. Both hips are predicted from one pelvis, so what a
person's pelvis has of its own is shared; half of the variance is taken to be that.
"""


@dataclass(frozen=True, slots=True)
class HipRegression:
    """One published formula, linear in what is measured of the pelvis and the leg.

    Attributes
    ----------
    forward, up, outward : four floats
        A constant (m), and factors of the pelvis' width (between the ASIS), its depth (between the
        middles of ASIS and PSIS) and the leg's length (ASIS to inner ankle), giving m from the
        middle of the ASIS.
    sd : Vector
        m, expected error forward, up and outward.
    """

    forward: Coefficients
    up: Coefficients
    outward: Coefficients
    sd: Vector


_MANTOVANI_SD = hypot(0.0123, 0.0059) / sqrt(3)  # 0.0079 m
_BELL_SD = 0.0190 / sqrt(8 / pi)  # 0.0119 m

HIP_REGRESSIONS: dict[Regression, HipRegression] = {
    # Harrington et al. 2007, J Biomech 40:595, one predictor an axis [read in a transcription]. Error:
    # 12.3 +- 5.9 mm in space in 67 people imaged by CT (Mantovani et al. 2016 [abstract]), so a
    # mean square of 12.3^2 + 5.9^2, shared evenly between the axes.
    "harrington_2007": HipRegression(
        forward=(-0.0099, 0, -0.24, 0),
        up=(-0.0109, -0.30, 0, 0),
        outward=(0.0073, 0.33, 0, 0),
        sd=(_MANTOVANI_SD, _MANTOVANI_SD, _MANTOVANI_SD),
    ),
    # Bell, Pedersen & Brand 1990, J Biomech 23:617 [read in a transcription]. Error: 19.0 mm in space
    # on average, in 7 men; the mean length of an even normal error is sqrt(8 / pi) sd.
    "bell_1990": HipRegression(
        forward=(0, -0.19, 0, 0),
        up=(0, -0.30, 0, 0),
        outward=(0, 0.36, 0, 0),
        sd=(_BELL_SD, _BELL_SD, _BELL_SD),
    ),
    # Hara et al. 2016, Sci Rep 6:37707, from 157 pelves imaged by CT [read in transcriptions]. Error:
    # leave-one-out, axis by axis [as noted in a transcription]. That is within their own people, and
    # the leg was measured there, so it flatters beside the 12.3 mm of other people above.
    "hara_2016": HipRegression(
        forward=(0.011, 0, 0, -0.063),
        up=(-0.009, 0, 0, -0.078),
        outward=(0.008, 0, 0, 0.086),
        sd=(0.0052, 0.0044, 0.0038),
    ),
}


def regressed_centre(
    name: Regression,
    asis_right: Any,
    asis_left: Any,
    psis_right: Any,
    psis_left: Any,
    *,
    leg_length: Any = None,
    side: Side,
) -> Any:
    """The hip's centre by a published regression.

    The axes start at the middle of the ASIS: z runs through both to the right, x forward in their plane
    with the middle of the PSIS, y up (Wu et al. 2002).

    Parameters
    ----------
    name : key of :data:`HIP_REGRESSIONS`
    asis_right, asis_left, psis_right, psis_left : (3,) m
        Bony landmarks in any one frame: arrays, or CasADi vectors.
    leg_length : m, from the ASIS to the tip of the inner ankle
        Only where :func:`needs_leg_length` says so.
    side : "right" or "left"

    Returns
    -------
    (3,) m, in the frame of the landmarks, and of their kind.
    """
    if leg_length is None and needs_leg_length(name):
        raise ValueError(f"{name} needs the length of the leg")
    middle = (asis_right + asis_left) / 2
    ahead = middle - (psis_right + psis_left) / 2
    across = asis_right - asis_left
    z = _unit(across)
    x = _unit(ahead - z * _dot(ahead, z))
    y = _cross(z, x)
    measured = (1.0, _length(across), _length(ahead), 0.0 if leg_length is None else leg_length)
    regression = HIP_REGRESSIONS[name]
    outward = _weighed(regression.outward, measured)
    right = outward if side == "right" else -outward
    forward, up = _weighed(regression.forward, measured), _weighed(regression.up, measured)
    return middle + x * forward + y * up + z * right


def needs_leg_length(name: Regression) -> bool:
    """Whether a regression asks for the length of the leg."""
    regression = HIP_REGRESSIONS[name]
    return any(axis[3] != 0 for axis in (regression.forward, regression.up, regression.outward))


def published_sd(name: Regression) -> Vector:
    """A regression's expected error, m: forward, up and outward."""
    return HIP_REGRESSIONS[name].sd


def _weighed(coefficients: Coefficients, measured: tuple[Any, ...]) -> Any:
    return sum(c * m for c, m in zip(coefficients, measured, strict=True) if c != 0)


def _dot(a: Any, b: Any) -> Any:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


def _length(a: Any) -> Any:
    return _dot(a, a) ** 0.5


def _unit(a: Any) -> Any:
    return a / _length(a)


def _cross(a: Any, b: Any) -> Any:
    """The cross product, told along the unit vectors: so neither arrays nor expressions need stacking."""
    e = np.eye(3)
    return (
        (a[1] * b[2] - a[2] * b[1]) * e[0]
        + (a[2] * b[0] - a[0] * b[2]) * e[1]
        + (a[0] * b[1] - a[1] * b[0]) * e[2]
    )
