"""What force plates felt, at the times of the markers: force on the person and where it acts.

The channels are combined by the ezc3d library, which knows the C3D standard's plate types and calibration
matrices (https://www.c3d.org/HTML/Documents/forceplatform.htm). Decided here: a plate can only push, so the force is
told as that of the ground on the person; several samples in one frame are averaged; an unloaded plate has no
centre of pressure.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import ezc3d
import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import RecordingError
from condyle.recording.c3d_layout import check_layout
from condyle.recording.units import METRES_PER_UNIT

FloatArray = NDArray[np.float64]

UNLOADED = 20.0
"""N; with less on it a plate's centre of pressure is noise (common practice: 10 to 30)."""


@dataclass(frozen=True, slots=True)
class PlateForces:
    """Forces of the ground on the person.

    Attributes
    ----------
    frame : (frames,) int
        The file's own frame numbers.
    force : (frames, plates, 3) N, laboratory axes
    centre : (frames, plates, 3) m
        Of pressure; NaN where the plate is unloaded.
    """

    frame: NDArray[np.int64]
    force: FloatArray
    centre: FloatArray

    def largest(self) -> float:
        """N; 0 without plates."""
        return float(np.nanmax(np.linalg.norm(self.force, axis=2), initial=0.0))


def read_plate_forces(path: Path) -> PlateForces | None:
    """Read a C3D file's plates; None where it has none.

    Raises
    ------
    RecordingError
        If the file cannot be read.
    """
    path = Path(path)
    layout = check_layout(path)
    try:
        content = ezc3d.c3d(str(path), extract_forceplat_data=True)
        plates = content["data"]["platform"]
    except Exception as error:
        # ezc3d reports what it cannot combine by whatever its C++ code threw
        why = " ".join(str(error).split()) or type(error).__name__
        raise RecordingError(
            f"{path}: its force plates cannot be read ({why}).\n  Draw it without forces."
        ) from error
    if not plates:
        return None
    pairs = [_plate(plate, layout.frames) for plate in plates]
    force = np.stack([force for force, _ in pairs], axis=1)
    centre = np.stack([centre for _, centre in pairs], axis=1)
    first = max(layout.first_frame, 1)
    frame = np.arange(first, first + layout.frames, dtype=np.int64)
    return PlateForces(frame, force, centre)


def _plate(plate: Any, frames: int) -> tuple[FloatArray, FloatArray]:
    """(frames, 3) force and centre of one plate."""
    metres = METRES_PER_UNIT.get(str(plate["unit_position"]).lower(), 1e-3)
    force = _per_frame(np.asarray(plate["force"], dtype=np.float64).T, frames)
    corners = np.asarray(plate["corners"], dtype=np.float64).T
    upwards = _normal(corners)
    force = force if float(force.sum(axis=0) @ upwards) >= 0.0 else -force
    samples = np.asarray(plate["force"], dtype=np.float64).T
    weights = np.linalg.norm(samples, axis=1, keepdims=True)
    pressed = np.asarray(plate["center_of_pressure"], dtype=np.float64).T
    known = np.isfinite(pressed).all(axis=1, keepdims=True) & (weights > 0)
    together = _per_frame(np.where(known, pressed * weights, 0.0), frames)
    total = _per_frame(np.where(known, weights, 0.0), frames)
    loaded = ((force @ upwards)[:, None] >= UNLOADED) & (total > 0)
    centre = np.where(loaded, together / np.where(total > 0, total, 1.0), np.nan)
    return force, centre * metres


def _per_frame(samples: FloatArray, frames: int) -> FloatArray:
    """(frames, columns): means of the samples of each frame."""
    each = max(len(samples) // frames, 1)
    whole = samples[: frames * each]
    return np.asarray(whole.reshape(frames, each, -1).mean(axis=1))


def _normal(corners: FloatArray) -> FloatArray:
    """(3,) Out of the plate's surface: the C3D's plate axes, told by its corners, have Z into the floor."""
    x = corners[0] + corners[3] - corners[1] - corners[2]
    y = corners[0] + corners[1] - corners[2] - corners[3]
    down = np.cross(x, y)
    return np.asarray(-down / np.linalg.norm(down))
