"""One elementary move, and the functions that couple moves, as CasADi expressions.

Every rotation sign of the project is settled here: a positive angle turns right-handedly about its
axis, and a matrix takes columns written in the child to columns written in the parent.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import Polynomial, Spline, Turn, Vector

Expression = Any
"""A CasADi SX; the library ships no types."""


def cross_matrix(v: Expression | Vector) -> Expression:
    """The 3x3 matrix of ``v x``."""
    x, y, z = (v[i] for i in range(3))
    return ca.vertcat(ca.horzcat(0, -z, y), ca.horzcat(z, 0, -x), ca.horzcat(-y, x, 0))


def rotation_about(axis: Vector, angle: Expression) -> Expression:
    """Rotation by `angle` (rad) about the unit `axis`: Rodrigues' formula, 3x3.

    Exact zeros of the axis stay structural zeros, so that products of such matrices stay small.
    """
    cross = ca.sparsify(ca.DM(cross_matrix(axis)))
    square = ca.sparsify(cross @ cross)
    return ca.sparsify(ca.SX.eye(3) + ca.sin(angle) * cross + (1 - ca.cos(angle)) * square)


def rotation_of_turn(turn: Turn | None) -> NDArray[np.float64]:
    """(3, 3) The fixed rotation that a `turned` entry describes; identity for None."""
    if turn is None:
        return np.eye(3)
    return np.asarray(ca.evalf(rotation_about(turn.axis, ca.SX(turn.angle))), dtype=np.float64)


def rotation_of_vector(v: Expression) -> Expression:
    """Rotation of a rotation vector (rad), 3x3; differentiable at zero."""
    # 1e-24 rad^2 keeps the derivative finite at no turn and changes no digit of any other.
    angle = ca.sqrt(ca.dot(v, v) + 1e-24)
    half = angle / 2
    return rotation_of_quaternion(ca.vertcat(ca.cos(half), v * (ca.sin(half) / angle)))


def rotation_of_quaternion(q: Expression) -> Expression:
    """Rotation of a unit quaternion (scalar first), 3x3."""
    w, x, y, z = (q[i] for i in range(4))
    return ca.vertcat(
        ca.horzcat(1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)),
        ca.horzcat(2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)),
        ca.horzcat(2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)),
    )


def coupled(function: Polynomial | Spline, x: Expression) -> Expression:
    """The value of a coupling function at `x`, in SI and radians."""
    if isinstance(function, Polynomial):
        return _polynomial(function, x)
    return _natural_spline(function, x)


def _polynomial(function: Polynomial, x: Expression) -> Expression:
    """P(x), continued outside `between` along the tangent at the nearer end."""
    ascending = np.array(function.coefficients, dtype=np.float64)
    if function.between is None:
        return _horner(ascending, x)
    low, high = function.between
    nearest = ca.fmin(ca.fmax(x, low), high)
    slope = _horner(ascending[1:] * np.arange(1, len(ascending)), nearest)
    return _horner(ascending, nearest) + slope * (x - nearest)


def _natural_spline(function: Spline, x: Expression) -> Expression:
    """The natural cubic through the points; its end pieces continue as straight lines."""
    # Heavy, and few models have one.
    from scipy.interpolate import CubicSpline

    knots, values = np.array(function.points).T
    spline = CubicSpline(knots, values, bc_type="natural")
    first, last = (0.0, 0.0, float(spline(knots[0], 1))), (0.0, 0.0, float(spline(knots[-1], 1)))
    pieces = np.column_stack([(0.0, *first[1:], values[0]), spline.c, (0.0, *last[1:], values[-1])])
    starts = np.concatenate([[knots[0]], knots])
    breaks = ca.DM(knots)
    offset = x - ca.pw_const(x, breaks, ca.DM(starts))
    return _horner([ca.pw_const(x, breaks, ca.DM(row)) for row in pieces[::-1]], offset)


def _horner(ascending: Sequence[Expression] | NDArray[np.float64], x: Expression) -> Expression:
    value = ca.SX(0)
    for coefficient in reversed(list(ascending)):
        value = value * x + coefficient
    return value
