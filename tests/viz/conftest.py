"""An invented small leg that swings, with markers whose errors are known by construction."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from condyle.solver.results import FittedMotion

FRAMES = 21
LANDMARKS = {
    "thigh_right": {
        "GT_right": np.array([-0.01, 0.0, 0.08]),
        "FE_lateral_right": np.array([0.0, -0.40, 0.05]),
        "FE_medial_right": np.array([0.0, -0.40, -0.05]),
    },
    "shank_right": {
        "LM_right": np.array([0.0, -0.40, 0.04]),
        "MM_right": np.array([0.0, -0.39, -0.04]),
    },
}
PLACES = {
    "front": ("thigh_right", np.array([0.14, -0.20, 0.02])),
    "knee": ("thigh_right", np.array([0.0, -0.40, 0.06])),
    "shin": ("shank_right", np.array([0.15, -0.22, 0.0])),
    "ankle": ("shank_right", np.array([-0.10, -0.38, 0.04])),
}
RESIDUAL = {
    "front": np.array([0.020, 0.010, 0.0]),
    "knee": np.array([0.0, 0.004, 0.003]),
    "shin": np.array([0.003, 0.0, 0.0]),
    "ankle": np.array([-0.005, 0.0, 0.0]),
}


def turn_about_z(angle: float) -> np.ndarray:
    pose = np.eye(4)
    pose[:2, :2] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
    return pose


def moved(x: float, y: float) -> np.ndarray:
    pose = np.eye(4)
    pose[:2, 3] = x, y
    return pose


def make_leg() -> FittedMotion:
    """Hip swinging from -20 to 20 degrees, knee from 5 to 45; residuals grow with time."""
    time = np.arange(FRAMES) / 20.0
    poses = np.empty((FRAMES, 2, 4, 4))
    for row, share in enumerate(np.linspace(0.0, 1.0, FRAMES)):
        poses[row, 0] = moved(0.6 * share, 0.86) @ turn_about_z(np.radians(-20 + 40 * share))
        knee = turn_about_z(-np.radians(5 + 40 * share))
        poses[row, 1] = poses[row, 0] @ moved(0.0, -0.42) @ knee
    segments = ("thigh_right", "shank_right")
    fitted = np.stack(
        [
            poses[:, segments.index(segment), :3, :3] @ place
            + poses[:, segments.index(segment), :3, 3]
            for segment, place in PLACES.values()
        ],
        axis=1,
    )
    growth = (0.5 + np.arange(FRAMES) / FRAMES)[:, None, None]
    return FittedMotion(
        name="swing",
        frame=np.arange(1, FRAMES + 1),
        time=time,
        up="+Y",
        segment_names=segments,
        laboratory_from_segment=poses,
        marker_names=tuple(PLACES),
        measured=fitted + growth * np.stack(list(RESIDUAL.values())),
        fitted=fitted,
        used=np.ones(fitted.shape[:2], dtype=bool),
        joint_centres={"thigh_right": {"shank_right": np.array([0.0, -0.42, 0.0])}},
        landmarks=LANDMARKS,
    )


@pytest.fixture
def leg() -> FittedMotion:
    return make_leg()


@pytest.fixture
def change() -> Callable[..., FittedMotion]:
    """Copies a motion with some fields replaced and arrays free to write to."""

    def changed(motion: FittedMotion, **fields: object) -> FittedMotion:
        kept = {name: getattr(motion, name) for name in FittedMotion.__slots__}
        copied = {n: v.copy() if isinstance(v, np.ndarray) else v for n, v in kept.items()}
        return FittedMotion(**{**copied, **fields})

    return changed
