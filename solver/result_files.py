"""What a solved trial leaves on the disk, and reading it back for pictures.

Outside scripts rely on these files: names, columns and units are promises. Degrees and metres in
files; each file appears whole or not at all, and together they replace an earlier result.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
from numpy.typing import NDArray

from condyle.model.errors import CondyleError
from condyle.model.meshes import GrownShape
from condyle.model.skeleton import Shape, Skeleton, Turn, Vector
from condyle.model.whole_files import whole_folder
from condyle.solver.fit_report import fit_report
from condyle.solver.posture import rotations
from condyle.solver.quality import Finding
from condyle.solver.result_tables import (
    Table,
    arrow,
    column_meanings,
    coordinate_table,
    covariance_arrays,
    marker_table,
    segment_table,
    summary_table,
)
from condyle.solver.results import FittedMotion, TrialFit

if TYPE_CHECKING:
    import pandas as pd

FloatArray = NDArray[np.float64]


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
    coordinates = coordinate_table(fit)
    numeric = {
        name: values.astype(np.int8) if values.dtype == bool else values
        for name, values in coordinates.items()
    }
    with whole_folder(folder) as beside:
        _write_parquet(coordinates, beside / "coordinates.parquet")
        _write_numbers(numeric, beside / "coordinates.csv")
        _write_texts(column_meanings(fit), beside / "columns.csv")
        _write_parquet(marker_table(fit), beside / "markers.parquet")
        _write_parquet(segment_table(fit.motion, fit.derivatives), beside / "segments.parquet")
        _write_texts(summary_table(fit), beside / "summary.csv")
        if fit.covariance is not None:
            np.savez(beside / "covariance.npz", **covariance_arrays(fit))  # type: ignore[arg-type]
        _write_json(skeleton_geometry(fit.motion, skeleton), beside / "skeleton.json")
        _write_json(fit_report(fit, skeleton, findings, origin), beside / "fit.json")


def _write_parquet(table: Table, path: Path) -> None:
    """Missing is null. Only text is worth a dictionary."""
    made = _arrow_table(table)
    texts = [field.name for field in made.schema if pa.types.is_string(field.type)]
    pq.write_table(made, path, use_dictionary=texts)


def _write_numbers(table: Table, path: Path) -> None:
    """A table of numbers as CSV: nine significant digits; missing is empty."""
    made = _arrow_table({name: _nine_digits(values) for name, values in table.items()})
    with path.open("wb") as stream:
        stream.write((",".join(table) + "\n").encode())
        pyarrow.csv.write_csv(made, stream, pyarrow.csv.WriteOptions(include_header=False))


def _arrow_table(table: Table) -> pa.Table:
    columns = [
        arrow(values) if isinstance(values, np.ndarray) else values for values in table.values()
    ]
    return pa.Table.from_arrays(columns, names=list(table))


def _write_texts(table: Table, path: Path) -> None:
    """A short table with words in it as CSV."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(table)
        for row in zip(*table.values(), strict=True):
            writer.writerow([_in_nine_digits(value) for value in row])


def _in_nine_digits(value: Any) -> Any:
    if not isinstance(value, float):
        return value
    return "" if np.isnan(value) else f"{value:.9g}"


def _nine_digits(values: NDArray[Any]) -> NDArray[Any]:
    """Floats rounded to nine significant digits; integers as they are."""
    if values.dtype.kind != "f":
        return values
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.floor(np.log10(np.abs(values)))
    scale = 10.0 ** (8 - np.where(np.isfinite(size), size, 0.0))
    return np.round(values * scale) / scale


def _write_json(content: Mapping[str, Any], path: Path) -> None:
    text = json.dumps(_without_nan(content), indent=1, ensure_ascii=False)
    path.write_text(text + "\n", encoding="utf-8")


def _without_nan(value: Any) -> Any:
    """JSON has no NaN: null stands for it."""
    if isinstance(value, Mapping):
        return {str(k): _without_nan(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_without_nan(v) for v in value]
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value


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


def load_motion(folder: Path) -> FittedMotion:
    """Read a solved trial's folder back.

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or a damaged one.
    """
    # Heavy, and only of use in reading back.
    import pandas as pd

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
