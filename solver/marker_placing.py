"""Where each marker sits on the sized skeleton, and how well that is known.

The departures that `sizing_problem` eliminated come back from the residuals:
d = k R' (y - p), k = w^2 / (w^2 + s^2), with w how far a marker may sit from its nominal place and s
the measurement sd; their covariance follows from that of posture and sizes.
"""

from __future__ import annotations

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


def place_markers(
    problem: SizingProblem,
    posture: Posture,
    cov: FloatArray,
    matched: MatchedMarkers,
    still: StillPart,
) -> tuple[PlacedMarker, ...]:
    """Where each marker sits, from its residual: d = k R' (y - p), k = w^2 / (w^2 + s^2)."""
    skeleton, evaluator = problem.functions.skeleton, problem.evaluator
    n, groups = problem.coordinates, evaluator.groups
    sizes = posture.scalars[0, n : n + groups]
    points, J = evaluator.points(posture, problem.upright)
    nominal, nominal_rates = evaluator.nominal_places(sizes)
    numbers = evaluator.numbers(sizes, problem.upright)
    own = Posture(posture.scalars[:, :n], posture.quaternions)
    poses = problem.functions.poses(own, numbers)[0]
    measured = mean_positions(matched.positions[still.frames])
    found = []
    for i, marker in enumerate(skeleton.markers):
        if not is_seen(measured[i]):
            continue
        R = poses[skeleton.segment_index(marker.segment)][:3, :3]
        within = marker.placed_within if marker.at is not None else np.inf
        share = 1.0 if np.isinf(within) else within**2 / (within**2 + MEASUREMENT_SD**2)
        departure = share * R.T @ (measured[i] - points[i])
        rates = -share * R.T @ J[3 * i : 3 * i + 3]
        if marker.at is not None:
            rates[:, n : n + groups] += nominal_rates[i]
        variance = rates @ cov @ rates.T + share * MEASUREMENT_SD**2 * np.eye(3)
        found.append(
            PlacedMarker(
                marker.name,
                as_vector(nominal[i] + departure),
                as_vector(np.sqrt(np.diag(variance))),
                as_vector(departure) if marker.at is not None else None,
                marker.placed_within if marker.at is not None else None,
            )
        )
    return tuple(found)
