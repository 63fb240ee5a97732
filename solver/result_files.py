"""What a solved trial leaves on the disk, and reading it back for pictures.

Outside scripts rely on these files: names, columns and units are promises. Degrees and metres in
files; each file appears whole or not at all, and together they replace an earlier result.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.errors import CondyleError
from condyle.model.meshes import GrownShape
from condyle.model.skeleton import Shape, Skeleton, Turn, Vector
from condyle.model.whole_files import cannot_write, whole_file
from condyle.recording.recording import is_seen
from condyle.solver.posture import quaternions_of, rotations
from condyle.solver.quality import Finding, error_summary
from condyle.solver.results import FittedMotion, TrialFit

FloatArray = NDArray[np.float64]

CAUTION = (
    "A measuring aid, not a diagnosis: decisions on treatment or training belong to licensed "
    "practice."
)


def save_trial(
    fit: TrialFit,
    skeleton: Skeleton,
    folder: Path,
    *,
    findings: list[Finding],
    origin: Mapping[str, Any],
) -> None:
    """Write every file of a solved trial into `folder`, which is made.

    Parameters
    ----------
    findings : what is worth saying, kept as `warnings`
    origin : what goes into `fit.json` about where this comes from

    Raises
    ------
    CondyleError
        Where the folder cannot be written.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as fault:
        raise cannot_write(folder, fault) from fault
    coordinates = coordinate_table(fit)
    with whole_file(folder / "coordinates.parquet") as path:
        coordinates.to_parquet(path, index=False)
    numeric = coordinates.astype(
        {c: np.int8 for c in coordinates.columns if str(c).endswith(".at_limit")}
    )
    _write_csv(numeric, folder / "coordinates.csv")
    _write_csv(column_meanings(fit), folder / "columns.csv")
    with whole_file(folder / "markers.parquet") as path:
        marker_table(fit).to_parquet(path, index=False)
    with whole_file(folder / "segments.parquet") as path:
        segment_table(fit.motion).to_parquet(path, index=False)
    _write_csv(summary_table(fit), folder / "summary.csv")
    _write_json(skeleton_geometry(fit.motion, skeleton), folder / "skeleton.json")
    _write_json(fit_report(fit, skeleton, findings, origin), folder / "fit.json")


def _write_csv(table: pd.DataFrame, path: Path) -> None:
    with whole_file(path) as beside:
        table.to_csv(beside, index=False, float_format="%.9g")


def _write_json(content: Mapping[str, Any], path: Path) -> None:
    with whole_file(path) as beside:
        text = json.dumps(_without_nan(content), indent=1, ensure_ascii=False)
        beside.write_text(text + "\n", encoding="utf-8")


def _without_nan(value: Any) -> Any:
    """JSON has no NaN: null stands for it."""
    if isinstance(value, Mapping):
        return {str(k): _without_nan(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_without_nan(v) for v in value]
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value


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
    return pd.DataFrame(rows, columns=["column", "unit", "meaning"])


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


def segment_table(motion: FittedMotion) -> pd.DataFrame:
    """One row a frame and segment: origin (m) and unit quaternion, continuous in sign."""
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
        }
    )


def continuous_quaternions(rotation: FloatArray) -> FloatArray:
    """(frames, segments, 4) scalar first, sign continuous in time, the first scalar part >= 0."""
    frames, segments = rotation.shape[:2]
    stack = Rotation.from_matrix(rotation.reshape(-1, 3, 3))
    q = quaternions_of(stack).reshape(frames, segments, 4)
    first = np.where(q[:1, :, :1] < 0, -1.0, 1.0)
    turns = np.where((q[1:] * q[:-1]).sum(axis=2, keepdims=True) < 0, -1.0, 1.0)
    return np.asarray(q * np.cumprod(np.concatenate([first, turns]), axis=0))


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


def skeleton_geometry(motion: FittedMotion, skeleton: Skeleton) -> dict[str, Any]:
    """The sized skeleton's places, so that a picture needs nothing but this folder."""
    return {
        "model": skeleton.name,
        "up": motion.up,
        "parents": {joint.child: joint.parent for joint in skeleton.joints},
        "factors": {name: list(size.factors) for name, size in skeleton.sizes.items()},
        "joint_centres": {
            segment: {child: place.tolist() for child, place in centres.items()}
            for segment, centres in motion.joint_centres.items()
        },
        "landmarks": {
            segment: {name: place.tolist() for name, place in landmarks.items()}
            for segment, landmarks in motion.landmarks.items()
        },
        "shapes": {
            segment: [asdict(grown) for grown in shapes]
            for segment, shapes in motion.shapes.items()
        },
    }


def fit_report(
    fit: TrialFit, skeleton: Skeleton, findings: list[Finding], origin: Mapping[str, Any]
) -> dict[str, Any]:
    """Everything `fit.json` says."""
    motion = fit.motion
    error, used = motion.error, motion.used
    whole = error_summary(error, used)
    present = is_seen(motion.measured)
    placed = is_seen(motion.fitted)
    segment_of = {marker.name: marker.segment for marker in skeleton.markers}
    owner = np.array([segment_of[name] for name in motion.marker_names])
    return {
        "caution": CAUTION,
        **origin,
        "up": {"axis": motion.up, "how": motion.up_how},
        "frames": len(motion.time),
        "rate": fit.rate,
        "rms_error": whole.rms,
        "largest_error": whole.largest,
        "marker_frames": {
            "present": int((present & placed).sum()),
            "used": int(used.sum()),
        },
        "markers": {
            name: vars_of(error_summary(error[:, i], used[:, i]))
            for i, name in enumerate(motion.marker_names)
        },
        "segments": {
            name: vars_of(error_summary(error[:, owner == name], used[:, owner == name]))
            for name in motion.segment_names
        },
        "markers_without_label": [
            name for i, name in enumerate(motion.marker_names) if not present[:, i].any()
        ],
        "labels_not_in_model": list(fit.other_labels),
        "frames_not_converged": motion.frame[~fit.converged].tolist(),
        "largest_projected_gradient": float(fit.optimality.max(initial=0.0)),
        "limits_reached": {
            column.name: int(fit.at_limit[:, i].sum())
            for i, column in enumerate(fit.columns)
            if fit.at_limit[:, i].any()
        },
        "freedoms": {"without_ties": fit.freedoms, "taken_by_ties": fit.freedoms_tied},
        "ties": {name: {"largest_error": error} for name, error in fit.tie_errors.items()},
        "coordinates_not_observed": dict(fit.not_observed),
        "warnings": [{"what": f.what, "do": f.do, "needs_a_look": f.needs_look} for f in findings],
    }


def vars_of(summary: Any) -> dict[str, Any]:
    """The fields of an error summary, for JSON."""
    return {
        "rms_error": summary.rms,
        "largest_error": summary.largest,
        "marker_frames": summary.count,
    }


def load_motion(folder: Path) -> FittedMotion:
    """Read a solved trial's folder back.

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or a damaged one.
    """
    try:
        geometry = json.loads((folder / "skeleton.json").read_text(encoding="utf-8"))
        markers = pd.read_parquet(folder / "markers.parquet")
        segments = pd.read_parquet(folder / "segments.parquet")
        return _motion(folder.name, geometry, markers, segments)
    except FileNotFoundError as fault:
        raise CondyleError(
            f"{folder}: no solved trial is there ({Path(str(fault.filename)).name} is missing).\n"
            "  Name a folder that condyle solve wrote, one trial's or the one that holds several."
        ) from fault
    except (ValueError, KeyError, TypeError, OSError) as fault:
        raise CondyleError(
            f"{folder}: its files do not belong together or are damaged ({fault}).\n"
            "  Solve the trial again."
        ) from fault


def _motion(
    name: str, geometry: Mapping[str, Any], markers: pd.DataFrame, segments: pd.DataFrame
) -> FittedMotion:
    segment_names = tuple(segments["segment"].unique())
    frames = len(segments) // len(segment_names)
    known = markers[markers["why_not"] != "not_in_model"]
    marker_names = tuple(known["marker"].unique())

    def of(table: pd.DataFrame, columns: list[str], count: int) -> FloatArray:
        values = table[columns].to_numpy(dtype=np.float64)
        return values.reshape(frames, count, len(columns))

    poses = np.zeros((frames, len(segment_names), 4, 4))
    q = of(segments, ["qw", "qx", "qy", "qz"], len(segment_names)).reshape(-1, 4)
    poses[..., :3, :3] = rotations(q).as_matrix().reshape(frames, -1, 3, 3)
    poses[..., :3, 3] = of(segments, ["x", "y", "z"], len(segment_names))
    poses[..., 3, 3] = 1.0
    first = segments.iloc[:: len(segment_names)]
    return FittedMotion(
        name=name,
        frame=first["frame"].to_numpy(dtype=np.int64),
        time=first["time"].to_numpy(dtype=np.float64),
        up=str(geometry["up"]),
        segment_names=segment_names,
        laboratory_from_segment=poses,
        marker_names=marker_names,
        measured=of(known, ["x", "y", "z"], len(marker_names)),
        fitted=of(known, ["fit_x", "fit_y", "fit_z"], len(marker_names)),
        used=known["used"].to_numpy(dtype=bool).reshape(frames, -1),
        joint_centres=_places(geometry["joint_centres"]),
        landmarks=_places(geometry["landmarks"]),
        shapes=_shapes(geometry.get("shapes", {})),
    )


def _places(content: Mapping[str, Any]) -> dict[str, dict[str, FloatArray]]:
    return {
        segment: {name: np.array(place, dtype=np.float64) for name, place in places.items()}
        for segment, places in content.items()
    }


def _shapes(content: Mapping[str, Any]) -> dict[str, tuple[GrownShape, ...]]:
    return {
        segment: tuple(GrownShape(_shape(one["shape"]), _three(one["factors"])) for one in several)
        for segment, several in content.items()
    }


def _shape(content: Mapping[str, Any]) -> Shape:
    turned = content["turned"]
    return Shape(
        mesh=str(content["mesh"]),
        at=_three(content["at"]),
        turned=None if turned is None else Turn(_three(turned["axis"]), float(turned["angle"])),
        scale=float(content["scale"]),
        reflected=bool(content["reflected"]),
    )


def _three(content: Any) -> Vector:
    x, y, z = (float(value) for value in content)
    return (x, y, z)
