"""Where each marker sits on the sized skeleton, and how well that is known.

The departures that `sizing_problem` eliminated come back from the residuals:
d = k R' (y - p), k = w^2 / (w^2 + s^2), with w how far a marker may sit from its nominal place and s
the measurement sd; their covariance follows from that of posture and sizes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.recording.recording import is_seen, mean_positions
from condyle.recording.still import StillPart
from condyle.solver.matching import (
    MatchedMarkers,
)
from condyle.solver.posture import Posture
from condyle.solver.results import PlacedMarker
from condyle.solver.sizing_functions import as_vector
from condyle.solver.sizing_problem import MEASUREMENT_SD, SizingProblem

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class MarkerPlacing:
    """Where markers sit.

    Attributes
    ----------
    markers : PlacedMarkers
    rates : (markers, 3, freedoms)
        Derivative of every marker's place for a step of the sizing problem; 0 where not placed.
    variance : (markers,) m^2
        What the measurement itself adds per axis.
    """

    markers: tuple[PlacedMarker, ...]
    rates: FloatArray
    variance: FloatArray


def place_markers(
    problem: SizingProblem,
    posture: Posture,
    cov: FloatArray,
    matched: MatchedMarkers,
    still: StillPart,
) -> MarkerPlacing:
    """Where each marker sits, from its residual: d = k R' (y - p), k = w^2 / (w^2 + s^2)."""
    skeleton, evaluator = problem.functions.skeleton, problem.evaluator
    n, groups = problem.coordinates, evaluator.groups
    sizes = posture.scalars[0, n : n + groups]
    points, _ = evaluator.points(posture, problem.upright)
    nominal, nominal_rates = evaluator.nominal_places(sizes)
    numbers = evaluator.numbers(sizes, problem.upright)
    own = Posture(posture.scalars[:, :n], posture.quaternions)
    poses = problem.functions.poses(own, numbers)[0]
    measured = mean_positions(matched.positions[still.frames])
    rotation = np.array(
        [poses[skeleton.segment_index(m.segment), :3, :3] for m in skeleton.markers]
    )
    within = np.array([m.placed_within if m.at is not None else np.inf for m in skeleton.markers])
    share = 1 / (1 + (MEASUREMENT_SD / within) ** 2)
    away = np.einsum("mji,mj->mi", rotation, np.nan_to_num(measured - points))
    moving = evaluator.fixed_point_rates(posture, problem.upright, nominal + away)
    rates = -share[:, None, None] * np.swapaxes(rotation, 1, 2) @ moving
    # placed = (1 - k) m + k R' (y - o): what grows with the segment is only the prior's part.
    rates[:, :, n : n + groups] += (1 - share)[:, None, None] * nominal_rates
    variance = np.einsum("mai,ij,maj->ma", rates, cov, rates, optimize=True)
    sd = np.sqrt(variance + (share * MEASUREMENT_SD**2)[:, None])
    departure = share[:, None] * away
    seen = is_seen(measured)
    placed = tuple(
        PlacedMarker(
            marker.name,
            as_vector(nominal[i] + departure[i]),
            as_vector(sd[i]),
            as_vector(departure[i]) if marker.at is not None else None,
            marker.placed_within if marker.at is not None else None,
        )
        for i, marker in enumerate(skeleton.markers)
        if seen[i]
    )
    return MarkerPlacing(
        placed,
        np.where(seen[:, None, None], rates, 0.0),
        np.where(seen, share * MEASUREMENT_SD**2, 0.0),
    )
