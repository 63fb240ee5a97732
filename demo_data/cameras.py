"""What invented cameras make of true marker positions: noise, gaps and a reflection with no name.

Decided here: what is lost when. Gaps are declared, not drawn: each has a reason in the movement,
and together they leave every frame enough to go by.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.demo_data.movements import RATE
from condyle.demo_data.person import SEED
from condyle.recording.recording import Recording

FloatArray = NDArray[np.float64]

LEAST_NOISE, MOST_NOISE = 0.0003, 0.001
"""m per axis, white; each marker has its own. Moving markers are told to within 2 mm (Merriaux et
al. 2017, Sensors 17:1591)."""

FEWEST_CAMERAS, MOST_CAMERAS = 3, 7
"""How many of the invented cameras see a marker in a frame."""

STATIC_ONLY = tuple(
    f"{name}_{side}" for side in ("right", "left") for name in ("FE_medial", "MM", "MT2")
)
"""Taken off after the static: a medial marker would be brushed off by the other leg."""

STRAY = "*31"
"""The label of the reflection: it only numbers a point."""


@dataclass(frozen=True, slots=True)
class Hidden:
    """A marker out of sight from `start` (s) for so many `frames`."""

    marker: str
    start: float
    frames: int


GAPS: Mapping[str, tuple[Hidden, ...]] = {
    "static": (),
    "step_up": (
        Hidden("MT1_left", 0.61, 9),  # passes the other foot
        Hidden("thigh_right", 1.10, 22),  # behind the swinging hand
        Hidden("ASIS_left", 2.30, 40),  # the raised thigh, and the bent trunk
        Hidden("CA_right", 3.05, 17),  # a ladder upright
        Hidden("ASIS_right", 3.20, 33),
        Hidden("TT_left", 3.10, 100),  # a rung, for a whole second
        Hidden("LM_left", 4.20, 12),
        Hidden("EM_left", 1.35, 18),  # against the trunk
        Hidden("C7", 2.60, 26),  # hair, the head thrown back
        Hidden("MC5_right", 3.30, 15),  # the ladder
    ),
    "reach_aside": (
        Hidden("ASIS_right", 0.75, 36),  # bent over
        Hidden("GT_right", 0.90, 14),  # the hanging hand
        Hidden("PSIS_left", 1.80, 100),  # the basket on the back, for a whole second
        Hidden("MT5_right", 2.05, 8),
        Hidden("FH_left", 2.40, 25),
        Hidden("thigh_left", 3.30, 19),
        Hidden("EM_right", 0.95, 20),  # against the knee
        Hidden("IJ", 0.85, 24),  # the chin
        Hidden("US_right", 2.20, 16),  # leaves
    ),
}
"""What each trial does not show."""

STRAY_SEEN = {"step_up": (0.8, 2.6), "reach_aside": (1.5, 3.4)}
"""s, from when to when a reflection drifts through the volume."""


def record(
    name: str, first_frame: int, labels: tuple[str, ...], true_positions: FloatArray
) -> Recording:
    """A recording of true marker positions (frames, markers, 3) in the laboratory, m."""
    order = ("static", *STRAY_SEEN)
    rng = np.random.default_rng([SEED, 2, order.index(name)])
    noise = rng.uniform(LEAST_NOISE, MOST_NOISE, len(labels))[:, None]
    positions = true_positions + rng.normal(size=true_positions.shape) * noise
    for gap in GAPS[name]:
        start = round(gap.start * RATE)
        positions[start : start + gap.frames, labels.index(gap.marker)] = np.nan
    if name in STRAY_SEEN:
        keep = [i for i, label in enumerate(labels) if label not in STATIC_ONLY]
        stray = stray_point(positions[:, keep], STRAY_SEEN[name], rng)
        labels = (*(labels[i] for i in keep), STRAY)
        positions = np.concatenate([positions[:, keep], stray[:, None]], axis=1)
    seen = np.isfinite(positions).all(axis=2)
    residuals = rng.uniform(LEAST_NOISE, MOST_NOISE, seen.shape)
    cameras = rng.integers(FEWEST_CAMERAS, MOST_CAMERAS + 1, seen.shape)
    return Recording(
        name=name,
        source=f"{name}.c3d",
        rate=RATE,
        first_frame=first_frame,
        labels=labels,
        positions=positions,
        residuals=np.where(seen, residuals, np.nan),
        cameras=np.where(seen, cameras, 0),
        up="+Z",
        units="mm",
    )


def stray_point(
    positions: FloatArray, seen: tuple[float, float], rng: np.random.Generator
) -> FloatArray:
    """(frames, 3) m: drifting past the person within reach of the markers; NaN when unseen."""
    frames = len(positions)
    first, last = (round(instant * RATE) for instant in seen)
    middle = np.nanmean(positions, axis=(0, 1))
    start, end = middle + rng.uniform(-0.6, 0.6, 3), middle + rng.uniform(-0.6, 0.6, 3)
    share = np.linspace(0, 1, last - first)[:, None]
    path = np.full((frames, 3), np.nan)
    path[first:last] = start + (end - start) * share + 0.02 * np.sin(9 * share)
    path[first:last] += rng.normal(0.0, MOST_NOISE, (last - first, 3))
    return path
