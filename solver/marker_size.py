"""Markers of another size than the model's: how much further from the bone their centres sit.

A shipped model's nominal places are the centres of markers of `USUAL_DIAMETER`, in front of the bone by
skin and half a marker. A larger one sits further out by the difference of the radii, along the line from the
landmark that has the marker's name to its nominal place. A marker without such a landmark stays: it may sit
anywhere nearby anyway.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from condyle.model.errors import FitError
from condyle.model.skeleton import Marker, Skeleton, Vector

USUAL_DIAMETER = 0.014
"""m [common practice], as `lower_limbs` says of its markers."""
SMALLEST, LARGEST = 0.001, 0.06
"""m; what is sold as a marker lies between 2 and 50 mm."""


def with_marker_diameter(skeleton: Skeleton, diameter: float) -> Skeleton:
    """The skeleton with its nominal marker places for markers of a diameter (m).

    Raises
    ------
    FitError
        If no marker has that diameter.
    """
    if not SMALLEST <= diameter <= LARGEST:
        raise FitError(
            f"--marker-diameter {diameter:g}: no marker has that size.\n  Give the diameter in metres, such as 0.014."
        )
    further = (diameter - USUAL_DIAMETER) / 2
    return replace(skeleton, markers=tuple(_moved(skeleton, m, further) for m in skeleton.markers))


def _moved(skeleton: Skeleton, marker: Marker, further: float) -> Marker:
    landmarks = skeleton.segments[skeleton.segment_index(marker.segment)].landmarks
    landmark = landmarks.get(marker.name)
    if marker.at is None or landmark is None:
        return marker
    outward = np.subtract(marker.at, landmark)
    length = float(np.linalg.norm(outward))
    if length == 0.0:
        return marker
    x, y, z = (float(v) for v in marker.at + outward * (further / length))
    place: Vector = (x, y, z)
    return replace(marker, at=place)
