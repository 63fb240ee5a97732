"""An invented solved trial in a folder, written by the same code that `solve` uses."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from condyle.solver.result_files import skeleton_geometry
from condyle.solver.result_tables import segment_table
from condyle.solver.results import FittedMotion

NAMES = ("hip_flexion_right", "hip_flexion_left", "pelvis_x", "toes_extension_right")
UNITS = {"pelvis_x": "m"}
MEANINGS = {
    "hip_flexion_right": "thigh_right turns about z at joint hip_right",
    "hip_flexion_left": "thigh_left turns about z at joint hip_left",
    "pelvis_x": "position of pelvis along laboratory X",
    "toes_extension_right": "toes_right turns about z at joint toes_right",
}
UNSEEN = "toes_extension_right"


def write_trial(
    folder: Path,
    motion: FittedMotion,
    *,
    why_not: NDArray[np.str_] | None = None,
    warnings: tuple[Mapping[str, Any], ...] = (),
    name_of: Callable[[str], str] = str,
) -> Path:
    """A folder as `solve` leaves it, with numbers that are known here."""
    folder.mkdir(parents=True)
    frames = len(motion.time)
    reasons = np.where(motion.used, "", "missing") if why_not is None else why_not
    markers = len(motion.marker_names)
    flat = {axis: motion.measured[..., i].ravel() for i, axis in enumerate("xyz")}
    flat |= {f"fit_{axis}": motion.fitted[..., i].ravel() for i, axis in enumerate("xyz")}
    pd.DataFrame(
        {
            "frame": np.repeat(motion.frame, markers),
            "time": np.repeat(motion.time, markers),
            "marker": [name_of(name) for name in motion.marker_names] * frames,
            **flat,
            "error": motion.error.ravel(),
            "used": motion.used.ravel(),
            "why_not": reasons.ravel(),
        }
    ).to_parquet(folder / "markers.parquet")
    pd.DataFrame(segment_table(motion, None)).to_parquet(folder / "segments.parquet")
    coordinate_numbers(motion).to_parquet(folder / "coordinates.parquet")
    rows = [("frame", "1", "the recording's own frame number"), ("time", "s", "(frame - 1) / rate")]
    for name in NAMES:
        unit = UNITS.get(name, "deg")
        rows += [(name, unit, MEANINGS[name]), (f"{name}.sd", unit, "standard deviation")]
    pd.DataFrame(rows, columns=["column", "unit", "meaning"]).to_csv(
        folder / "columns.csv", index=False
    )
    parents = {"thigh_right": "laboratory", "shank_right": "thigh_right"}
    geometry = _geometry(motion) | {"parents": parents}
    (folder / "skeleton.json").write_text(json.dumps(geometry))
    report = fit_numbers(motion) | {"warnings": list(warnings)}
    (folder / "fit.json").write_text(json.dumps(report))
    return folder


def _geometry(motion: FittedMotion) -> dict[str, Any]:
    class Bare:
        """What `skeleton_geometry` asks of a skeleton."""

        name = "a leg"
        joints: tuple[Any, ...] = ()
        sizes: Mapping[str, Any] = {}

    return skeleton_geometry(motion, Bare())  # type: ignore[arg-type]


def coordinate_numbers(motion: FittedMotion) -> pd.DataFrame:
    """Numbers with more digits than a page shows, drawn once from a seed."""
    rng = np.random.default_rng(5)
    frames = len(motion.time)
    table: dict[str, Any] = {"frame": motion.frame, "time": motion.time}
    for name in NAMES:
        scale = 0.3 if name in UNITS else 25.0
        table[name] = scale * np.sin(motion.time[:, None] * rng.uniform(1, 3, 3)).sum(axis=1)
        table[f"{name}.sd"] = 0.02 * scale * rng.uniform(0.5, 1.5, frames)
    table[UNSEEN] = np.zeros(frames)
    table[f"{UNSEEN}.sd"] = np.full(frames, np.nan)
    table["hip_flexion_right.at_limit"] = np.arange(frames) < 3
    return pd.DataFrame(table)


def fit_numbers(motion: FittedMotion) -> dict[str, Any]:
    """What `fit.json` must say for a page."""
    error = motion.error[motion.used]
    rms = float(np.sqrt(np.mean(error**2)))
    summary = {"rms_error": rms, "largest_error": float(error.max()), "marker_frames": len(error)}
    return {
        "subject": {"name": "a leg", "file": "subject.yaml", "sha256": "ab" * 32},
        "trial": {"file": "swing.c3d", "sha256": "cd" * 32, "remarks": []},
        "versions": {"condyle": "0.1.0"},
        "up": {"axis": motion.up, "how": "asked for"},
        "rate": 20.0,
        "rms_error": rms,
        "largest_error": float(error.max()),
        "segments": {"thigh_right": summary, "shank_right": summary},
        "markers_without_label": [],
        "labels_not_in_model": [],
        "frames_not_converged": [],
        "smoothing": None,
        "uncertainty": {
            "calibration": "",
            "parts": {"hip_flexion_right": {"dominated_by": "calibration"}},
        },
    }


def longer(motion: FittedMotion, times: int) -> FittedMotion:
    """The same motion there and back, again and again."""
    rows = np.concatenate([np.arange(len(motion.time)), np.arange(len(motion.time))[::-1]])
    rows = np.tile(rows, times)
    frame = np.arange(1, len(rows) + 1)
    return replace(
        motion,
        frame=frame,
        time=(frame - 1) / 20.0,
        laboratory_from_segment=motion.laboratory_from_segment[rows],
        measured=motion.measured[rows],
        fitted=motion.fitted[rows],
        used=motion.used[rows],
    )


def exchange(motion: FittedMotion, first: str, second: str, rows: slice) -> FittedMotion:
    """Two markers exchanged on purpose for a while."""
    measured = motion.measured.copy()
    a, b = (motion.marker_names.index(name) for name in (first, second))
    measured[rows, a], measured[rows, b] = motion.measured[rows, b], motion.measured[rows, a]
    return replace(motion, measured=measured)
