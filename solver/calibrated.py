"""A person's estimate in words: the sized skeleton, its placed markers and freed joints, their doubt.

Of a marker that movement has shown, the place is where it sits on average in the chosen frames, since
that is where it will be when movement is fitted; else where the static had it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import Joint, Marker, Person, Skeleton
from condyle.recording.recording import Recording
from condyle.recording.still import StillPart
from condyle.solver.matching import MatchedMarkers
from condyle.solver.moving_trials import MovingFrames
from condyle.solver.person_estimate import PersonEstimate
from condyle.solver.person_functions import as_vector
from condyle.solver.reported import reported_values
from condyle.solver.results import Calibration, KnownBetter, MovementUsed, PlacedMarker
from condyle.solver.subject_covariance import SubjectCovariance, entry_names, entry_values
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Sources:
    """What a calibration was made from."""

    static: Recording
    moving: tuple[Recording, ...]
    still: StillPart
    matched: MatchedMarkers
    upright: Upright
    stature: float | None
    mass: float | None


def calibrated(
    estimate: PersonEstimate, sources: Sources, frames: MovingFrames | None = None
) -> Calibration:
    """The estimate as the calibration of a skeleton."""
    problem, state = estimate.problem, estimate.state
    person, layout = problem.functions, problem.functions.layout
    skeleton = person.functions.skeleton
    sd = np.sqrt(np.diag(estimate.covariance)[: layout.size])
    places = _Places(estimate)
    placed = places.markers()
    by_name = {marker.name: marker for marker in placed}
    nan = float("nan")
    sized = replace(
        skeleton,
        sizes=person.factors(state.person, sd),
        joints=places.joints(sd),
        markers=tuple(_with_place(m, by_name.get(m.name)) for m in skeleton.markers),
        subject=Person(
            nan if sources.stature is None else sources.stature,
            nan if sources.mass is None else sources.mass,
        ),
        labels={n: label for n, label in sources.matched.labels.items() if n != label},
        up=sources.upright.axis,
    )
    static = state.posture.take(np.array([0]))
    told = reported_values(person.functions.kinematics, static)
    pinned = problem.bounds.pinned[0]
    held = {c.name for c in skeleton.coordinates if c.held is not None}
    return Calibration(
        skeleton=sized,
        static=sources.static.name,
        still=(sources.still.start, sources.still.end),
        up=sources.upright.axis,
        up_how=sources.upright.how,
        log_scale=float(state.person[layout.scale]),
        posture={name: float(value[0]) for name, (value, _) in told.items()},
        undetermined=tuple(
            name
            for name, (_, rate) in told.items()
            if (np.abs(rate[0]) > 0)[pinned].any() and name not in held
        ),
        markers=placed,
        without_label=sources.matched.without_label,
        other_labels=sources.matched.other_labels,
        cost=estimate.cost,
        converged=estimate.converged,
        own_posture=static,
        covariance=places.covariance(sized),
        known_better=_known_better(estimate),
        movement=_movement(estimate, sources, frames),
    )


class _Places:
    """Marker places and joint centres, with their derivatives for what was estimated."""

    def __init__(self, estimate: PersonEstimate) -> None:
        self._estimate = estimate
        problem, state = estimate.problem, estimate.state
        self._layout = problem.functions.layout
        skeleton = problem.functions.functions.skeleton
        nominal, rates = problem.functions.nominal_places(state.person)
        seen = problem.weights > 0
        moving = seen & ~problem.standing[:, None]
        counted = np.where(moving.any(axis=0), moving, seen)
        share = counted / np.maximum(counted.sum(axis=0), 1)
        skin, count = problem.skin, self._layout.size
        mean = np.einsum("kr,kr->r", skin.regressors, share[:, skin.marker])
        self.shown: BoolArray = np.asarray(seen.any(axis=0))
        self.rates = np.zeros((len(nominal), 3, problem.common))
        self.rates[:, :, :count] = rates
        self.departures = np.zeros((len(nominal), 3))
        for row, (marker, regressor) in enumerate(zip(skin.marker, mean, strict=True)):
            self.departures[marker] += regressor * state.skin[row]
            for axis in range(3):
                self.rates[marker, axis, count + 3 * row + axis] = regressor
        self.places = nominal + self.departures
        self._skeleton = skeleton

    def markers(self) -> tuple[PlacedMarker, ...]:
        """Every marker that was seen."""
        cov = self._estimate.covariance
        variance = np.einsum("mac,cd,mad->ma", self.rates, cov, self.rates, optimize=True)
        sd = np.sqrt(variance)
        return tuple(
            PlacedMarker(
                marker.name,
                as_vector(self.places[m]),
                as_vector(sd[m]),
                None if marker.at is None else as_vector(self.departures[m]),
                None if marker.at is None else marker.placed_within,
            )
            for m, marker in enumerate(self._skeleton.markers)
            if self.shown[m]
        )

    def joints(self, sd: FloatArray) -> tuple[Joint, ...]:
        """All joints, the freed ones with what was found."""
        found = []
        person, layout = self._estimate.state.person, self._layout
        for joint in self._skeleton.joints:
            if joint.name in layout.placed:
                centre, rates = self._centre(joint)
                cov = rates @ self._estimate.covariance @ rates.T
                spread = as_vector(np.sqrt(np.diag(cov)))
                joint = replace(joint, placed=as_vector(centre), placed_sd=spread)
            if joint.name in layout.turned:
                here = layout.turn(joint.name)
                turn, spread = as_vector(person[here]), as_vector(sd[here])
                joint = replace(joint, axis_turn=turn, axis_turn_sd=spread)
            found.append(joint)
        return tuple(found)

    def covariance(self, sized: Skeleton) -> SubjectCovariance:
        """Of everything that a sized file tells, postures and skin summed out."""
        size, layout = self._estimate.problem.common, self._layout
        rows = [np.eye(size)[: layout.groups]]
        rows.append(np.where(self.shown[:, None, None], self.rates, 0.0).reshape(-1, size))
        by_name = {joint.name: joint for joint in self._skeleton.joints}
        rows += [self._centre(by_name[name])[1] for name in layout.placed]
        rows += [np.eye(size)[layout.turn(name)] for name in layout.turned]
        whole = np.concatenate(rows)
        return SubjectCovariance(
            entry_names(sized),
            entry_values(sized),
            whole @ self._estimate.covariance @ whole.T,
            "the calibration's covariance",
        )

    def _centre(self, joint: Joint) -> tuple[FloatArray, FloatArray]:
        """(3) m in the sized parent, and (3, common) derivatives."""
        person, layout = self._estimate.state.person, self._layout
        rates = np.zeros((3, self._estimate.problem.common))
        here = layout.centre(joint.name)
        rates[:, here] = np.eye(3)
        grown = np.array(joint.at)
        for g, group in enumerate(self._skeleton.sizing.groups):
            for segment, axis in group.members:
                if segment == joint.parent:
                    grown[axis] *= np.exp(person[g])
                    rates[axis, g] = grown[axis]
        return grown + person[here], rates


def _known_better(estimate: PersonEstimate) -> tuple[KnownBetter, ...]:
    """For each number of the person: its sd before anything was measured, and after."""
    problem, layout = estimate.problem, estimate.problem.functions.layout
    skeleton = problem.functions.functions.skeleton
    _, J = problem.priors(estimate.state.person)
    before = np.sqrt(np.diag(np.linalg.inv(J.T @ J)))
    after = np.sqrt(np.diag(estimate.covariance)[: layout.size])
    names = [(f"size of {group.name}", "") for group in skeleton.sizing.groups]
    names.append(("overall scale", ""))
    names += [(f"centre of {joint}, {axis}", "m") for joint in layout.placed for axis in "xyz"]
    names += [(f"axes of {joint}, {axis}", "rad") for joint in layout.turned for axis in "xyz"]
    return tuple(
        KnownBetter(name, unit, float(b), float(a))
        for (name, unit), b, a in zip(names, before, after, strict=True)
    )


def _movement(
    estimate: PersonEstimate, sources: Sources, frames: MovingFrames | None
) -> MovementUsed | None:
    if frames is None:
        return None
    problem = estimate.problem
    names = problem.functions.functions.skeleton.marker_names
    moving = ~problem.standing
    seen: BoolArray = np.asarray((problem.weights > 0) & moving[:, None])
    squared = np.where(seen, (problem.residuals(estimate.state) ** 2).sum(axis=2), 0.0).sum(axis=0)
    errors = {
        name: float(np.sqrt(squared[m] / seen[:, m].sum()))
        for m, name in enumerate(names)
        if seen[:, m].any()
    }
    return MovementUsed(
        tuple(trial.name for trial in sources.moving),
        int(moving.sum()),
        frames.of_all,
        errors,
        dict(frames.left_out),
    )


def _with_place(marker: Marker, place: PlacedMarker | None) -> Marker:
    if place is None:
        return marker
    return replace(marker, placed=place.placed, placed_sd=place.placed_sd)
