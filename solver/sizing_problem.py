"""What sizing a skeleton to one person minimises, and its derivatives.

The maximum a posteriori of everything at once, never ratios of marker pairs. With
y_m the mean measured place of marker m in the still part, p_m(x, f) its place on the model,
d_m its departure from the nominal place (in the segment's axes),

    sum |y_m - p_m(x, f) - R d_m|^2 / s^2 + |d_m|^2 / placed_within_m^2      markers
    + sum (ln f_g - ln S)^2 / factor_sd^2 + (ln S - ln S0)^2 / s_S^2         sizes
    + sum ((c - expected) / sd)^2 + pulls to rest                            posture

is minimised over the posture x, the factors f, the overall scale S and the departures d. Since R is
a rotation and both marker terms are isotropic, d can be eliminated exactly: what remains weighs a
marker by 1 / (s^2 + placed_within^2), and d follows from its residual.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.cone_limits import limit_terms
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.sizing_functions import SizingFunctions
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MEASUREMENT_SD = 0.001
"""m per axis, of the mean over the still part; skin is counted from there (the language's rule)."""
SCALE_SD, SCALE_SD_WITH_STATURE = 0.10, 0.01
"""Of ln(overall scale), without and with a measured stature (the language's rule)."""


@dataclass(frozen=True, slots=True)
class SizingProblem:
    """The sum of squares of the module's docstring, departures eliminated.

    The posture's scalars are the coordinates, then ln of each size factor, then ln of the overall
    scale; its balls are the model's.
    """

    functions: SkeletonFunctions
    measured: FloatArray
    weights: FloatArray
    upright: Upright
    scale: tuple[float, float]
    evaluator: SizingFunctions

    @property
    def coordinates(self) -> int:
        """How many of the scalars are coordinates."""
        return len(self.functions.kinematics.freedoms.scalars)

    @property
    def freedoms(self) -> int:
        """Length of a step."""
        return self.functions.kinematics.freedoms.size + self.evaluator.groups + 1

    def step_columns(self) -> IntArray:
        """Where the skeleton's own freedoms stand in a step."""
        n, extra = self.coordinates, self.evaluator.groups + 1
        own = self.functions.kinematics.freedoms.size
        return np.concatenate([np.arange(n), np.arange(n + extra, own + extra)])

    def __call__(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H, g and cost; there is one frame."""
        points, J = self.evaluator.points(posture, self.upright)
        seen = self.weights > 0
        residual = np.where(seen[:, None], self.measured - points, 0.0).ravel()
        W = np.repeat(self.weights, 3)
        H, g = (J.T * W) @ J, J.T @ (W * residual)
        cost = 0.5 * float((W * residual**2).sum())
        cost += self._tie_terms(posture, H, g)
        cost += self._size_terms(posture, H, g)
        cost += self._posture_terms(posture, H, g)
        whole = H[None], g[None], np.array([cost])
        self._add_balls(posture, *whole)
        return whole

    def curvature(self, posture: Posture, rows: IntArray) -> FloatArray:
        """Not worked out: a static fits well, and Gauss-Newton suffices."""
        return np.zeros((len(rows), self.freedoms, self.freedoms))

    def _tie_terms(self, posture: Posture, H: FloatArray, g: FloatArray) -> float:
        """Ties of the sized skeleton, to within their sd."""
        residual, J = self.evaluator.ties(posture, self.upright)
        H += J.T @ J
        g -= J.T @ residual
        return 0.5 * float(residual @ residual)

    def _add_balls(self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray) -> None:
        """Limits and pulls of spherical joints."""
        terms = [(b.ball, limit_terms(b, posture)) for b in self.functions.limited_balls]
        terms += [(pull.ball, pull.terms(posture)) for pull in self.functions.pulled_balls]
        for ball, (more_H, more_g, more_cost) in terms:
            here = self._ball_slice(ball)
            H[:, here, here] += more_H
            g[:, here] += more_g
            cost += more_cost

    def _ball_slice(self, ball: int) -> slice:
        own = self.functions.kinematics.freedoms.ball_slice(ball)
        first = int(self.step_columns()[own][0])
        return slice(first, first + 3)

    def _size_terms(self, posture: Posture, H: FloatArray, g: FloatArray) -> float:
        """Factors about the overall scale, and the scale about what is known of it."""
        n, groups = self.coordinates, self.evaluator.groups
        sizes = posture.scalars[0, n:]
        expected, scale_sd = self.scale
        rows = np.zeros((groups + 1, groups + 1))
        rows[:groups, :groups] = np.eye(groups) / self.functions.skeleton.sizing.factor_sd
        rows[:groups, groups] = -1 / self.functions.skeleton.sizing.factor_sd
        rows[groups, groups] = 1 / scale_sd
        misfit = -rows @ sizes
        misfit[groups] += expected / scale_sd
        here = slice(n, n + groups + 1)
        H[here, here] += rows.T @ rows
        g[here] += rows.T @ misfit
        return 0.5 * float(misfit @ misfit)

    def _posture_terms(self, posture: Posture, H: FloatArray, g: FloatArray) -> float:
        """What is expected of the posture in the static, and pulls to rest elsewhere."""
        skeleton, columns = self.functions.skeleton, self.step_columns()
        own = Posture(posture.scalars[:, : self.coordinates], posture.quaternions)
        told = reported_values(self.functions.kinematics, own)
        expectations = {
            c.name: (c.rest, c.rest_sd) for c in skeleton.coordinates if c.rest_sd is not None
        }
        expectations |= {n: (e.value, e.sd) for n, e in skeleton.sizing.standing.items()}
        cost = 0.0
        for name, (value, sd) in expectations.items():
            found, rate = told[name][0][0], told[name][1][0]
            misfit = (value - found) / sd
            H[np.ix_(columns, columns)] += np.outer(rate, rate) / sd**2
            g[columns] += rate * misfit / sd
            cost += misfit**2 / 2
        return cost

    def pulled(self) -> BoolArray:
        """(freedoms,) Which freedoms an expectation or a pull holds."""
        posture = Posture(
            self.start_scalars()[None],
            np.tile([1.0, 0, 0, 0], (1, len(self.functions.kinematics.freedoms.balls), 1)),
        )
        H = np.zeros((self.freedoms, self.freedoms))
        self._size_terms(posture, H, np.zeros(self.freedoms))
        self._posture_terms(posture, H, np.zeros(self.freedoms))
        pulled = np.diag(H) > 0
        for pull in self.functions.pulled_balls:
            pulled[self._ball_slice(pull.ball)] = True
        return np.asarray(pulled)

    def start_scalars(self) -> FloatArray:
        """Every coordinate as expected in the static, else at rest; every factor 1."""
        standing = self.functions.skeleton.sizing.standing
        values = []
        for c in self.functions.skeleton.coordinates:
            if c.follows is not None:
                continue
            value = standing[c.name].value if c.name in standing else c.rest
            values.append(c.held if c.held is not None else value)
        sizes = np.zeros(self.evaluator.groups + 1)
        return np.concatenate([np.clip(values, *self._limits()), sizes])

    def _limits(self) -> tuple[FloatArray, FloatArray]:
        free = [c for c in self.functions.skeleton.coordinates if c.follows is None]
        lower = [c.lower if c.held is None else c.held for c in free]
        upper = [c.upper if c.held is None else c.held for c in free]
        return np.array(lower), np.array(upper)

    def bounds(self) -> Bounds:
        """Ranges; held coordinates and those that nothing here tells are pinned."""
        lower, upper = self._limits()
        extra = np.full(self.evaluator.groups + 1, np.inf)
        pinned = ~self.pulled()
        moved = (self.functions.moves_marker & (self.weights > 0)).any(axis=1)
        moved |= self.functions.ties.moved_by
        columns = self.step_columns()
        pinned[columns] &= ~moved
        pinned[columns] |= self.functions.held
        return Bounds(np.r_[lower, -extra][None], np.r_[upper, extra][None], pinned[None])
