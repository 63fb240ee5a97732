"""What looks wrong in a calibration: exchanged markers, a wrong stature, a person who does not stand as expected.

Nothing of it may be silently absorbed into sizes. Each suspicion is tried: the estimate is made again with the
two markers exchanged, or without the stature, and what that changes is the evidence.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from condyle.solver.person_estimate import PersonEstimate
from condyle.solver.reported import reported_values
from condyle.solver.results import Fault

FloatArray = NDArray[np.float64]
Again = Callable[[FloatArray], PersonEstimate]
"""The estimate from other mean places (markers, 3) of the static."""

SUSPECT = 1.5
"""Departure from a nominal place, over what is expected of it, from which an exchange is tried."""
FAR = 2.35
"""The same, from which a marker is told to sit elsewhere than its name says; and at least `FAR_LEAST`. One in a
thousand by chance: of the length of three normal components over the root of three."""
FAR_LEAST = 0.03
"""m."""
WELL_PLACED = 2.0
"""The same, below which both must come by the exchange; else one of them is elsewhere altogether."""
CLEAR_GAIN = 8.0
"""Fall of half the sum of squares that an exchange must bring: odds of 3000 to 1."""
MOST_TRIED = 4
"""Exchanges that are worth an estimate of their own."""
SUITS = 0.045
"""m from a landmark of another segment, within which a stray marker may belong there; skin and half a marker lie between."""
UNLIKE = 3.0
"""sds between the stature given and the one that the markers look like."""
ODD_SIZE = 2.5
"""sds of a size factor from the person's overall scale: one group in eighty by chance."""
ODD_STANDING, GRAVE_STANDING = 2.5, 3.5
"""sds of a coordinate from how people stand; told, and needs a look. The estimate is drawn towards standing, so
that the person departs by more than is told."""
LITTLE_TOLD = 0.95
"""sd now over sd expected, above which a recording said next to nothing of a number."""


def exchanged_markers(estimate: PersonEstimate, again: Again) -> list[Fault]:
    """Pairs of markers that sit far better with their names exchanged."""
    problem = estimate.problem
    names = problem.functions.functions.skeleton.marker_names
    left = problem.measured[0].copy()
    found: list[Fault] = []
    here = estimate
    while len(found) < MOST_TRIED:
        best = None
        for i, j in _likely_pairs(here)[:MOST_TRIED]:
            swapped = left.copy()
            swapped[[i, j]] = left[[j, i]]
            other = again(np.where(problem.weights[0, :, None] > 0, swapped, np.nan))
            gain = here.cost - other.cost
            settled = _scores(other)[[i, j]].max() < WELL_PLACED
            if gain > CLEAR_GAIN and settled and (best is None or gain > best[0]):
                best = gain, i, j, other, swapped
        if best is None:
            break
        _, i, j, other, swapped = best
        before, after = _departures(here), _departures(other)
        found.append(
            Fault(
                f"markers {names[i]} and {names[j]} look exchanged: as labelled they sit "
                f"{_mm(before[i])} and {_mm(before[j])} from where they are expected, exchanged "
                f"{_mm(after[i])} and {_mm(after[j])}",
                "exchange them in the recording or with --labels MAP.yaml, and calibrate again",
                grave=True,
            )
        )
        here, left = other, swapped
    return found


def _likely_pairs(estimate: PersonEstimate) -> list[tuple[int, int]]:
    """Pairs that an exchange would suit at the posture found, the best first."""
    problem, state = estimate.problem, estimate.state
    nominal, _ = problem.functions.nominal_places(state.person)
    expected = problem.functions.markers(
        state.posture, state.person, nominal[None], problem.upright
    ).values.reshape(-1, 3)
    markers = problem.functions.functions.skeleton.markers
    within = np.array([m.placed_within if m.at is not None else np.inf for m in markers])
    score = _scores(estimate)
    usable = np.flatnonzero((problem.weights[0] > 0) & np.isfinite(within))
    y = problem.measured[0]
    pairs = []
    for n, i in enumerate(usable):
        for j in usable[n + 1 :]:
            if max(score[i], score[j]) < SUSPECT:
                continue
            now = _squared(y[i] - expected[i], within[i]) + _squared(y[j] - expected[j], within[j])
            then = _squared(y[j] - expected[i], within[i]) + _squared(y[i] - expected[j], within[j])
            if now > then:
                pairs.append((now - then, int(i), int(j)))
    return [(i, j) for _, i, j in sorted(pairs, reverse=True)]


def _squared(away: FloatArray, sd: float) -> float:
    return float((away**2).sum() / sd**2)


def _departures(estimate: PersonEstimate) -> FloatArray:
    """(markers,) m, from the grown nominal place; 0 where unseen."""
    problem = estimate.problem
    away = problem.skin.departures(estimate.state.skin, problem.measured.shape[1])
    return np.asarray(np.linalg.norm(away[0], axis=1))


def _scores(estimate: PersonEstimate) -> FloatArray:
    """(markers,) Departures over what is expected of them; 0 where nothing is."""
    markers = estimate.problem.functions.functions.skeleton.markers
    within = np.array([m.placed_within if m.at is not None else np.inf for m in markers])
    return np.asarray(_departures(estimate) / (within * np.sqrt(3)))


def stray_markers(estimate: PersonEstimate) -> list[Fault]:
    """Markers that sit elsewhere than their names say, and which segment they would suit."""
    problem, state = estimate.problem, estimate.state
    skeleton = problem.functions.functions.skeleton
    nominal, _ = problem.functions.nominal_places(state.person)
    numbers = problem.functions.numbers(state.person, nominal, problem.upright)
    poses = problem.functions.functions.poses(state.posture, numbers)[0]
    factors = problem.functions.factors(state.person, np.zeros(len(state.person)))
    found = []
    departures = _departures(estimate)
    for m, marker in enumerate(skeleton.markers):
        if marker.at is None or problem.weights[0, m] == 0:
            continue
        usual = marker.placed_within * np.sqrt(3)
        if departures[m] < max(FAR_LEAST, FAR * usual):
            continue
        nearest = None
        for s, segment in enumerate(skeleton.segments):
            grown = np.array(factors[segment.name].factors)
            for name, place in segment.landmarks.items():
                point = poses[s, :3, :3] @ (grown * place) + poses[s, :3, 3]
                away = float(np.linalg.norm(problem.measured[0, m] - point))
                if segment.name != marker.segment and (nearest is None or away < nearest[0]):
                    nearest = away, name, segment.name
        suits = ""
        if nearest is not None and nearest[0] < SUITS:
            suits = f"; it is {_mm(nearest[0])} from {nearest[1]} on {nearest[2]}"
        found.append(
            Fault(
                f"marker {marker.name} sits {_mm(departures[m])} from where the model expects it "
                f"(expected within {_mm(usual)}){suits}",
                "check that it is the marker its name says, on the segment and side its name says",
                grave=True,
            )
        )
    return found


def wrong_stature(
    estimate: PersonEstimate, without: PersonEstimate, stature: float, reference: float
) -> list[Fault]:
    """A stature that does not go with the markers.

    Parameters
    ----------
    without : PersonEstimate
        The same without the stature.
    stature, reference : m, given and of the model's reference person
    """
    scale = estimate.problem.functions.layout.scale
    found = float(without.state.person[scale])
    sd = float(np.sqrt(without.covariance[scale, scale]))
    if abs(np.log(stature / reference) - found) < UNLIKE * sd:
        return []
    looks = reference * np.exp(found)
    return [
        Fault(
            f"the markers do not go with a stature of {stature:.2f} m: they look like a person of "
            f"{looks:.2f} m (give or take {looks * sd:.2f})",
            "check --stature (metres) and that the recording is of this person",
            grave=True,
        )
    ]


def odd_standing(estimate: PersonEstimate) -> list[Fault]:
    """Coordinates that are not as people stand."""
    problem = estimate.problem
    skeleton = problem.functions.functions.skeleton
    static = estimate.state.posture.take(np.array([0]))
    told = reported_values(problem.functions.functions.kinematics, static)
    metres = {c.name for c in skeleton.coordinates if c.unit == "m"}
    found = []
    for name, expected in skeleton.sizing.standing.items():
        value = float(told[name][0][0])
        away = abs(value - expected.value) / expected.sd
        if away < ODD_STANDING or name in metres:
            continue
        found.append(
            Fault(
                f"{name} is {np.degrees(value):.0f} deg in the static, where "
                f"{np.degrees(expected.value):.0f} +- {np.degrees(expected.sd):.0f} is expected",
                "if the person stood so, write what you know of it under sizing: standing; the zero of "
                "angles rests on it",
                grave=away >= GRAVE_STANDING,
            )
        )
    return found


def odd_sizes(estimate: PersonEstimate) -> list[Fault]:
    """Segments out of proportion."""
    problem, person = estimate.problem, estimate.state.person
    skeleton, layout = problem.functions.functions.skeleton, problem.functions.layout
    found = []
    for g, group in enumerate(skeleton.sizing.groups):
        away = float(person[g] - person[layout.scale])
        if abs(away) > ODD_SIZE * skeleton.sizing.factor_sd:
            found.append(
                Fault(
                    f"{group.name} is {100 * abs(np.expm1(away)):.0f} % "
                    f"{'larger' if away > 0 else 'smaller'} than goes with the rest of this person",
                    "measure it with a tape (--lengths), or look for a marker that is elsewhere",
                )
            )
    return found


def little_told(estimate: PersonEstimate, *, moving: bool) -> list[Fault]:
    """Which freed joints a calibration without movement leaves to the model, and what would tell them."""
    problem = estimate.problem
    layout = problem.functions.layout
    if moving or not (layout.placed or layout.turned):
        return []
    _, J = problem.priors(estimate.state.person)
    before = np.sqrt(np.diag(np.linalg.inv(J.T @ J)))
    after = np.sqrt(np.diag(estimate.covariance)[: layout.size])
    share = after / before
    left = [f"the centre of {n}" for n in layout.placed if share[layout.centre(n)].min() > 0.7]
    left += [f"the axes of {n}" for n in layout.turned if share[layout.turn(n)].min() > LITTLE_TOLD]
    if not left:
        return []
    return [
        Fault(
            f"the static tells next to nothing of {', '.join(left)}: the model's word stands",
            "give a trial that goes through the ranges of these joints after the static",
        )
    ]


def unsure_lengths(estimate: PersonEstimate) -> list[Fault]:
    """Size groups of which the recordings told nothing."""
    problem = estimate.problem
    layout = problem.functions.layout
    _, J = problem.priors(estimate.state.person)
    before = np.sqrt(np.diag(np.linalg.inv(J.T @ J)))[layout.sizes]
    after = np.sqrt(np.diag(estimate.covariance))[layout.sizes]
    groups = problem.functions.functions.skeleton.sizing.groups
    names = [g.name for g, share in zip(groups, after / before, strict=True) if share > LITTLE_TOLD]
    if not names:
        return []
    return [
        Fault(
            f"no marker tells the size of {', '.join(names)}: it follows from the rest of the person",
            "add markers there (both sides of a joint tell its width), or a length with --lengths",
        )
    ]


def one_frame(frames: int) -> list[Fault]:
    """A static of a single frame."""
    if frames > 1:
        return []
    return [
        Fault(
            "the still part is one frame: nothing shows that the person stood still",
            "give a second or more of quiet standing where there is one",
        )
    ]


def _mm(metres: float) -> str:
    return f"{1000 * metres:.0f} mm"
