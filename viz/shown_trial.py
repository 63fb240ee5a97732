"""A solved trial as its page and its figures show it, read back from the folder that holds it.

Nothing is fitted again: what is shown is what other people's programs read from the same files. Angles stay
in degrees here, for the files and the screen both have them so.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from condyle.model.errors import CondyleError
from condyle.solver.result_files import load_motion
from condyle.solver.results import FittedMotion

FloatArray = NDArray[np.float64]
Range = tuple[float, float]

SIGMAS = 1.96
"""Standard deviations to either side that hold 95 % of a normal error."""


@dataclass(frozen=True, slots=True)
class ShownColumn:
    """One coordinate or reported angle over the trial.

    Attributes
    ----------
    unit : "deg" or "m"
    meaning : str
        The sentence of `columns.csv`.
    group : str
        The joint it belongs to, without its side.
    values, sd : (frames,) deg or m
        sd is NaN where nothing determined the number.
    at_limit : (frames,) bool
    lower, upper : float
        The range in the same unit; infinite where there is none or it is not known.
    """

    name: str
    unit: str
    meaning: str
    group: str
    values: FloatArray
    sd: FloatArray
    at_limit: NDArray[np.bool_]
    lower: float = -np.inf
    upper: float = np.inf

    @property
    def stem(self) -> str:
        """The name without its side."""
        return without_side(self.name)

    def band(self) -> tuple[FloatArray, FloatArray]:
        """(frames,) twice: the edges of the 95 % band; NaN where undetermined."""
        return self.values - SIGMAS * self.sd, self.values + SIGMAS * self.sd


@dataclass(frozen=True, slots=True)
class ShownTrial:
    """Everything about a trial that is shown.

    Attributes
    ----------
    why_not : (frames, markers) str
        Empty where the marker was used.
    report : the content of `fit.json`
    parents : segment -> the segment it hangs on, or the laboratory
    """

    motion: FittedMotion
    why_not: NDArray[np.str_]
    columns: tuple[ShownColumn, ...]
    report: Mapping[str, Any]
    parents: Mapping[str, str]

    @property
    def name(self) -> str:
        """The trial's name."""
        return self.motion.name

    def groups(self) -> dict[str, list[ShownColumn]]:
        """Joint -> its numbers, in the order of the file."""
        found: dict[str, list[ShownColumn]] = {}
        for column in self.columns:
            found.setdefault(column.group, []).append(column)
        return found

    def pairs(self) -> list[tuple[ShownColumn, ShownColumn]]:
        """(right, left) of every number that both sides have."""
        by_name = {column.name: column for column in self.columns}
        return [
            (column, by_name[left])
            for column in self.columns
            if (left := _other_side(column.name)) in by_name
        ]


def without_side(name: str) -> str:
    """A name without `_right` or `_left`, in its middle or at its end.

    Examples
    --------
    >>> without_side("shoulder_plane_left_sum")
    'shoulder_plane_sum'
    """
    return re.sub(r"_(right|left)(?=_|$)", "", name)


def side_within(name: str) -> str:
    """`right`, `left` or nothing, wherever it stands in a name.

    Examples
    --------
    >>> side_within("shoulder_plane_left_sum"), side_within("pelvic_tilt")
    ('left', '')
    """
    found = re.search(r"_(right|left)(?=_|$)", name)
    return found[1] if found else ""


def _other_side(name: str) -> str:
    """The left counterpart of a name of the right side; empty for any other."""
    found = re.search(r"_right(?=_|$)", name)
    return f"{name[: found.start()]}_left{name[found.end() :]}" if found else ""


def read_shown_trial(folder: Path, *, ranges: Mapping[str, Range] | None = None) -> ShownTrial:
    """Read what `solve` wrote for one trial.

    Parameters
    ----------
    ranges : coordinate -> (lower, upper) deg or m, optional
        The model's limits; the folder itself says only where one was reached.

    Raises
    ------
    CondyleError
        If the folder holds no solved trial, or a damaged one.
    """
    motion = load_motion(folder)
    try:
        geometry = json.loads((folder / "skeleton.json").read_text(encoding="utf-8"))
        report = json.loads((folder / "fit.json").read_text(encoding="utf-8"))
        return ShownTrial(
            motion,
            _reasons(folder, motion),
            _columns(folder, ranges or {}),
            report,
            dict(geometry["parents"]),
        )
    except FileNotFoundError as fault:
        raise CondyleError(
            f"{folder}: {Path(str(fault.filename)).name} is missing.\n  Solve the trial again."
        ) from fault
    except (ValueError, KeyError, TypeError, OSError) as fault:
        raise CondyleError(
            f"{folder}: its files do not belong together or are damaged ({fault}).\n"
            "  Solve the trial again."
        ) from fault


def _reasons(folder: Path, motion: FittedMotion) -> NDArray[np.str_]:
    table = pd.read_parquet(folder / "markers.parquet", columns=["why_not"])["why_not"].astype(str)
    known = table[table != "not_in_model"].to_numpy(dtype=np.str_)
    return known.reshape(motion.used.shape)


def _columns(folder: Path, ranges: Mapping[str, Range]) -> tuple[ShownColumn, ...]:
    table = pd.read_parquet(folder / "coordinates.parquet")
    meanings = pd.read_csv(folder / "columns.csv", dtype=str, keep_default_na=False)
    shown = meanings[[f"{name}.sd" in table for name in meanings["column"]]]
    shown = shown[~shown["column"].str.endswith((".rate", ".accel"))]
    groups = _groups(shown["column"].tolist(), shown["meaning"].tolist())
    columns = []
    for name, unit, meaning, group in zip(
        shown["column"], shown["unit"], shown["meaning"], groups, strict=True
    ):
        at_limit = f"{name}.at_limit"
        lower, upper = ranges.get(name, (-np.inf, np.inf))
        columns.append(
            ShownColumn(
                name=name,
                unit=unit,
                meaning=meaning,
                group=group,
                values=table[name].to_numpy(dtype=np.float64),
                sd=table[f"{name}.sd"].to_numpy(dtype=np.float64),
                at_limit=table[at_limit].to_numpy(dtype=bool)
                if at_limit in table
                else np.zeros(len(table), dtype=bool),
                lower=lower,
                upper=upper,
            )
        )
    return tuple(columns)


def _groups(names: list[str], meanings: list[str]) -> list[str]:
    """The joint of each number, without its side; a root's by the segment that it places."""
    found = []
    for name, meaning in zip(names, meanings, strict=True):
        turns = re.match(r"(?:\w+ of three intrinsic turns of )?(\w+).*\bat joint (\w+)", meaning)
        moves = re.match(r"position of (\S+) along", meaning)
        sums = re.match(r"the combination of (\S+) and", meaning)
        if moves:
            found.append(moves[1])
        elif turns:
            segment, joint = turns.groups()
            found.append(segment if segment in found else without_side(joint))
        elif sums and sums[1] in names:
            found.append(found[names.index(sums[1])])
        else:
            found.append(without_side(name).split("_")[0])
    return found
