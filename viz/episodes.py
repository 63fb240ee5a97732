"""Stretches of a trial that stand out: when a marker is far off, and when two look exchanged.

A single number for a whole trial hides a second in which two labels were swapped. Here every such
stretch gets its markers and its times, so that somebody can go there and look.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from condyle.solver.quality import MARKER_LIMIT
from condyle.solver.results import FittedMotion

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

BRIDGE = 0.1
"""s; two stretches so close together are told as one."""

EXCHANGE_GAIN = 0.5
"""Two markers look exchanged where the other's place explains both with less than this share of their
error (root of the sum of squares)."""

EXCHANGE_LEAST = 0.015
"""m; errors below this are skin, whoever is nearer to whom."""

EXCHANGE_FRAMES = 3
"""Frames that an exchange must hold altogether: a crossing of two close markers is shorter."""

OWN_FACTOR = 5.0
"""A marker also stands out where its error is so many times its own median over the trial."""

OWN_LEAST = 0.02
"""m; a marker that fits within this never stands out by its own measure."""


@dataclass(frozen=True, slots=True)
class Episode:
    """One stretch of frames.

    Attributes
    ----------
    kind : "exchanged" or "far"
    markers : one name, or the two that look exchanged
    first, last : int
        Rows of the motion, both inside the stretch.
    worst : int
        The row with the largest error of those markers.
    largest : float
        m, that error.
    """

    kind: str
    markers: tuple[str, ...]
    first: int
    last: int
    worst: int
    largest: float


def stretches(chosen: BoolArray, bridge: int) -> Iterator[tuple[int, int]]:
    """First and last row of every run of true rows; runs at most `bridge` rows apart are one."""
    rows = np.flatnonzero(chosen)
    if not len(rows):
        return
    cuts = np.flatnonzero(np.diff(rows) > bridge + 1)
    for part in np.split(rows, cuts + 1):
        yield int(part[0]), int(part[-1])


def exchanged(motion: FittedMotion) -> list[Episode]:
    """The stretches in which two markers lie nearer to each other's place than to their own."""
    own = motion.error
    far = np.where(np.isfinite(own), own, 0.0) > EXCHANGE_LEAST
    found = []
    for a, b in combinations(np.flatnonzero(far.sum(axis=0) >= EXCHANGE_FRAMES).tolist(), 2):
        rows = np.flatnonzero(far[:, a] & far[:, b])
        if len(rows) < EXCHANGE_FRAMES:
            continue
        crossed = np.hypot(
            np.linalg.norm(motion.measured[rows, a] - motion.fitted[rows, b], axis=1),
            np.linalg.norm(motion.measured[rows, b] - motion.fitted[rows, a], axis=1),
        )
        swapped = np.zeros(len(own), dtype=bool)
        swapped[rows] = crossed < EXCHANGE_GAIN * np.hypot(own[rows, a], own[rows, b])
        found += [
            episode
            for episode in _episodes(motion, swapped, "exchanged", (a, b))
            if swapped[episode.first : episode.last + 1].sum() >= EXCHANGE_FRAMES
        ]
    return sorted(found, key=lambda episode: -episode.largest)


def far_off(motion: FittedMotion) -> list[Episode]:
    """The stretches in which one marker is far off, by the common limit or by its own measure."""
    own = motion.error
    found = []
    for index in range(own.shape[1]):
        error = own[:, index]
        known = error[np.isfinite(error)]
        if not len(known):
            continue
        limit = min(MARKER_LIMIT, max(OWN_LEAST, OWN_FACTOR * float(np.median(known))))
        found += _episodes(motion, np.nan_to_num(error) > limit, "far", (index,))
    return sorted(found, key=lambda episode: -episode.largest)


def _episodes(
    motion: FittedMotion, chosen: BoolArray, kind: str, markers: tuple[int, ...]
) -> list[Episode]:
    error = np.nan_to_num(motion.error[:, list(markers)]).max(axis=1)
    names = tuple(motion.marker_names[i] for i in markers)
    found = []
    for first, last in stretches(chosen, bridge_rows(motion)):
        worst = first + int(np.argmax(error[first : last + 1]))
        found.append(Episode(kind, names, first, last, worst, float(error[worst])))
    return found


def bridge_rows(motion: FittedMotion) -> int:
    """`BRIDGE` in frames of this trial."""
    if len(motion.time) < 2:
        return 0
    return round(BRIDGE / float(np.median(np.diff(motion.time))))
