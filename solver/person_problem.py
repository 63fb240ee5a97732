"""One person and the postures of many frames: the one sum of squares that calibration minimises.

With y_mk the measured place of marker m in frame k, and p_m(q, u, x) its place on the model for a posture q,
a person u and a place x in its segment,

    F = 1/2 sum_k [ sum_m |y_mk - p_m(q_k, u, n_m(u) + b_m' z_mk)|^2 w_mk + ties^2 + expectations of q_k ]
      + 1/2 |priors(u)|^2 + 1/2 b' P b

is minimised over all postures, the person, and the unknowns b of `skin_motion`. Postures meet each other only
through u and b, so the second derivative is an arrowhead: they are eliminated frame by frame (Schur
complement), and work is linear in the number of frames. In the axes of its segment a marker's residual is
linear in b with an identity, and that keeps the blocks cheap.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from condyle.solver.cone_limits import limit_terms
from condyle.solver.least_squares import Bounds
from condyle.solver.person_functions import PersonFunctions
from condyle.solver.person_priors import PersonPriors
from condyle.solver.pose_elimination import WeightedRows, common_part
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.skin_motion import SkinMotion
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

CHUNK = 64
"""Frames whose blocks are held at once: some 30 MB for a whole body."""
SETTLING_DAMPING = 1e-6


@dataclass(frozen=True, slots=True)
class PersonState:
    """Where the estimate stands.

    Attributes
    ----------
    posture : Posture
    person : (person,) as `person_functions.PersonLayout` lays it out
    skin : (rows, 3) as `skin_motion.SkinMotion` lays it out
    """

    posture: Posture
    person: FloatArray
    skin: FloatArray

    def after(self, common: FloatArray, steps: FloatArray) -> PersonState:
        """The state after a step of person and skin together, and of every posture."""
        count = len(self.person)
        return PersonState(
            self.posture.after(steps),
            self.person + common[:count],
            self.skin + common[count:].reshape(-1, 3),
        )


_Chunk: TypeAlias = tuple[slice, WeightedRows, FloatArray, FloatArray]


@dataclass(frozen=True, slots=True)
class Eliminated:
    """The normal equations with every posture eliminated.

    Attributes
    ----------
    information : (common, common)
        Of person and skin together, Gauss-Newton.
    gradient : (common,)
        Downhill, the postures following.
    downhill : (common,)
        The same with the postures as they stand.
    """

    information: FloatArray
    gradient: FloatArray
    downhill: FloatArray
    _frames: list[tuple[slice, WeightedRows, FloatArray, FloatArray]]

    def gain(self, common: FloatArray, steps: FloatArray) -> float:
        """What a step is predicted to gain: half of downhill times step."""
        own = sum(float((g * steps[rows]).sum()) for rows, _, _, g in self._frames)
        return (float(self.downhill @ common) + own) / 2

    def steps(self, common: FloatArray, skin: SkinMotion, person: int) -> FloatArray:
        """(frames, freedoms) The postures' steps that go with a step of what is common."""
        moved = common[person:].reshape(-1, 3)
        found = []
        for rows, blocks, inverse, g in self._frames:
            frames, markers = blocks.root.shape
            carried = replace(skin, regressors=skin.regressors[rows]).departures(moved, markers)
            of_markers = (blocks.root[:, :, None] * carried).reshape(frames, -1)
            shift = blocks.by_person @ common[:person]
            shift[:, : 3 * markers] += of_markers
            left = g - np.einsum("krn,kr->kn", blocks.by_step, shift, optimize=True)
            found.append(np.einsum("knj,kj->kn", inverse, left))
        return np.concatenate(found)


@dataclass(frozen=True, slots=True)
class PersonProblem:
    """The sum of squares of the module's docstring.

    Attributes
    ----------
    functions : PersonFunctions
    measured : (frames, markers, 3) m, finite everywhere
    weights : (frames, markers) 1/m^2, 0 where missing
    standing : (frames,) bool
        Frames of the static, in which the model's `standing` is expected.
    upright : Upright
    skin : SkinMotion
    priors : PersonPriors
    bounds : Bounds
    """

    functions: PersonFunctions
    measured: FloatArray
    weights: FloatArray
    standing: BoolArray
    upright: Upright
    skin: SkinMotion
    priors: PersonPriors
    bounds: Bounds

    def __len__(self) -> int:
        return len(self.measured)

    @property
    def common(self) -> int:
        """Length of what all frames share."""
        return self.functions.layout.size + 3 * len(self.skin)

    def take(self, rows: IntArray) -> PersonProblem:
        """The problem of some frames."""
        return replace(
            self,
            measured=self.measured[rows],
            weights=self.weights[rows],
            standing=self.standing[rows],
            skin=replace(self.skin, regressors=self.skin.regressors[rows]),
            bounds=self.bounds.take(rows),
        )

    def places(self, state: PersonState) -> FloatArray:
        """(frames, markers, 3) m, where each marker sits in its segment."""
        nominal, _ = self.functions.nominal_places(state.person)
        return nominal + self.skin.departures(state.skin, len(nominal))

    def residuals(self, state: PersonState) -> FloatArray:
        """(frames, markers, 3) m, measured minus modelled in the laboratory; 0 where missing."""
        points = self.functions.markers(
            state.posture, state.person, self.places(state), self.upright
        ).values
        away = self.measured - points.reshape(self.measured.shape)
        return np.where(self.weights[..., None] > 0, away, 0.0)

    def cost(self, state: PersonState) -> float:
        """F."""
        squared = self.weights * (self.residuals(state) ** 2).sum(axis=2)
        tied = self.functions.ties(state.posture, state.person, self.upright).values
        expected, _ = self.priors(state.person)
        skin = state.skin.ravel() @ self.skin.precision @ state.skin.ravel()
        _, _, own = self.posture_terms(state.posture)
        return float((squared.sum() + (tied**2).sum() + expected @ expected + skin) / 2 + own.sum())

    def posture_terms(self, posture: Posture) -> tuple[FloatArray, FloatArray, FloatArray]:
        """(frames, ...) H, g and cost of what is expected of postures, and of limited balls."""
        functions = self.functions.functions
        frames, size = len(posture), functions.kinematics.freedoms.size
        H, g, cost = np.zeros((frames, size, size)), np.zeros((frames, size)), np.zeros(frames)
        self._expect(posture, H, g, cost)
        terms = [(b.ball, limit_terms(b, posture)) for b in functions.limited_balls]
        terms += [(pull.ball, pull.terms(posture)) for pull in functions.pulled_balls]
        for ball, (more_H, more_g, more_cost) in terms:
            here = functions.kinematics.freedoms.ball_slice(ball)
            H[:, here, here] += more_H
            g[:, here] += more_g
            cost += more_cost
        return H, g, cost

    def eliminated(self, state: PersonState, damping: float = 0.0) -> Eliminated:
        """The normal equations of what is common, every diagonal grown by a share `damping`."""
        count, size = self.functions.layout.size, self.common
        S, g, downhill = np.zeros((size, size)), np.zeros(size), np.zeros(size)
        diagonal = np.zeros(size)
        frames = []
        for rows, blocks, inverse, gradient in self._by_chunk(state, damping):
            regressors = self.skin.regressors[rows]
            part = common_part(blocks, inverse, gradient, self.skin.marker, regressors)
            S += part.information
            g += part.gradient
            downhill += part.downhill
            diagonal += part.diagonal
            frames.append((rows, blocks, inverse, gradient))
        expected, J = self.priors(state.person)
        S[:count, :count] += J.T @ J
        own = np.r_[-J.T @ expected, -self.skin.precision @ state.skin.ravel()]
        S[count:, count:] += self.skin.precision
        diagonal += np.r_[(J**2).sum(axis=0), np.diag(self.skin.precision)]
        S[np.arange(size), np.arange(size)] += damping * diagonal
        return Eliminated(S, g + own, downhill + own, frames)

    def settled(self, state: PersonState) -> PersonState:
        """The state after one step of the postures alone, everything common staying.

        A common step is straight where turning is round; this takes out most of what that costs.
        """
        steps = [
            np.einsum("knj,kj->kn", inverse, gradient)
            for _, _, inverse, gradient in self._by_chunk(state, SETTLING_DAMPING)
        ]
        posture = self.bounds.inside(state.posture.after(np.concatenate(steps)))
        return replace(state, posture=posture)

    def _by_chunk(self, state: PersonState, damping: float) -> Iterator[_Chunk]:
        """Some frames at a time: which, their rows, the inverse of H over what is free, and downhill."""
        own_H, own_g, _ = self.posture_terms(state.posture)
        places, turns = self.places(state), self._turns(state)
        for first in range(0, len(self), CHUNK):
            rows = slice(first, min(first + CHUNK, len(self)))
            blocks = self._blocks(state, places, turns, rows)
            a, r = blocks.by_step, blocks.residual
            gradient = np.einsum("krn,kr->kn", a, r) + own_g[rows]
            free = ~(self.bounds.pinned[rows] | self._pressed(state, gradient, rows))
            inverse = _inverse(np.swapaxes(a, 1, 2) @ a + own_H[rows], free, damping)
            yield rows, blocks, inverse, np.where(free, gradient, 0.0)

    def information_of_postures(self, state: PersonState) -> FloatArray:
        """(frames, freedoms, freedoms) What markers of a known place, ties and expectations tell."""
        known = np.array([m.at is not None for m in self.functions.functions.skeleton.markers])
        problem = replace(self, weights=np.where(known, self.weights, 0.0))
        H, _, _ = self.posture_terms(state.posture)
        blocks = problem._blocks(state, self.places(state), self._turns(state), slice(0, len(self)))
        return np.asarray(H + np.swapaxes(blocks.by_step, 1, 2) @ blocks.by_step)

    def _turns(self, state: PersonState) -> FloatArray:
        """(frames, markers, 3, 3) Laboratory-from-segment of each marker."""
        functions = self.functions.functions
        nominal, _ = self.functions.nominal_places(state.person)
        numbers = self.functions.numbers(state.person, nominal, self.upright)
        skeleton = functions.skeleton
        segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
        return functions.poses(state.posture, numbers)[:, segments, :3, :3]

    def _blocks(
        self, state: PersonState, places: FloatArray, turns: FloatArray, rows: slice
    ) -> WeightedRows:
        posture = Posture(state.posture.scalars[rows], state.posture.quaternions[rows])
        points = self.functions.markers(posture, state.person, places[rows], self.upright)
        tied = self.functions.ties(posture, state.person, self.upright)
        _, nominal_rates = self.functions.nominal_places(state.person)
        weights = self.weights[rows]
        frames, markers = weights.shape
        root = np.sqrt(weights)
        into_segment = np.swapaxes(turns[rows], 2, 3) * root[..., None, None]
        shape = (frames, markers, 3, -1)
        by_step = into_segment @ points.by_step.reshape(shape)
        by_person = into_segment @ points.by_person.reshape(shape)
        by_person += root[..., None, None] * nominal_rates
        away = self.measured[rows] - points.values.reshape(frames, markers, 3)
        residual = (into_segment @ away[..., None])[..., 0]
        flat = (frames, 3 * markers, -1)
        return WeightedRows(
            np.concatenate([by_step.reshape(flat), tied.by_step], axis=1),
            np.concatenate([by_person.reshape(flat), tied.by_person], axis=1),
            np.concatenate([residual.reshape(frames, -1), -tied.values], axis=1),
            root,
        )

    def _pressed(self, state: PersonState, downhill: FloatArray, rows: slice) -> BoolArray:
        """(frames, freedoms) Coordinates at a limit that would go beyond it."""
        pressed = np.zeros(self.bounds.pinned[rows].shape, dtype=bool)
        scalars = state.posture.scalars[rows]
        count = scalars.shape[1]
        push = downhill[:, :count]
        pressed[:, :count] = (scalars <= self.bounds.lower[rows]) & (push < 0)
        pressed[:, :count] |= (scalars >= self.bounds.upper[rows]) & (push > 0)
        return pressed

    def _expect(self, posture: Posture, H: FloatArray, g: FloatArray, cost: FloatArray) -> None:
        """What is expected in the static, and pulls to rest, of scalar numbers."""
        functions = self.functions.functions
        skeleton = functions.skeleton
        pulls = {c.name: (c.rest, c.rest_sd) for c in skeleton.coordinates if c.rest_sd is not None}
        still = {n: (e.value, e.sd) for n, e in skeleton.sizing.standing.items()}
        for rows, expected in (
            (np.flatnonzero(~self.standing), pulls),
            (np.flatnonzero(self.standing), pulls | still),
        ):
            if not expected or not len(rows):
                continue
            told = reported_values(functions.kinematics, posture.take(rows))
            for name, (value, sd) in expected.items():
                found, rate = told[name]
                misfit = (value - found) / sd
                H[rows] += rate[:, :, None] * rate[:, None, :] / sd**2
                g[rows] += rate * misfit[:, None] / sd
                cost[rows] += misfit**2 / 2


def _inverse(H: FloatArray, free: BoolArray, damping: float) -> FloatArray:
    """(frames, n, n) Inverses over the free freedoms, their diagonals grown; 0 elsewhere."""
    n = H.shape[1]
    both = free[:, :, None] & free[:, None, :]
    whole = np.where(both, H, 0.0)
    index = np.arange(n)
    whole[:, index, index] = np.where(free, whole[:, index, index] * (1 + damping), 1.0)
    return np.where(both, np.linalg.inv(whole), 0.0)
