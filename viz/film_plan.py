"""What a film shows when, and from where: rows of the trial on the film's clock, and a camera that follows.

Each picture of the film shows the recorded frame nearest in time: nothing is interpolated, so that what is seen is
what was fitted. The camera keeps its direction and its distance; it only drifts along after the person, as
smoothly as its lag allows, and stays where it is for somebody who stays.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import isfinite

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter1d

from condyle.model.errors import CondyleError
from condyle.solver.results import FittedMotion
from condyle.viz.drawn_markers import place_markers
from condyle.viz.figure import Figure
from condyle.viz.look import Look
from condyle.viz.viewpoint import Camera, Room, facing, frame_points, look_from, picture_up

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

RATE = 25.0
"""Pictures per second of film."""

SLOWEST, FASTEST = 0.01, 20.0

SMOOTHING = 0.45
"""s, on the recording's clock: sd of the bell over which the camera's way is averaged."""

STAYS = 0.25
"""Of the figure's extent: who moves less than this on the whole is watched by a camera that stands still."""

LOOKED_AT = 60
"""Rows, evenly over the film, that decide how far away the camera must be."""


class FilmError(CondyleError):
    """A film was asked for that cannot be."""


@dataclass(frozen=True, slots=True)
class FilmPlan:
    """A film before it is drawn.

    Attributes
    ----------
    rows : (pictures,) of the motion
    cameras : one a picture
    speed : float
        1 is real time, 0.25 four times slower.
    rate : float
        Pictures per second.
    """

    rows: IntArray
    cameras: list[Camera]
    speed: float
    rate: float

    def __len__(self) -> int:
        return len(self.rows)


def film_rows(
    motion: FittedMotion, *, start: float | None, end: float | None, speed: float, rate: float
) -> IntArray:
    """(pictures,) The rows nearest to the film's instants.

    Raises
    ------
    FilmError
        For a speed that there is not, or where the trial has nothing between start and end.
    """
    if not (isfinite(speed) and SLOWEST <= speed <= FASTEST):
        raise FilmError(
            f"a film at {speed:g} times real time cannot be made.\n"
            f"  Give {SLOWEST:g} to {FASTEST:g}; 0.25 is four times slower."
        )
    time = motion.time
    first = float(time[0]) if start is None else max(start, float(time[0]))
    last = float(time[-1]) if end is None else min(end, float(time[-1]))
    if not first <= last + 1e-9:
        raise FilmError(
            f"'{motion.name}' has no frame between these times.\n"
            f"  It runs from {time[0]:.3f} s to {time[-1]:.3f} s."
        )
    count = int(np.floor((last - first) * rate / speed + 1e-6)) + 1
    instants = first + speed / rate * np.arange(count)
    after = np.clip(np.searchsorted(time, instants), 1, max(len(time) - 1, 1))
    if len(time) == 1:
        return np.zeros(count, dtype=np.int64)
    before = after - 1
    nearer = np.abs(time[after] - instants) < np.abs(time[before] - instants)
    return np.where(nearer, after, before).astype(np.int64)


def plan_film(
    figure: Figure, rows: IntArray, look: Look, room: Room, *, speed: float, rate: float
) -> FilmPlan:
    """Place the camera for every picture; a look with a camera of its own keeps that."""
    if isinstance(look.view, Camera):
        return FilmPlan(rows, [look.view] * len(rows), speed, rate)
    motion = figure.motion
    seen = np.unique(rows[np.linspace(0, len(rows) - 1, min(len(rows), LOOKED_AT)).astype(int)])
    clouds = [
        figure.points(int(row), place_markers(motion, int(row), exaggeration=look.exaggeration))
        for row in seen
    ]
    extent = float(np.median([np.ptp(cloud, axis=0).max() for cloud in clouds]))
    way = camera_way(motion, rows, stays=STAYS * extent, spacing=speed / rate)
    at = {int(row): place for row, place in zip(rows, way, strict=True)}
    together = np.concatenate(
        [cloud - at[int(row)] for row, cloud in zip(seen, clouds, strict=True)]
    )
    forward = facing(motion, rows)
    up = picture_up(look.view, forward, figure.up)
    towards = look_from(look.view, forward, figure.up)
    shared = frame_points(together, towards, up, look.size, room)
    cameras = [
        Camera(shared.position + p, shared.focal_point + p, shared.up, shared.view_angle)
        for p in way
    ]
    return FilmPlan(rows, cameras, speed, rate)


def camera_way(motion: FittedMotion, rows: IntArray, *, stays: float, spacing: float) -> FloatArray:
    """(pictures, 3) m: the figure's middle over the film, smoothed; one place where it moves little.

    Parameters
    ----------
    stays : float
        m; a way whose box is smaller than this is one place.
    spacing : float
        s of the recording between pictures.
    """
    middles = figure_middles(motion)[rows]
    span = np.ptp(middles, axis=0)
    if float(span.max()) <= stays:
        return np.tile(middles.min(axis=0) + 0.5 * span, (len(rows), 1))
    return np.asarray(gaussian_filter1d(middles, SMOOTHING / spacing, axis=0, mode="nearest"))


def figure_middles(motion: FittedMotion) -> FloatArray:
    """(frames, 3) m: the mean of the segments' origins; between neighbours where nothing is posed."""
    origins = motion.laboratory_from_segment[..., :3, 3]
    posed = np.asarray(np.isfinite(motion.laboratory_from_segment).all(axis=(2, 3)))
    count = posed.sum(axis=1)
    total = np.where(posed[..., None], origins, 0.0).sum(axis=1)
    known = np.flatnonzero(count)
    if not len(known):
        return np.zeros((len(motion.time), 3))
    means = total[known] / count[known, None]
    every = np.arange(len(motion.time))
    return np.stack([np.interp(every, known, means[:, axis]) for axis in range(3)], axis=1)
