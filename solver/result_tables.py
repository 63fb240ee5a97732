"""A fitted trial as the tables that go into files: degrees and metres, one row a frame or a marker.

Names, order and units of the columns are promises to other people's scripts. A table is its columns by
name, in order; pandas would take a third of a second to be there.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.solver.posture import continuous, quaternions_of
from condyle.solver.results import FittedMotion, TimeDerivatives, TrialFit

FloatArray = NDArray[np.float64]
Table = dict[str, Any]
"""Columns by name: arrays of numpy, or of pyarrow for text."""


def _in_file_units(values: FloatArray, units: list[str]) -> FloatArray:
    factor = np.array([np.degrees(1.0) if unit == "rad" else 1.0 for unit in units])
    return np.asarray(values * factor)


def coordinate_table(fit: TrialFit) -> Table:
    """One row a frame: frame, time, and for each number its value, sd and whether at a limit."""
    units = [column.unit for column in fit.columns]
    values, sd = _in_file_units(fit.values, units), _in_file_units(fit.sd, units)
    table: Table = {"frame": fit.motion.frame, "time": fit.motion.time}
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
    return table


def column_meanings(fit: TrialFit) -> Table:
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
    return _by_column(["column", "unit", "meaning"], rows)


def _derivative_meanings(name: str, unit: str) -> list[tuple[str, str, str]]:
    near = "; empty where undetermined or near a singularity"
    return [
        (f"{name}.rate", f"{unit}/s", f"its derivative in time{near}"),
        (f"{name}.rate.sd", f"{unit}/s", "standard deviation"),
        (f"{name}.accel", f"{unit}/s2", f"its second derivative in time{near}"),
        (f"{name}.accel.sd", f"{unit}/s2", "standard deviation"),
    ]


def marker_table(fit: TrialFit) -> Table:
    """One row a frame and marker, then the recording's other labels."""
    motion = fit.motion
    markers, others = len(motion.marker_names), len(fit.other_labels)
    frames = len(motion.time)
    measured = np.concatenate([motion.measured, fit.other_positions], axis=1)
    fitted = np.concatenate([motion.fitted, np.full((frames, others, 3), np.nan)], axis=1)
    names = [*motion.marker_names, *fit.other_labels]
    why = np.concatenate([fit.why_not, np.full((frames, others), "not_in_model")], axis=1)
    used = np.concatenate([motion.used, np.zeros((frames, others), dtype=bool)], axis=1)
    flat_measured, flat_fitted = measured.reshape(-1, 3), fitted.reshape(-1, 3)
    reasons, reason = np.unique(why, return_inverse=True)
    return {
        "frame": np.repeat(motion.frame, markers + others),
        "time": np.repeat(motion.time, markers + others),
        "marker": _texts(names, np.tile(np.arange(len(names)), frames)),
        **{axis: flat_measured[:, i] for i, axis in enumerate("xyz")},
        **{f"fit_{axis}": flat_fitted[:, i] for i, axis in enumerate("xyz")},
        "error": np.linalg.norm(flat_measured - flat_fitted, axis=1),
        "used": used.ravel(),
        "why_not": _texts(reasons.tolist(), reason.ravel()),
    }


def _texts(words: list[str], which: NDArray[np.int64]) -> pa.Array:
    """A long column of a few words."""
    return pa.DictionaryArray.from_arrays(arrow(which), text_array(words)).dictionary_decode()


def text_array(words: list[str]) -> pa.Array:
    """Text as Arrow keeps it."""
    coded = [word.encode() for word in words]
    ends = np.cumsum([0, *map(len, coded)]).astype(np.int32)
    return pa.StringArray.from_buffers(
        len(coded), pa.py_buffer(ends), pa.py_buffer(b"".join(coded))
    )


def arrow(values: NDArray[Any]) -> pa.Array:
    """Numbers or truth values as Arrow keeps them; NaN is null.

    Made from buffers, because `pyarrow.array` fetches pandas for every array of numpy.
    """
    count, values = len(values), np.ascontiguousarray(values)
    if values.dtype == bool:
        bits = np.packbits(values, bitorder="little")
        return pa.Array.from_buffers(pa.bool_(), count, [None, pa.py_buffer(bits)])
    there = None
    if values.dtype.kind == "f" and np.isnan(values).any():
        there = pa.py_buffer(np.packbits(~np.isnan(values), bitorder="little"))
    kind = pa.from_numpy_dtype(values.dtype)
    return pa.Array.from_buffers(kind, count, [there, pa.py_buffer(values)])


def _by_column(names: list[str], rows: list[tuple[Any, ...]]) -> Table:
    return {name: [row[i] for row in rows] for i, name in enumerate(names)}


def segment_table(motion: FittedMotion, derivatives: TimeDerivatives | None) -> Table:
    """One row a frame and segment: origin (m), unit quaternion continuous in sign, velocities.

    The velocities (m/s, deg/s, laboratory axes) only where the trial was estimated as a whole.
    """
    frames, segments = motion.laboratory_from_segment.shape[:2]
    quaternions = continuous_quaternions(motion.laboratory_from_segment[..., :3, :3])
    origins = motion.laboratory_from_segment[..., :3, 3].reshape(-1, 3)
    flat = quaternions.reshape(-1, 4)
    return {
        "frame": np.repeat(motion.frame, segments),
        "time": np.repeat(motion.time, segments),
        "segment": _texts(list(motion.segment_names), np.tile(np.arange(segments), frames)),
        **{axis: origins[:, i] for i, axis in enumerate("xyz")},
        **{name: flat[:, i] for i, name in enumerate(("qw", "qx", "qy", "qz"))},
        **_velocities(derivatives),
    }


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


def covariance_arrays(fit: TrialFit) -> dict[str, NDArray[Any]]:
    """What `covariance.npz` holds: frame, names, units, covariance; empty where none was asked for.

    The last is (frames, names, names) float32, in degrees and metres as the coordinates are; NaN where a
    number is undetermined.
    """
    if fit.covariance is None:
        return {}
    units = [column.unit for column in fit.columns]
    factor = _in_file_units(np.ones(len(units)), units).astype(np.float32)
    return {
        "frame": fit.motion.frame,
        "names": np.array([column.name for column in fit.columns]),
        "units": np.array(["deg" if unit == "rad" else unit for unit in units]),
        "covariance": fit.covariance * factor[:, None] * factor,
    }


def summary_table(fit: TrialFit) -> Table:
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
    return _by_column(names, rows)
