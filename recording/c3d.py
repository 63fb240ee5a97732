"""C3D files to `Recording`: units, missing points and names are settled here and nowhere else.

The bytes are read by the ezc3d library, after `check_layout` has made sure that the file holds
what it claims. Standard: https://www.c3d.org/HTML/Documents/.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import ezc3d
import numpy as np
from numpy.typing import NDArray

from condyle.recording.c3d_layout import Layout, check_layout, refusal
from condyle.recording.c3d_residuals import read_fourth_words, split_words
from condyle.recording.c3d_signals import read_analog, read_events, read_plates
from condyle.recording.c3d_texts import texts
from condyle.recording.point_names import listing, name_points, split_prefix
from condyle.recording.recording import Recording
from condyle.recording.units import (
    METRES_PER_UNIT,
    check_unit,
    marker_spread,
    unit_from_spread,
    unlikely_spread,
)

FloatArray = NDArray[np.float64]

NOT_POSITIONS = re.compile(r"(ANGLES|FORCES|MOMENTS|POWERS|SCALARS)\d*")
"""POINT parameters that list the labels of points that are no positions (common practice)."""

UP = re.compile(r"([+-]?)([XYZ])")
"""An axis as POINT:Y_SCREEN gives it."""


def read_c3d(path: Path, *, units: str | None = None) -> Recording:
    """Read a C3D file into metres and seconds, NaN where a point is missing.

    `units` (``mm``, ``m``, ...) wins over what the file declares.

    A point is missing where its residual is negative, a number is not finite, or all three are
    exactly zero (common practice of several exporters).

    Raises
    ------
    RecordingError
        When the file is damaged or holds no points, frames or frame rate.
    """
    check_unit(units)
    layout = check_layout(path)
    content = open_c3d(path)
    parameters = content["parameters"]
    remarks: list[str] = []
    positions, residuals, cameras = read_points(content, layout, path)
    labels = read_labels(parameters["POINT"], layout.points, remarks)
    kept = position_columns(parameters["POINT"], labels, remarks)
    if not len(kept):
        raise refusal(path, "none of its points is a position", "export the markers too")
    present = np.isfinite(positions[:, kept, 0])
    named = name_points([labels[column] for column in kept], present)
    columns = kept[named.columns]
    remarks += named.remarks
    positions = positions[:, columns]
    units = read_units(parameters["POINT"], marker_spread(positions), remarks, asked=units)
    metres = METRES_PER_UNIT[units]
    rate = read_rate(parameters["POINT"], layout, path, remarks)
    analog = read_analog(content, layout, rate)
    plates = read_plates(parameters, metres, layout.channels, remarks)
    events = read_events(content, remarks)
    up = read_up(parameters["POINT"], remarks)
    remarks += frame_remarks(layout)
    if not present.any():
        remarks.append("No point was seen in any frame.")
    return Recording(
        name=path.stem,
        source=str(path),
        rate=rate,
        first_frame=max(layout.first_frame, 1),
        labels=named.labels,
        positions=positions * metres,
        residuals=residuals[:, columns] * metres,
        cameras=cameras[:, columns],
        up=up,
        units=units,
        remarks=tuple(remarks),
        analog=analog,
        plates=plates,
        events=events,
    )


def open_c3d(path: Path) -> Any:
    """What ezc3d makes of a file whose layout is sound."""
    try:
        return ezc3d.c3d(str(path))
    except MemoryError as error:
        raise refusal(path, "it does not fit in memory", "cut it into shorter ones") from error
    except Exception as error:
        # ezc3d reports a bad file by whatever its C++ code threw: any type can arrive here
        why = " ".join(str(error).split()) or type(error).__name__
        raise refusal(path, f"damaged C3D ({why})", "export the recording again") from error


def read_points(
    content: Any, layout: Layout, path: Path
) -> tuple[FloatArray, FloatArray, NDArray[np.int64]]:
    """Positions (frames, points, 3) and residuals in the file's unit, and counts of cameras."""
    points = content["data"]["points"]
    if points.shape[1:] != (layout.points, layout.frames):
        found = f"{points.shape[2]} of {layout.frames} frames could be read"
        raise refusal(path, f"damaged C3D, {found}", "export or copy the recording again")
    words = read_fourth_words(path, layout)
    steps, cameras = split_words(words)
    positions = np.ascontiguousarray(points[:3].transpose(2, 1, 0), dtype=np.float64)
    missing = ~np.isfinite(positions).all(axis=2) | (positions == 0).all(axis=2) | (words < 0)
    positions[missing] = np.nan
    residuals = np.where(missing | (steps == 0), np.nan, steps * layout.scale)
    return positions, residuals, np.where(missing, 0, cameras)


def read_labels(point: Mapping[str, Any], points: int, remarks: list[str]) -> list[str]:
    """One label a point; the empty label where the file has none."""
    labels = texts(point, "LABELS")
    if len(labels) < points:
        remarks.append(f"Only {len(labels)} of {points} points have a label.")
    return (labels + [""] * points)[:points]


def position_columns(
    point: Mapping[str, Any], labels: list[str], remarks: list[str]
) -> NDArray[np.int64]:
    """The points that the file does not itself declare to be something else than positions."""
    declared: dict[str, str] = {}
    for key in point:
        match = NOT_POSITIONS.fullmatch(key)
        if match:
            # texts() follows numbered continuations, which then repeat: harmless in a dict
            declared |= {label: match[1].lower() for label in texts(point, key) if label}
    declared |= {split_prefix(label)[1]: kind for label, kind in declared.items()}
    kinds = [declared.get(label) or declared.get(split_prefix(label)[1]) for label in labels]
    dropped = [kind for kind in kinds if kind]
    if dropped:
        counts = [f"{dropped.count(kind)} {kind}" for kind in sorted(set(dropped))]
        one = len(dropped) == 1
        remarks.append(
            f"{len(dropped)} point{'' if one else 's'} that the file declares as "
            f"{listing(counts)} {'was' if one else 'were'} dropped: no positions."
        )
    return np.array([i for i, kind in enumerate(kinds) if not kind], dtype=np.int64)


def read_units(
    point: Mapping[str, Any], spread: float, remarks: list[str], *, asked: str | None = None
) -> str:
    """The unit of length: as asked, else as declared, else from the spread (in file units)."""
    declared = next(iter(texts(point, "UNITS")), "")
    unit = asked or declared.lower()
    if asked is not None and declared.lower() != asked:
        remarks.append(
            f"The file declares {said_unit(declared)}: taken as {asked}, as asked for by --units."
        )
    if unit not in METRES_PER_UNIT:
        unit = unit_from_spread(spread)
        known = f"{said_unit(declared)}, which is not known" if declared else said_unit(declared)
        why = f"the markers spread over {spread:.4g} {unit}" if spread > 0 else "by default"
        remarks.append(f"The file declares {known}: taken as {unit} ({why}).")
    doubt = unlikely_spread(spread * METRES_PER_UNIT[unit])
    if doubt:
        how = "Taken" if asked else "Declared"
        told = asked or declared
        remarks.append(f"{how} in {unit}: {doubt}." if told else f"{doubt.capitalize()}.")
    return unit


def said_unit(declared: str) -> str:
    """What a file says about its unit, in words."""
    return f"the unit '{declared}'" if declared else "no unit of length"


def read_rate(point: Mapping[str, Any], layout: Layout, path: Path, remarks: list[str]) -> float:
    """Frames per second: by the parameters, else by the header."""
    values = [float(v) for v in np.ravel(point["RATE"]["value"])] if "RATE" in point else []
    stated = values[0] if values else 0.0
    rate = next((r for r in (stated, layout.header_rate) if np.isfinite(r) and r > 0), 0.0)
    if rate == 0.0:
        if layout.frames > 1:
            raise refusal(path, "it has no frame rate", "export it again with its rate")
        remarks.append("The file gives no frame rate; its one frame is taken as 1 Hz.")
        return 1.0
    if layout.header_rate > 0 and abs(layout.header_rate / rate - 1) > 1e-3:
        remarks.append(
            f"The header says {layout.header_rate:g} Hz, the parameters {rate:g} Hz: "
            "the parameters are taken."
        )
    return rate


def read_up(point: Mapping[str, Any], remarks: list[str]) -> str | None:
    """The axis that points up on the screen by POINT:Y_SCREEN, such as ``+Z``."""
    declared = next(iter(texts(point, "Y_SCREEN")), "")
    match = UP.fullmatch(declared.upper())
    if declared and not match:
        remarks.append(f"The file declares '{declared}' as its up axis: not an axis, ignored.")
    return f"{match[1] or '+'}{match[2]}" if match else None


def frame_remarks(layout: Layout) -> list[str]:
    """What the user should know about the frames themselves."""
    remarks = []
    if layout.first_frame < 1:
        remarks.append("The file counts its frames from 0; here the first is 1.")
    if layout.claimed_frames > layout.frames:
        remarks.append(
            f"Only the first {layout.frames} of {layout.claimed_frames} frames were read: "
            "a C3D counts frames in 16 bits."
        )
    return remarks
