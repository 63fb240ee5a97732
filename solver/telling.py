"""What a model's markers can tell of its coordinates, before anything is recorded.

Judged at postures drawn over the ranges: the sd that a frame's markers give each number, what they
cannot tell in any posture, which pairs they can hardly tell apart, and on which segment three more
markers would help. Postures of models with ties are closed before they are judged.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import LABORATORY, Marker, Skeleton
from condyle.solver.blas_threads import one_thread
from condyle.solver.cold_start import tightened
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.observability import covariance, undetermined
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

POSTURES = 25
"""How many postures are judged; degenerate ones are rare, and medians pass over them."""
SHARE_OF_RANGE = 0.8
UNLIMITED_HALF = 0.5
"""rad or m to either side of rest, for a coordinate without a range."""
SDS_OPEN = 5.0
"""A tie that misses by more of its sds than this is open."""
HARDLY_APART = 0.95
"""|correlation| above which two numbers are called hardly told apart: each alone has more than three
times the sd it would have if the other were known."""
HELPING_MARKERS = ((0.1, 0.0, 0.0), (0.0, 0.1, 0.0), (0.0, 0.0, 0.1))
"""m from a segment's origin: three markers that fix a segment, to try where nothing is seen."""


@dataclass(frozen=True, slots=True)
class Telling:
    """What the markers tell.

    Attributes
    ----------
    sd : name -> rad or m
        Median over the postures, for each coordinate and reported angle; NaN where undetermined.
    unseen : names that are undetermined in every posture
    remedies : unseen name -> the segment nearest the root on which markers would tell it
    pairs : (name, name, correlation)
        Free coordinates that can hardly be told apart, the closest first.
    freedoms, taken_by_ties : int
        Of the skeleton without its ties; how many of them the ties take away.
    """

    sd: Mapping[str, float]
    unseen: tuple[str, ...]
    remedies: Mapping[str, str]
    pairs: tuple[tuple[str, str, float], ...]
    freedoms: int
    taken_by_ties: int


@one_thread
def tell(skeleton: Skeleton, *, present: BoolArray | None = None) -> Telling:
    """Judge what the markers of a model can tell.

    Parameters
    ----------
    present : (markers,) bool, optional
        Which markers there really are; by default all that have a place.
    """
    present = np.ones(len(skeleton.markers), dtype=bool) if present is None else present
    functions = SkeletonFunctions(skeleton)
    judged = _judge(functions, present)
    unseen = tuple(name for name, sd in judged.sd.items() if np.isnan(sd))
    remedies = _remedies(skeleton, present, unseen) if unseen else {}
    freedoms = int((~functions.held).sum())
    return Telling(judged.sd, unseen, remedies, judged.pairs, freedoms, judged.taken)


@dataclass(frozen=True, slots=True)
class _Judged:
    sd: dict[str, float]
    pairs: tuple[tuple[str, str, float], ...]
    taken: int


def _judge(functions: SkeletonFunctions, present: BoolArray) -> _Judged:
    problem, postures = judged_postures(functions, present)
    H = problem.information(postures, np.arange(POSTURES))
    bounds = problem.bounds()
    pins, involved = undetermined(H, ~bounds.pinned)
    involved |= ~problem.seen() & ~functions.held
    cov = covariance(H, ~bounds.pinned & ~pins)
    told = reported_values(functions.kinematics, postures)
    names = tuple(told)
    rates = np.stack([told[name][1] for name in names], axis=1) if names else np.zeros((0, 0, 0))
    lost = ((rates != 0) & involved[:, None, :]).any(axis=2)
    full = np.einsum("nci,nij,ndj->ncd", rates, cov, rates, optimize=True)
    sd = np.sqrt(np.maximum(np.einsum("ncc->nc", full), 0.0))
    median = np.median(sd, axis=0)
    median[lost.all(axis=0)] = np.nan
    chosen = _own_freedoms(functions.skeleton, names, median)
    return _Judged(
        {name: float(value) for name, value in zip(names, median, strict=True)},
        _pairs(names, chosen, full, sd),
        functions.ties.freedom_taken(postures, problem.numbers),
    )


def _own_freedoms(skeleton: Skeleton, names: tuple[str, ...], sd: FloatArray) -> list[int]:
    """Columns that are neither functions of others nor sums, and that are determined."""
    following = {c.name for c in skeleton.coordinates if c.follows is not None}
    return [
        i
        for i, name in enumerate(names)
        if name not in following and not name.endswith("_sum") and sd[i] > 0
    ]


def _pairs(
    names: tuple[str, ...], chosen: list[int], full: FloatArray, sd: FloatArray
) -> tuple[tuple[str, str, float], ...]:
    scale = np.where(sd > 0, sd, np.inf)
    correlation = np.median(full / scale[:, :, None] / scale[:, None, :], axis=0)
    strong = [
        (names[i], names[j], float(correlation[i, j]))
        for a, i in enumerate(chosen)
        for j in chosen[a + 1 :]
        if abs(correlation[i, j]) > HARDLY_APART
    ]
    return tuple(sorted(strong, key=lambda pair: -abs(pair[2])))


def _remedies(skeleton: Skeleton, present: BoolArray, unseen: tuple[str, ...]) -> dict[str, str]:
    """For each unseen name the first segment, from the root, whose markers would tell it."""
    remedies: dict[str, str] = {}
    bare = {m.segment for m, there in zip(skeleton.markers, present, strict=True) if there}
    candidates = [j.child for j in skeleton.joints if j.child not in bare]
    candidates += [j.child for j in skeleton.joints if j.child in bare]
    functions = SkeletonFunctions(_with_markers_on(skeleton, candidates))
    for i, segment in enumerate(candidates):
        left = [name for name in unseen if name not in remedies]
        if not left:
            break
        tried = np.arange(len(candidates)).repeat(len(HELPING_MARKERS)) == i
        helped = _judge(functions, np.append(present, tried))
        remedies |= {name: segment for name in left if not np.isnan(helped.sd[name])}
    return remedies


def _with_markers_on(skeleton: Skeleton, segments: list[str]) -> Skeleton:
    """The skeleton with markers that nobody wears, some on each segment, to be counted or not."""
    extra = tuple(
        Marker(f"{LABORATORY} tries {segment} {i}", segment, at=place)
        for segment in segments
        for i, place in enumerate(HELPING_MARKERS)
    )
    return replace(skeleton, markers=skeleton.markers + extra)


def judged_postures(
    functions: SkeletonFunctions, present: BoolArray
) -> tuple[FrameProblem, Posture]:
    """The postures at which a model is judged, the same at every call, and their problem.

    Parameters
    ----------
    present : (markers,) bool
        Which markers there are; the problem holds only which, not where they are.
    """
    markers = np.where(present[None, :, None], np.zeros((POSTURES, len(present), 3)), np.nan)
    problem = frame_problem(functions.skeleton, functions, markers, Upright("+Y", "any"))
    postures = drawn_postures(problem, np.random.default_rng(0))
    return problem, _closed(problem, postures)


def _closed(problem: FrameProblem, postures: Posture) -> Posture:
    """The postures nearest by their markers in which the ties hold.

    Where they do not, their equations point elsewhere, and would tell what no closed posture does: one
    that ranges keep open gives its place to one that closes.
    """
    if not len(problem.functions.ties):
        return postures
    seen = problem.functions.marker_positions(postures, problem.numbers)
    own = replace(problem, measured=seen)
    found = tightened(own, postures, own.bounds(), damping=1e-3).posture
    gaps, _ = own.functions.ties.residuals(found, own.numbers)
    closed = (np.abs(gaps) < SDS_OPEN * own.functions.ties.sd).all(axis=1)
    if not closed.any():
        return found
    rows = np.arange(len(found))
    rows[~closed] = np.resize(np.flatnonzero(closed), int(np.sum(~closed)))
    return found.take(rows)


def drawn_postures(problem: FrameProblem, rng: np.random.Generator) -> Posture:
    """One random posture a frame, well inside the ranges, orientations within half a radian."""
    rest, bounds = problem.rest(), problem.bounds()
    limited = np.isfinite(bounds.lower) & np.isfinite(bounds.upper)
    low = np.where(limited, bounds.lower, rest.scalars - UNLIMITED_HALF)
    high = np.where(limited, bounds.upper, rest.scalars + UNLIMITED_HALF)
    middle, half = (low + high) / 2, (high - low) / 2
    scalars = middle + SHARE_OF_RANGE * half * rng.uniform(-1, 1, middle.shape)
    balls = rest.quaternions.shape[1]
    turn = np.zeros((len(problem), scalars.shape[1] + 3 * balls))
    turn[:, scalars.shape[1] :] = rng.uniform(-0.5, 0.5, (len(problem), 3 * balls))
    return Posture(scalars, rest.quaternions).after(turn)
