"""What a page's player needs: a short description in JSON, and the numbers over time, packed.

Steps are chosen so that nothing shows of the rounding: a twentieth of a millimetre for places, less for what
is read off as a number. A very long trial travels with every second frame, or fewer; the page says so.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.solver.result_tables import continuous_quaternions
from condyle.solver.results import FittedMotion
from condyle.viz.figure import build_figure
from condyle.viz.packing import Package
from condyle.viz.page_bones import pack_bones
from condyle.viz.page_findings import PageFinding
from condyle.viz.shown_trial import ShownColumn, ShownTrial
from condyle.viz.skeleton_plan import plan_segments, side_of
from condyle.viz.viewpoint import facing, main_root

FloatArray = NDArray[np.float64]

PLACE_STEP = 5e-5
"""m"""
TURN_STEP = 5e-5
"""Of a unit quaternion: 0.006 degrees."""
ERROR_STEP = 1e-5
"""m"""
VALUE_STEPS = {"deg": 0.005, "m": 1e-5}
"""deg or m"""
TIME_STEP = 1e-5
"""s"""

MOST_FRAMES = 6000
"""Frames of a page; more would make it slow to open, and a screen has fewer pixels across."""


@dataclass(frozen=True, slots=True)
class PageData:
    """What goes into the page.

    Attributes
    ----------
    description : str
        JSON, safe inside a script element.
    numbers : str
        base64
    every : int
        1 where all frames travel, else which n-th.
    """

    description: str
    numbers: str
    every: int


def page_data(trial: ShownTrial, findings: Sequence[PageFinding]) -> PageData:
    """Describe and pack a trial."""
    motion = trial.motion
    every = max(1, -(-len(motion.time) // MOST_FRAMES))
    rows = slice(None, None, every)
    package = Package()
    reasons = _pack_markers(trial, rows, package)
    _pack_segments(motion, rows, package)
    _pack_columns(trial.columns, rows, package)
    package.add("time", motion.time[None, rows], step=TIME_STEP)
    package.add("frame", motion.frame[None, rows].astype(np.float64), step=1.0)
    package.add("rms", motion.rms_of_frames()[None, rows], step=ERROR_STEP)
    pack_bones(motion, package)
    description = {
        "name": trial.name,
        "every": every,
        "rate": trial.report.get("rate"),
        **_scene(motion),
        "markers": list(motion.marker_names),
        "reasons": reasons,
        "columns": [_column(c) for c in trial.columns],
        "groups": [
            {"name": name, "columns": [c.name for c in columns]}
            for name, columns in trial.groups().items()
        ],
        "pairs": [[right.name, left.name] for right, left in trial.pairs()],
        "findings": [_finding(f, every) for f in findings],
        "arrays": package.directory,
    }
    return PageData(script_json(description), package.base64(), every)


def script_json(content: Any) -> str:
    """JSON that no text from a file can end the script element around, or start another."""
    text = json.dumps(content, ensure_ascii=True, separators=(",", ":"), allow_nan=False)
    return text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")


def _channels(values: FloatArray) -> FloatArray:
    """(frames, things, parts) -> (things * parts, frames)."""
    return np.ascontiguousarray(values.reshape(len(values), -1).T)


def _pack_markers(trial: ShownTrial, rows: slice, package: Package) -> list[str]:
    motion = trial.motion
    package.add("measured", _channels(motion.measured[rows]), step=PLACE_STEP)
    package.add("fitted", _channels(motion.fitted[rows]), step=PLACE_STEP)
    package.add("error", _channels(motion.error[rows]), step=ERROR_STEP)
    reasons, codes = np.unique(trial.why_not[rows], return_inverse=True)
    package.add("why_not", codes.reshape(trial.why_not[rows].shape).T.astype(float), step=1.0)
    return [str(reason) for reason in reasons]


def _pack_segments(motion: FittedMotion, rows: slice, package: Package) -> None:
    poses = motion.laboratory_from_segment[rows]
    posed = np.asarray(np.isfinite(poses).all(axis=(2, 3)))
    turns = continuous_quaternions(np.where(posed[..., None, None], poses, np.eye(4))[..., :3, :3])
    turns[~posed] = np.nan
    package.add("origin", _channels(poses[..., :3, 3]), step=PLACE_STEP)
    package.add("turn", _channels(turns), step=TURN_STEP)


def _pack_columns(columns: Sequence[ShownColumn], rows: slice, package: Package) -> None:
    for unit, step in VALUE_STEPS.items():
        chosen = [c for c in columns if c.unit == unit]
        if chosen:
            package.add(f"value {unit}", np.stack([c.values[rows] for c in chosen]), step=step)
            package.add(f"sd {unit}", np.stack([c.sd[rows] for c in chosen]), step=step)
            at_limit = np.stack([c.at_limit[rows] for c in chosen]).astype(np.float64)
            package.add(f"at limit {unit}", at_limit, step=1.0)


def _scene(motion: FittedMotion) -> dict[str, Any]:
    figure = build_figure(motion)
    plans = plan_segments(motion)
    return {
        "up": figure.up.tolist(),
        "floor": round(figure.floor, 4),
        "forward": facing(motion, slice(None)).round(4).tolist(),
        "root": int(main_root(motion)),
        "segments": [{"name": plan.name, "side": side_of(plan.name)} for plan in plans],
        "sticks": [
            [i, *plan.proximal.round(4).tolist(), *centre.round(4).tolist()]
            for i, plan in enumerate(plans)
            for centre in plan.far_centres()
        ],
    }


def _column(column: ShownColumn) -> dict[str, Any]:
    return {
        "name": column.name,
        "unit": column.unit,
        "meaning": column.meaning,
        "group": column.group,
        "lower": float(column.lower) if np.isfinite(column.lower) else None,
        "upper": float(column.upper) if np.isfinite(column.upper) else None,
    }


def _finding(finding: PageFinding, every: int) -> dict[str, Any]:
    return {
        "level": finding.level,
        "places": [
            {
                "first": place.first // every,
                "last": place.last // every,
                "worst": round(place.worst / every),
                "markers": list(place.markers),
            }
            for place in finding.places
        ],
    }
