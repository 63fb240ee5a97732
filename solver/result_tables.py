"""A fitted trial as the tables that go into files: degrees and metres, one row a frame or a marker.

Names, order and units of the columns are promises to other people's scripts.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.solver.posture import continuous, quaternions_of
from condyle.solver.results import FittedMotion, TimeDerivatives, TrialFit

FloatArray = NDArray[np.float64]


def _in_file_units(values: FloatArray, units: list[str]) -> FloatArray:
    factor = np.array([np.degrees(1.0) if unit == "rad" else 1.0 for unit in units])
    return np.asarray(values * factor)


def coordinate_table(fit: TrialFit) -> pd.DataFrame:
    """One row a frame: frame, time, and for each number its value, sd and whether at a limit."""
    units = [column.unit for column in fit.columns]
    values, sd = _in_file_units(fit.values, units), _in_file_units(fit.sd, units)
    table: dict[str, Any] = {"frame": fit.motion.frame, "time": fit.motion.time}
    for i, column in enumerate(fit.columns):
        table[column.name] = values[:, i]
        table[f"{column.name}.sd"] = sd[:, i]
        if column.has_range:
            table[f"{column.name}.at_limit"] = fit.at_limit[:, i]
        if fit.derivatives is not None:
            factor = float(_in_file_units(np.ones(1), [column.unit])[0])
            table[f"{column.name}.rate"] = fit.derivatives.rates[:, i] * factor
            table[f"{column.name}.rate.sd"] = fit.derivatives.rates_sd[:, i] * factor
            table[f"{column.name}.accel"] = fit.derivatives.accelerations[:, i] * factor
            table[f"{column.name}.accel.sd"] = fit.derivatives.accelerations_sd[:, i] * factor
    return pd.DataFrame(table)


def column_meanings(fit: TrialFit) -> pd.DataFrame:
    """Name, unit and meaning of each column of the coordinate table."""
    rows = [
        ("frame", "1", "the recording's own frame number"),
        ("time", "s", "(frame - 1) / rate"),
    ]
    for column in fit.columns:
        unit = "deg" if column.unit == "rad" else "m"
        rows.append((column.name, unit, column.meaning))
        rows.append((f"{column.name}.sd", unit, "standard deviation; empty where undetermined"))
        if column.has_range:
            rows.append((f"{column.name}.at_limit", "1", "1 where it is at a limit of its range"))
        if fit.derivatives is not None:
            rows += _derivative_meanings(column.name, unit)
    return pd.DataFrame(rows, columns=["column", "unit", "meaning"])


def _derivative_meanings(name: str, unit: str) -> list[tuple[str, str, str]]:
    near = "; empty where undetermined or near a singularity"
    return [
        (f"{name}.rate", f"{unit}/s", f"its derivative in time{near}"),
        (f"{name}.rate.sd", f"{unit}/s", "standard deviation"),
        (f"{name}.accel", f"{unit}/s2", f"its second derivative in time{near}"),
        (f"{name}.accel.sd", f"{unit}/s2", "standard deviation"),
    ]


def marker_table(fit: TrialFit) -> pd.DataFrame:
    """One row a frame and marker, then the recording's other labels."""
    motion = fit.motion
    markers, others = len(motion.marker_names), len(fit.other_labels)
    frames = len(motion.time)
    measured = np.concatenate([motion.measured, fit.other_positions], axis=1)
    fitted = np.concatenate([motion.fitted, np.full((frames, others, 3), np.nan)], axis=1)
    names = np.array([*motion.marker_names, *fit.other_labels], dtype=object)
    why = np.concatenate([fit.why_not, np.full((frames, others), "not_in_model")], axis=1)
    used = np.concatenate([motion.used, np.zeros((frames, others), dtype=bool)], axis=1)
    flat_measured, flat_fitted = measured.reshape(-1, 3), fitted.reshape(-1, 3)
    return pd.DataFrame(
        {
            "frame": np.repeat(motion.frame, markers + others),
            "time": np.repeat(motion.time, markers + others),
            "marker": pd.Categorical(np.tile(names, frames)),
            **{axis: flat_measured[:, i] for i, axis in enumerate("xyz")},
            **{f"fit_{axis}": flat_fitted[:, i] for i, axis in enumerate("xyz")},
            "error": np.linalg.norm(flat_measured - flat_fitted, axis=1),
            "used": used.ravel(),
            "why_not": pd.Categorical(why.ravel()),
        }
    ).astype({"marker": str, "why_not": str})


def segment_table(motion: FittedMotion, derivatives: TimeDerivatives | None) -> pd.DataFrame:
    """One row a frame and segment: origin (m), unit quaternion continuous in sign, velocities.

    The velocities (m/s, deg/s, laboratory axes) only where the trial was estimated as a whole.
    """
    frames, segments = motion.laboratory_from_segment.shape[:2]
    quaternions = continuous_quaternions(motion.laboratory_from_segment[..., :3, :3])
    origins = motion.laboratory_from_segment[..., :3, 3].reshape(-1, 3)
    flat = quaternions.reshape(-1, 4)
    return pd.DataFrame(
        {
            "frame": np.repeat(motion.frame, segments),
            "time": np.repeat(motion.time, segments),
            "segment": np.tile(np.array(motion.segment_names, dtype=object), frames),
            **{axis: origins[:, i] for i, axis in enumerate("xyz")},
            **{name: flat[:, i] for i, name in enumerate(("qw", "qx", "qy", "qz"))},
            **_velocities(derivatives),
        }
    )


def _velocities(derivatives: TimeDerivatives | None) -> dict[str, FloatArray]:
    if derivatives is None:
        return {}
    linear = derivatives.linear.reshape(-1, 3)
    angular = np.degrees(derivatives.angular.reshape(-1, 3))
    return {
        **{f"v{axis}": linear[:, i] for i, axis in enumerate("xyz")},
        **{f"w{axis}": angular[:, i] for i, axis in enumerate("xyz")},
    }


def continuous_quaternions(rotation: FloatArray) -> FloatArray:
    """(frames, segments, 4) scalar first, sign continuous in time, the first scalar part >= 0."""
    frames, segments = rotation.shape[:2]
    stack = Rotation.from_matrix(rotation.reshape(-1, 3, 3))
    q = quaternions_of(stack).reshape(frames, segments, 4)
    return continuous(q * np.where(q[:1, :, :1] < 0, -1.0, 1.0))


def summary_table(fit: TrialFit) -> pd.DataFrame:
    """Per number: minimum, maximum, range, and when the extremes occur."""
    units = [column.unit for column in fit.columns]
    determined = np.isfinite(fit.sd)
    values = np.where(determined, _in_file_units(fit.values, units), np.nan)
    rows = []
    for i, column in enumerate(fit.columns):
        unit = "deg" if column.unit == "rad" else "m"
        if not determined[:, i].any():
            rows.append((column.name, unit, *[np.nan] * 5))
            continue
        low, high = int(np.nanargmin(values[:, i])), int(np.nanargmax(values[:, i]))
        least, most = values[low, i], values[high, i]
        rows.append(
            (
                column.name,
                unit,
                least,
                most,
                most - least,
                fit.motion.time[low],
                fit.motion.time[high],
            )
        )
    names = ["name", "unit", "minimum", "maximum", "range", "time_of_minimum", "time_of_maximum"]
    return pd.DataFrame(rows, columns=names)
