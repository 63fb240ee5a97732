"""Sizing a skeleton to one person: posture, size factors and marker places as one estimate.

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

from collections.abc import Mapping
from dataclasses import dataclass, replace

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.growth import (
    grown_marker_at_expression,
    grown_numbers_expression,
)
from condyle.model.skeleton import Marker, Person, Size, Skeleton
from condyle.recording.recording import Recording, is_seen
from condyle.recording.still import StillPart, still_part
from condyle.solver.cold_start import fit_cold
from condyle.solver.cone_limits import add_limits
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds, Solution, minimise
from condyle.solver.matching import (
    MatchedMarkers,
    check_scale,
    choose_up,
    match_markers,
    root_alignment,
)
from condyle.solver.observability import covariance, undetermined
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.results import Calibration, PlacedMarker
from condyle.solver.static_faults import check_sides
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
        self._add_limits(posture, *whole)
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

    def _add_limits(self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray) -> None:
        columns = self.step_columns()
        for ball in self.functions.limited_balls:
            first = columns[self.functions.kinematics.freedoms.ball_slice(ball.ball)][0]
            add_limits(ball, posture, slice(first, first + 3), H, g, cost)

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
        return np.asarray(np.diag(H) > 0)

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
        return Bounds(np.r_[lower, -extra][None], np.r_[upper, extra][None], pinned[None])


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
                _vector(factors[3 * i : 3 * i + 3]), _vector(spread[3 * i : 3 * i + 3])
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


def _vector(values: FloatArray) -> tuple[float, float, float]:
    x, y, z = (float(v) for v in values)
    return (x, y, z)


def calibrate(
    skeleton: Skeleton,
    static: Recording,
    *,
    stature: float | None = None,
    mass: float | None = None,
    labels: Mapping[str, str] | None = None,
    up: str | None = None,
    start: float | None = None,
    end: float | None = None,
) -> Calibration:
    """Size a skeleton and place its markers on the person of a static trial.

    Parameters
    ----------
    skeleton : Skeleton
        With its nominal places; what an earlier calibration placed is not used.
    static : Recording
    stature, mass : float, optional
        m and kg of this person.
    labels : model marker -> label in the recording, optional
    up : str, optional
        The laboratory axis that points up.
    start, end : float, optional
        s; the still part, where the person stood otherwise than quietly.

    Raises
    ------
    FitError
        If the static cannot serve; the message says why and what would.
    """
    skeleton = unsized(skeleton)
    _check_person(skeleton, stature, mass)
    matched = match_markers(skeleton, static, labels)
    functions = SkeletonFunctions(skeleton)
    # Before asking whether anything stands still: in a wrong unit nothing does.
    check_scale(root_alignment(functions, matched.positions), static, skeleton)
    still = still_part(static, start=start, end=end)
    mean = _mean_positions(matched.positions[still.frames])[None]
    alignment = root_alignment(functions, mean)
    upright = choose_up(functions, static, mean, asked=up)
    check_sides(functions, static, mean, alignment)
    problem = _problem(functions, mean[0], upright, stature)
    solution, free = _minimised(problem, mean, float(np.log(max(alignment.scale[0], 0.1))))
    return _assembled(problem, solution, free, still, matched, (stature, mass), static)


def unsized(skeleton: Skeleton) -> Skeleton:
    """The reference person again: no sizes, no placed markers."""
    markers = tuple(replace(m, placed=None, placed_sd=None) for m in skeleton.markers)
    return replace(skeleton, markers=markers, sizes={})


def _check_person(skeleton: Skeleton, stature: float | None, mass: float | None) -> None:
    for word, value, low, high in (
        ("--stature", stature, 0.4, 2.8),
        ("--mass", mass, 2.0, 400.0),
    ):
        if value is None:
            continue
        if skeleton.person is None:
            raise FitError(
                f"{word} cannot be used: {skeleton.name} does not say whom its numbers describe.\n"
                "  Add person: {stature: ..., mass: ...} to the model."
            )
        if not low <= value <= high:
            raise FitError(
                f"{word} {value:g} is no person's.\n  Give metres for a stature, kilograms for a "
                f"mass, between {low:g} and {high:g}."
            )


def _mean_positions(positions: FloatArray) -> FloatArray:
    """(markers, 3) Mean over the frames in which each was seen; NaN where never."""
    seen = is_seen(positions)
    count = seen.sum(axis=0)
    total = np.where(seen[..., None], positions, 0.0).sum(axis=0)
    return np.asarray(total / np.where(count, count, np.nan)[:, None])


def _problem(
    functions: SkeletonFunctions, mean: FloatArray, upright: Upright, stature: float | None
) -> SizingProblem:
    skeleton = functions.skeleton
    present = is_seen(mean)
    known = np.array([m.at is not None for m in skeleton.markers])
    within = np.array([m.placed_within for m in skeleton.markers])
    if (present & known).sum() < 3:
        raise FitError(
            f"the static shows {int((present & known).sum())} of the markers that {skeleton.name} "
            "has a nominal place for; sizing needs at least 3.\n"
            "  Check the labels, or give --labels MAP.yaml (model marker: label in the recording)."
        )
    scale = (0.0, SCALE_SD)
    if stature is not None and skeleton.person is not None:
        scale = (float(np.log(stature / skeleton.person.stature)), SCALE_SD_WITH_STATURE)
    return SizingProblem(
        functions,
        np.nan_to_num(mean),
        np.where(present & known, 1 / (within**2 + MEASUREMENT_SD**2), 0.0),
        upright,
        scale,
        SizingFunctions(functions),
    )


def _minimised(
    problem: SizingProblem, mean: FloatArray, log_scale: float
) -> tuple[Solution, BoolArray]:
    """The estimate, and which freedoms it determines."""
    groups = problem.evaluator.groups
    sizes = np.full(groups, log_scale)
    frame = FrameProblem(
        problem.functions,
        np.nan_to_num(mean),
        problem.weights[None],
        problem.evaluator.numbers(sizes, problem.upright),
    )
    first = fit_cold(frame, frame.bounds()).posture
    bounds = problem.bounds()
    n = problem.coordinates
    unseen = ~frame.seen()[0, :n]
    scalars = np.where(unseen, problem.start_scalars()[:n], first.scalars[0])
    start = Posture(np.r_[scalars, sizes, log_scale][None], first.quaternions)
    solution = minimise(problem, start, bounds, damping=1e-4)
    H, _, _ = problem(solution.posture, np.arange(1))
    pins, _ = undetermined(H, ~bounds.pinned)
    if pins.any():
        bounds = Bounds(bounds.lower, bounds.upper, bounds.pinned | pins)
        solution = minimise(problem, solution.posture, bounds, damping=1e-4)
    return solution, ~bounds.pinned


def _assembled(
    problem: SizingProblem,
    solution: Solution,
    free: BoolArray,
    still: StillPart,
    matched: MatchedMarkers,
    person: tuple[float | None, float | None],
    static: Recording,
) -> Calibration:
    skeleton = problem.functions.skeleton
    n, groups = problem.coordinates, problem.evaluator.groups
    H, _, _ = problem(solution.posture, np.arange(1))
    cov = covariance(H, free)[0]
    sizes = solution.posture.scalars[0, n : n + groups]
    sizes_sd = np.sqrt(np.diag(cov)[n : n + groups])
    placed = _placed_markers(problem, solution.posture, cov, matched, still)
    by_name = {marker.name: marker for marker in placed}
    stature, mass = person
    nan = float("nan")
    sized = replace(
        skeleton,
        sizes=problem.evaluator.factors(sizes, sizes_sd),
        markers=tuple(_with_place(m, by_name.get(m.name)) for m in skeleton.markers),
        subject=Person(nan if stature is None else stature, nan if mass is None else mass),
        labels={name: label for name, label in matched.labels.items() if name != label},
        up=problem.upright.axis,
    )
    own = Posture(solution.posture.scalars[:, :n], solution.posture.quaternions)
    told = reported_values(problem.functions.kinematics, own)
    undetermined_names = tuple(
        name
        for name, (_, rate) in told.items()
        if (np.abs(rate[0]) > 0)[~free[0][problem.step_columns()]].any()
        and not _is_held(skeleton, name)
    )
    return Calibration(
        skeleton=sized,
        static=static.name,
        still=(still.start, still.end),
        up=problem.upright.axis,
        up_how=problem.upright.how,
        log_scale=float(solution.posture.scalars[0, n + groups]),
        posture={name: float(value[0]) for name, (value, _) in told.items()},
        undetermined=undetermined_names,
        markers=placed,
        without_label=matched.without_label,
        other_labels=matched.other_labels,
        cost=float(solution.cost[0]),
        converged=bool(solution.converged[0]),
        own_posture=own,
    )


def _is_held(skeleton: Skeleton, name: str) -> bool:
    return any(c.name == name and c.held is not None for c in skeleton.coordinates)


def _with_place(marker: Marker, place: PlacedMarker | None) -> Marker:
    if place is None:
        return marker
    return replace(marker, placed=place.placed, placed_sd=place.placed_sd)


def _placed_markers(
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
    measured = _mean_positions(matched.positions[still.frames])
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
                _vector(nominal[i] + departure),
                _vector(np.sqrt(np.diag(variance))),
                _vector(departure) if marker.at is not None else None,
                marker.placed_within if marker.at is not None else None,
            )
        )
    return tuple(found)
