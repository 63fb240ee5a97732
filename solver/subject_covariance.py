"""What calibration does not know about a person, as one covariance: sizes, marker places, freed joints.

They are strongly correlated, and that is the point: a static in which the knee is bent by an unknown
few degrees turns all marker places of the shank together, and every knee angle after it. The file
stands beside SUBJECT.yaml; numbers that someone has since edited there fall back on their own sd.
"""

from __future__ import annotations

import zipfile
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import CondyleError
from condyle.model.skeleton import Joint, Skeleton
from condyle.model.whole_files import whole_file

FloatArray = NDArray[np.float64]

SAME = 2e-6
"""m, or of a factor: SUBJECT.yaml is written to six decimals; what differs by more was edited."""
LARGEST_FILE = 64 * 2**20
"""Bytes unpacked: 2000 entries in double precision are half of it."""


@dataclass(frozen=True, slots=True)
class SubjectCovariance:
    """Entries of a sized skeleton and their covariance.

    Attributes
    ----------
    names : (entries,)
        ``size thigh_right y`` (ln of the factor; one for each size group, by its first member) and
        ``placed ASIS_right x`` (m); for joints that calibration found, ``centre hip_right x`` (m) and
        ``axes knee_right x`` (rad).
    values : (entries,) factors and m, as calibration found them
    matrix : (entries, entries)
    how : str
        Where it comes from, for `fit.json`.
    """

    names: tuple[str, ...]
    values: FloatArray
    matrix: FloatArray
    how: str


def entry_names(skeleton: Skeleton) -> tuple[str, ...]:
    """Names of the entries of a skeleton: its size groups, its markers' places, its freed joints."""
    sizes = [f"size {g.members[0][0]} {'xyz'[g.members[0][1]]}" for g in skeleton.sizing.groups]
    placed = [f"placed {m.name} {axis}" for m in skeleton.markers for axis in "xyz"]
    centres = [f"centre {j.name} {axis}" for j in placed_joints(skeleton) for axis in "xyz"]
    turns = [f"axes {j.name} {axis}" for j in turned_joints(skeleton) for axis in "xyz"]
    return (*sizes, *placed, *centres, *turns)


def placed_joints(skeleton: Skeleton) -> list[Joint]:
    """The joints whose centre calibration found."""
    return [joint for joint in skeleton.joints if joint.placed is not None]


def turned_joints(skeleton: Skeleton) -> list[Joint]:
    """The joints whose axes calibration turned."""
    return [joint for joint in skeleton.joints if joint.axis_turn is not None]


def entry_values(skeleton: Skeleton) -> FloatArray:
    """(entries,) Factors, places (m) and turns (rad) as the skeleton has them; NaN where it has none."""
    sizes = []
    for group in skeleton.sizing.groups:
        segment, axis = group.members[0]
        size = skeleton.sizes.get(segment)
        sizes.append(np.nan if size is None else size.factors[axis])
    places = [m.placed or (np.nan,) * 3 for m in skeleton.markers]
    places += [joint.placed or (np.nan,) * 3 for joint in placed_joints(skeleton)]
    places += [joint.axis_turn or (np.nan,) * 3 for joint in turned_joints(skeleton)]
    return np.concatenate([sizes, np.ravel(places)]).astype(np.float64)


def independent(skeleton: Skeleton) -> SubjectCovariance:
    """The sds that SUBJECT.yaml tells, as if no two had to do with each other."""
    variance = []
    for group in skeleton.sizing.groups:
        segment, axis = group.members[0]
        size = skeleton.sizes.get(segment)
        sd = None if size is None else size.sd
        ratio = 0.0 if size is None or sd is None else sd[axis] / size.factors[axis]
        variance.append(ratio**2)
    for marker in skeleton.markers:
        variance += [sd**2 for sd in marker.placed_sd or (0.0,) * 3]
    for joint in placed_joints(skeleton):
        variance += [sd**2 for sd in joint.placed_sd or (0.0,) * 3]
    for joint in turned_joints(skeleton):
        variance += [sd**2 for sd in joint.axis_turn_sd or (0.0,) * 3]
    return SubjectCovariance(
        entry_names(skeleton),
        entry_values(skeleton),
        np.diag(np.array(variance, dtype=np.float64)),
        "sds of sizes and marker places, their correlations unknown",
    )


def write_covariance(path: Path, covariance: SubjectCovariance) -> None:
    """Write the file whole, in half the digits: no sd is known better.

    Raises
    ------
    CondyleError
        Where it cannot be written.
    """
    with whole_file(path) as beside, beside.open("wb") as stream:
        np.savez_compressed(
            stream,
            names=np.array(covariance.names),
            values=covariance.values,
            matrix=covariance.matrix.astype(np.float32),
        )


def read_covariance(path: Path, skeleton: Skeleton) -> tuple[SubjectCovariance, tuple[str, ...]]:
    """The covariance that belongs to a skeleton, and the entries that were edited since.

    Raises
    ------
    CondyleError
        If the file is damaged or belongs to another model.
    """
    stored = _read(path)
    names, values = entry_names(skeleton), entry_values(skeleton)
    if not {n for n, v in zip(names, values, strict=True) if np.isfinite(v)} <= set(stored):
        raise CondyleError(
            f"{path}: it belongs to another model than {skeleton.name}.\n"
            "  Calibrate again, or delete the file: then the sds in the subject's file are used."
        )
    own = independent(skeleton)
    matrix = _matrix(path)
    place = {name: i for i, name in enumerate(stored)}
    rows, columns, edited = [], [], []
    for i, name in enumerate(names):
        j = place.get(name)
        if j is None or np.isnan(values[i]):
            continue
        if abs(values[i] - stored[name]) > SAME:
            edited.append(name)
        else:
            rows.append(i)
            columns.append(j)
    joint = own.matrix.copy()
    joint[np.ix_(rows, rows)] = matrix[np.ix_(columns, columns)]
    how = "the calibration's covariance"
    if edited:
        how += f", but for {len(edited)} numbers edited since, which stand for themselves"
    return SubjectCovariance(names, values, joint, how), tuple(edited)


def _read(path: Path) -> Mapping[str, float]:
    try:
        _check_size(path)
        with np.load(path, allow_pickle=False) as content:
            names, values = content["names"], content["values"]
            if content["matrix"].shape != (len(names), len(names)) or len(values) != len(names):
                raise ValueError("its parts do not fit together")
            if names.dtype.kind != "U" or values.dtype.kind != "f":
                raise ValueError("its parts are of the wrong kind")
            return dict(zip((str(n) for n in names), (float(v) for v in values), strict=True))
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as fault:
        raise _damaged(path, fault) from fault


def _matrix(path: Path) -> FloatArray:
    try:
        with np.load(path, allow_pickle=False) as content:
            matrix = np.asarray(content["matrix"], dtype=np.float64)
    except (OSError, ValueError, KeyError, EOFError, zipfile.BadZipFile) as fault:
        raise _damaged(path, fault) from fault
    if not np.isfinite(matrix).all() or (np.diag(matrix) < 0).any():
        raise _damaged(path, "it holds numbers that no covariance has")
    return (matrix + matrix.T) / 2


def _check_size(path: Path) -> None:
    """Refuse before unpacking what would not fit."""
    with zipfile.ZipFile(path) as packed:
        if sum(part.file_size for part in packed.infolist()) > LARGEST_FILE:
            raise ValueError("it is far larger than any calibration makes it")


def _damaged(path: Path, fault: object) -> CondyleError:
    return CondyleError(
        f"{path}: the calibration's covariance cannot be read ({fault}).\n"
        "  Calibrate again, or delete the file: then the sds in the subject's file are used."
    )
