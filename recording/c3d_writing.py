"""A `Recording` to a C3D file: millimetres, residual -1 where a point is missing.

Decided here: what is written (points, residuals, cameras, up axis, frame numbers, analog channels,
force plates, events) and that a file appears whole or not at all.
"""

from __future__ import annotations

import os
import struct
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import ezc3d
import numpy as np

from condyle.model.errors import RecordingError
from condyle.recording.c3d_layout import MOST_FRAMES, check_layout
from condyle.recording.c3d_residuals import LARGEST_RESIDUAL, join_words, write_fourth_words
from condyle.recording.recording import Recording

MM_PER_M = 1000.0

SCALE_IN_HEADER = 12
"""Byte at which words 7 and 8 begin."""

SMALLEST_STEP = 1e-3
"""mm; keeps the scale of a recording that never leaves the origin above zero."""

INTEGER_RANGE = 32000
"""The standard's recommended scale is the largest coordinate over this."""

RIGHT_OF_SCREEN = {"X": "+Y", "Y": "+X", "Z": "+X"}
"""An X_SCREEN for every up axis; any axis across it would do."""


def write_c3d(path: Path, recording: Recording) -> None:
    """Write a recording as C3D.

    A residual is kept to within half a step, |POINT:SCALE|; of cameras only how many saw a point,
    at most seven.

    Raises
    ------
    RecordingError
        When the file cannot be written, or frame numbers do not fit in C3D's 16 bits.
    """
    path = Path(path)
    last = recording.first_frame + len(recording) - 1
    if (
        not len(recording)
        or not recording.labels
        or recording.first_frame < 1
        or last > MOST_FRAMES
    ):
        raise RecordingError(
            f"{path}: a C3D holds at least one point and the frames 1 to {MOST_FRAMES}, not "
            f"{len(recording.labels)} points and frames {recording.first_frame} to {last}."
        )
    content = ezc3d.c3d()
    scale = residual_step(recording)
    fill_points(content, recording, scale)
    fill_analog(content, recording)
    fill_plates(content, recording)
    fill_events(content, recording)
    try:
        with TemporaryDirectory(prefix=f".{path.stem}-", dir=path.parent) as beside:
            part = Path(beside) / "whole.c3d"
            content.write(str(part))
            complete(part, recording, scale)
            os.replace(part, path)
    except (OSError, RuntimeError) as error:  # ezc3d throws the latter
        why = getattr(error, "strerror", None) or str(error)
        raise RecordingError(f"{path}: cannot be written ({why}); choose another place.") from error
    except RecordingError as error:
        raise RecordingError(
            f"{path}: could not be written whole; see whether the disk is full."
        ) from error


def complete(path: Path, recording: Recording, scale: float) -> None:
    """Put in what ezc3d leaves out or mixes up: the header's scale, and the points' fourth words."""
    with path.open("r+b") as stream:
        stream.seek(SCALE_IN_HEADER)
        stream.write(struct.pack("<f", -scale))
    steps = recording.residuals * (MM_PER_M / scale)
    words = join_words(steps, recording.cameras, ~recording.present)
    write_fourth_words(path, check_layout(path), words)


def residual_step(recording: Recording) -> float:
    """mm, the standard's recommended scale, or what the largest residual needs if that is more."""
    positions = np.where(recording.present[..., None], recording.positions, 0.0)
    residuals = np.nan_to_num(recording.residuals)
    largest = max(np.abs(positions).max() / INTEGER_RANGE, residuals.max() / LARGEST_RESIDUAL)
    return float(np.float32(max(MM_PER_M * largest, SMALLEST_STEP)))


def fill_points(content: Any, recording: Recording, scale: float) -> None:
    """Positions and what describes them; the fourth words come later."""
    point = content["parameters"]["POINT"]
    missing = ~recording.present
    positions = np.where(missing[..., None], 0.0, recording.positions * MM_PER_M)
    point["LABELS"]["value"] = list(recording.labels)
    point["DESCRIPTIONS"]["value"] = [""] * len(recording.labels)
    point["UNITS"]["value"] = ["mm"]
    point["RATE"]["value"] = np.array([recording.rate])
    point["SCALE"]["value"] = np.array([-scale])
    content["header"]["points"]["first_frame"] = recording.first_frame - 1
    content["data"]["points"] = positions.transpose(2, 1, 0)
    # a new file's zero residuals would not be resized by ezc3d: drop them
    content["data"]["meta_points"] = {}
    if recording.up is not None:
        content.add_parameter("POINT", "X_SCREEN", [RIGHT_OF_SCREEN[recording.up[-1]]])
        content.add_parameter("POINT", "Y_SCREEN", [recording.up])


def fill_analog(content: Any, recording: Recording) -> None:
    """Analog channels, already scaled; a rate of zero where there are none."""
    group = content["parameters"]["ANALOG"]
    analog = recording.analog
    if analog is None:
        group["RATE"]["value"] = np.array([0.0])
        return
    channels = len(analog.labels)
    group["RATE"]["value"] = np.array([analog.rate])
    group["LABELS"]["value"] = list(analog.labels)
    group["DESCRIPTIONS"]["value"] = [""] * channels
    group["UNITS"]["value"] = list(analog.units)
    group["SCALE"]["value"] = np.ones(channels)
    group["OFFSET"]["value"] = np.zeros(channels, dtype=int)
    content["data"]["analogs"] = analog.values.T[None]


def fill_plates(content: Any, recording: Recording) -> None:
    """Force plates; those of differing channel counts or with no channels are padded with 0."""
    plates = recording.plates
    if not plates:
        return
    width = max(6, *(len(plate.channels) for plate in plates))
    channels = np.zeros((width, len(plates)))
    for index, plate in enumerate(plates):
        channels[: len(plate.channels), index] = np.array(plate.channels) + 1
    corners = np.stack([plate.corners.T for plate in plates], axis=2) * MM_PER_M
    origins = np.stack([plate.origin for plate in plates], axis=1) * MM_PER_M
    group = content["parameters"]["FORCE_PLATFORM"]
    group["USED"]["value"] = np.array([len(plates)])
    group["TYPE"]["value"] = np.array([plate.type for plate in plates])
    group["CORNERS"]["value"] = corners
    group["ORIGIN"]["value"] = origins
    group["CHANNEL"]["value"] = channels.astype(int)
    matrices = [plate.calibration for plate in plates if plate.calibration is not None]
    if len(matrices) == len(plates) and len({matrix.shape for matrix in matrices}) == 1:
        group["CAL_MATRIX"]["value"] = np.stack(matrices, axis=2)


def fill_events(content: Any, recording: Recording) -> None:
    """Events as minutes and seconds."""
    for event in recording.events:
        minutes = int(event.time // 60)
        content.add_event([minutes, event.time - 60 * minutes], label=event.label)
