"""Mass properties of a sized person: how heavy each segment is, where its centre lies, how it turns.

Masses grow with the person's mass over the reference person's; centres and radii of gyration grow
with the segment's size factors. What a model leaves unsaid stays unsaid: a segment without a mass
and a centre has no inertia here, and nothing is guessed for it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import isfinite

import numpy as np
from numpy.typing import NDArray

from condyle.model.growth import grown_segment
from condyle.model.skeleton import Skeleton, Vector

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SegmentInertia:
    """One sized segment as a rigid body.

    Attributes
    ----------
    mass : float
        kg.
    centre : Vector
        m, the centre of mass in the segment.
    moments : Vector
        kg m^2 about the centre of mass, for turning about the segment's x, y, z, which the
        language takes for principal axes. Zero where the model gives no radii of gyration.
    """

    mass: float
    centre: Vector
    moments: Vector


def mass_ratio(skeleton: Skeleton) -> float:
    """The person's mass over the reference person's; 1 where either is unknown."""
    if skeleton.subject is None or skeleton.person is None:
        return 1.0
    ratio = skeleton.subject.mass / skeleton.person.mass
    return ratio if isfinite(ratio) else 1.0


def sized_inertias(skeleton: Skeleton) -> dict[str, SegmentInertia]:
    """Segment -> its inertia, for every segment whose mass and centre the model gives."""
    factors = {name: size.factors for name, size in skeleton.sizes.items()}
    ratio = mass_ratio(skeleton)
    found = {}
    for segment in skeleton.segments:
        grown = grown_segment(segment, factors)
        if grown.mass is None or not isfinite(grown.mass) or grown.centre_of_mass is None:
            continue
        mass = grown.mass * ratio
        x, y, z = grown.gyration or (0.0, 0.0, 0.0)
        moments = (mass * x * x, mass * y * y, mass * z * z)
        found[segment.name] = SegmentInertia(mass, grown.centre_of_mass, moments)
    return found


def total_mass(inertias: Mapping[str, SegmentInertia]) -> float:
    """Mass of all segments together, kg."""
    return sum(inertia.mass for inertia in inertias.values())


def centre_of_mass(
    inertias: Mapping[str, SegmentInertia], segment_names: tuple[str, ...], poses: FloatArray
) -> FloatArray:
    """The common centre of mass.

    Parameters
    ----------
    inertias : segment -> SegmentInertia
    segment_names : in the order of `poses`
    poses : (frames, segments, 4, 4) m
        Laboratory-from-segment.

    Returns
    -------
    (frames, 3) m, laboratory axes; NaN where no segment has a mass.
    """
    weighted = np.zeros((len(poses), 3))
    for i, name in enumerate(segment_names):
        if name in inertias:
            centre_in_segment = np.array([*inertias[name].centre, 1.0])
            weighted += inertias[name].mass * (poses[:, i, :3] @ centre_in_segment)
    mass = total_mass(inertias)
    return weighted / mass if mass > 0 else np.full_like(weighted, np.nan)
