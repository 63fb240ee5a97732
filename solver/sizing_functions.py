"""Where a sized skeleton's markers and ties are, as functions of posture and sizes.

Growth enters through `model.growth` as CasADi expressions, so every derivative that calibration
needs is exact.
"""

from __future__ import annotations

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.growth import (
    grown_marker_at_expression,
    grown_numbers_expression,
)
from condyle.model.skeleton import Size, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]


class SizingFunctions:
    """Marker places as a function of posture and sizes, with derivatives by CasADi."""

    def __init__(self, functions: SkeletonFunctions) -> None:
        skeleton, kinematics = functions.skeleton, functions.kinematics
        self._functions = functions
        self.groups = len(skeleton.sizing.groups)
        self._members = _members(skeleton)
        sizes = ca.SX.sym("sizes", self.groups)
        upright = ca.SX.sym("upright", 9)
        factors = ca.SX.ones(3 * len(skeleton.segments))
        for row, group in self._members:
            factors[row] = ca.exp(sizes[group])
        nominal = grown_marker_at_expression(skeleton, factors)
        numbers = grown_numbers_expression(skeleton, factors, nominal, upright)
        positions, step = kinematics.perturbed_marker_positions()
        points = ca.substitute(positions, kinematics.numbers, numbers)
        n = len(kinematics.freedoms.scalars)
        derivatives = ca.horzcat(
            ca.jacobian(points, step[:n]),
            ca.jacobian(points, sizes),
            ca.SX(points.numel(), 1),
            ca.jacobian(points, step[n:]),
        )
        inputs = [kinematics.scalars, kinematics.quaternions, sizes, upright, step]
        ties = functions.ties
        tie_rows = ca.substitute(ties.expression, kinematics.numbers, numbers) / ca.DM(ties.sd)
        tied, tie_step = kinematics.perturbed(tie_rows)
        tie_rates = ca.horzcat(
            ca.jacobian(tied, tie_step[:n]),
            ca.jacobian(tied, sizes),
            ca.SX(tied.numel(), 1),
            ca.jacobian(tied, tie_step[n:]),
        )
        self._ties = ca.Function(
            "sized_ties",
            [kinematics.scalars, kinematics.quaternions, sizes, upright, tie_step],
            [ca.densify(tied), ca.densify(tie_rates)],
        )
        self._points = ca.Function("sized_markers", inputs, [points, ca.densify(derivatives)])
        places = ca.SX.sym("places", 3 * len(skeleton.markers))
        fixed = grown_numbers_expression(skeleton, factors, places, upright)
        fixed_points = ca.substitute(positions, kinematics.numbers, fixed)
        fixed_rates = ca.horzcat(
            ca.jacobian(fixed_points, step[:n]),
            ca.jacobian(fixed_points, sizes),
            ca.SX(points.numel(), 1),
            ca.jacobian(fixed_points, step[n:]),
        )
        self._fixed_rates = ca.Function(
            "fixed_markers", [*inputs, places], [ca.densify(fixed_rates)]
        )
        self._places = ca.Function(
            "places", [sizes], [nominal, ca.densify(ca.jacobian(nominal, sizes))]
        )
        self._numbers = ca.Function("numbers", [sizes, upright], [numbers])

    def points(self, posture: Posture, upright: Upright) -> tuple[FloatArray, FloatArray]:
        """Marker places (markers, 3) in the laboratory and (3 markers, freedoms) derivatives."""
        n = len(self._functions.kinematics.freedoms.scalars)
        points, J = self._points(
            posture.scalars[0, :n],
            posture.quaternions[0].ravel(),
            posture.scalars[0, n : n + self.groups],
            upright.laboratory_from_upright.ravel(),
            0,
        )
        return np.asarray(points).reshape(-1, 3), np.asarray(J)

    def fixed_point_rates(
        self, posture: Posture, upright: Upright, places: FloatArray
    ) -> FloatArray:
        """(markers, 3, freedoms) How points at (markers, 3) `places`, which do not grow, move."""
        n = len(self._functions.kinematics.freedoms.scalars)
        J = self._fixed_rates(
            posture.scalars[0, :n],
            posture.quaternions[0].ravel(),
            posture.scalars[0, n : n + self.groups],
            upright.laboratory_from_upright.ravel(),
            0,
            places.ravel(),
        )
        J = np.asarray(J)
        return np.asarray(J.reshape(len(places), 3, J.shape[1]))

    def ties(self, posture: Posture, upright: Upright) -> tuple[FloatArray, FloatArray]:
        """Tie residuals (rows,) over their sd, and (rows, freedoms) derivatives."""
        n = len(self._functions.kinematics.freedoms.scalars)
        rows, J = self._ties(
            posture.scalars[0, :n],
            posture.quaternions[0].ravel(),
            posture.scalars[0, n : n + self.groups],
            upright.laboratory_from_upright.ravel(),
            0,
        )
        return np.asarray(rows).ravel(), np.asarray(J)

    def nominal_places(self, sizes: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Grown nominal places (markers, 3) and (markers, 3, groups) derivatives."""
        places, J = self._places(sizes)
        return np.asarray(places).reshape(-1, 3), np.asarray(J).reshape(-1, 3, self.groups)

    def numbers(self, sizes: FloatArray, upright: Upright) -> FloatArray:
        """The flat vector of numbers at some sizes."""
        return np.asarray(
            self._numbers(sizes, upright.laboratory_from_upright.ravel()), dtype=np.float64
        ).ravel()

    def factors(self, sizes: FloatArray, sd: FloatArray) -> dict[str, Size]:
        """Segment -> its factors and their sd."""
        skeleton = self._functions.skeleton
        factors = np.ones(3 * len(skeleton.segments))
        spread = np.zeros(3 * len(skeleton.segments))
        for row, group in self._members:
            factors[row] = np.exp(sizes[group])
            spread[row] = factors[row] * sd[group]
        return {
            segment.name: Size(
                as_vector(factors[3 * i : 3 * i + 3]), as_vector(spread[3 * i : 3 * i + 3])
            )
            for i, segment in enumerate(skeleton.segments)
        }


def _members(skeleton: Skeleton) -> list[tuple[int, int]]:
    """(row among the factors, group) for every sized axis."""
    return [
        (3 * skeleton.segment_index(segment) + axis, g)
        for g, group in enumerate(skeleton.sizing.groups)
        for segment, axis in group.members
    ]


def as_vector(values: FloatArray) -> tuple[float, float, float]:
    """Three numbers of an array as plain floats."""
    x, y, z = (float(v) for v in values)
    return (x, y, z)
