"""The truth behind the study, as files: every number that Condyle will have to find.

Degrees and metres in the files, under the names that Condyle's own results use; radians and metres
once read.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from ruamel.yaml import YAML

from condyle.demo_data.person import InventedPerson
from condyle.model.growth import size_factors, sized_joint_centres, sized_lengths, sized_marker_at
from condyle.model.skeleton import Person

FloatArray = NDArray[np.float64]

DECIMALS = 9
"""Of metres in the person's file: far below what any test compares."""

Places = Mapping[str, tuple[float, ...]]


@dataclass(frozen=True, slots=True)
class TrialTruth:
    """What the invented person's joints truly did.

    Attributes
    ----------
    frame : (frames,) int
        The recording's own numbers.
    time : (frames,) s
    values : coordinate or reported angle -> (frames,) rad or m
    units : the same names -> "rad" or "m"
    """

    frame: NDArray[np.int64]
    time: FloatArray
    values: Mapping[str, FloatArray]
    units: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class PersonTruth:
    """The invented person in numbers.

    Attributes
    ----------
    person : Person
    size_factors : segment -> (x, y, z)
    lengths : segment -> m
    joint_centres : segment -> child segment -> (x, y, z) m
    markers : marker -> (x, y, z) m, in the sized segment
    """

    person: Person
    size_factors: Places
    lengths: Mapping[str, float]
    joint_centres: Mapping[str, Places]
    markers: Places


def write_truth(path: Path, truth: TrialTruth) -> None:
    """Write a trial's truth as Parquet; metres are told from degrees by the key ``units``."""
    columns: dict[str, FloatArray | NDArray[np.int64]] = {"frame": truth.frame, "time": truth.time}
    for name, values in truth.values.items():
        columns[name] = np.rad2deg(values) if truth.units[name] == "rad" else values
    table = pd.DataFrame(columns)
    table.attrs["units"] = {n: {"rad": "deg"}.get(u, u) for n, u in truth.units.items()}
    split = {name: "BYTE_STREAM_SPLIT" for name in truth.values}  # smooth curves pack by bytes
    table.to_parquet(
        path, compression="zstd", index=False, use_dictionary=False, column_encoding=split
    )


def read_truth(path: Path) -> TrialTruth:
    """Read what `write_truth` wrote."""
    table = pd.read_parquet(path)
    units = {name: {"deg": "rad"}.get(u, u) for name, u in table.attrs["units"].items()}
    values = {}
    for name, unit in units.items():
        column = table[name].to_numpy(dtype=np.float64)
        values[name] = np.deg2rad(column) if unit == "rad" else column
    return TrialTruth(
        table["frame"].to_numpy(dtype=np.int64),
        table["time"].to_numpy(dtype=np.float64),
        values,
        units,
    )


def write_person(path: Path, invented: InventedPerson) -> None:
    """Write the person as YAML; what departs from the model is told beside what it amounts to."""
    skeleton = invented.skeleton
    factors = zip(skeleton.segment_names, size_factors(skeleton), strict=True)
    markers = zip(skeleton.marker_names, sized_marker_at(skeleton), strict=True)
    content = {
        "about": "An invented person: metres, kilograms, degrees; places in the sized segments.",
        "stature": skeleton.subject.stature if skeleton.subject else None,
        "mass": skeleton.subject.mass if skeleton.subject else None,
        "size_factors": {name: rounded(value) for name, value in factors},
        "lengths": {name: round(v, DECIMALS) for name, v in sized_lengths(skeleton).items()},
        "joint_centres": {
            name: {child: rounded(place) for child, place in centres.items()}
            for name, centres in sized_joint_centres(skeleton).items()
            if centres
        },
        "departures": {
            joint: {what: rounded(np.array(value)) for what, value in departed.items()}
            for joint, departed in invented.departures.items()
        },
        "markers": {name: rounded(place) for name, place in markers},
    }
    yaml = YAML()
    yaml.default_flow_style = None
    yaml.width = 110
    with path.open("w", encoding="utf-8") as stream:
        yaml.dump(content, stream)


def read_person(path: Path) -> PersonTruth:
    """Read what `write_person` wrote."""
    content = YAML(typ="safe", pure=True).load(path.read_text(encoding="utf-8"))
    return PersonTruth(
        person=Person(content["stature"], content["mass"]),
        size_factors=places(content["size_factors"]),
        lengths=content["lengths"],
        joint_centres={n: places(centres) for n, centres in content["joint_centres"].items()},
        markers=places(content["markers"]),
    )


def places(content: Mapping[str, list[float]]) -> dict[str, tuple[float, ...]]:
    """Name -> numbers."""
    return {name: tuple(values) for name, values in content.items()}


def rounded(values: FloatArray) -> list[float]:
    """Plain floats for a file that people read."""
    return [round(float(value), DECIMALS) for value in values]
