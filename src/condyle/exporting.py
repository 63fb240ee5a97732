"""From a subject to a URDF, and from a solved trial to motion that such a robot can follow."""

from __future__ import annotations

import json
from dataclasses import dataclass
from math import isfinite
from pathlib import Path
from typing import Any

import pandas as pd

from condyle.model import load_skeleton
from condyle.model.errors import CondyleError
from condyle.model.inertia import sized_inertias, total_mass
from condyle.model.robot import RobotDescription, function_samples, refuse_curves
from condyle.model.robot_chains import robot_description
from condyle.model.skeleton import Skeleton, Spherical
from condyle.model.urdf import urdf_text
from condyle.model.whole_files import whole_file
from condyle.provenance import file_hash
from condyle.solver.robot_motion import motion_table
from condyle.solver.upright import Upright, up_axis

FEWEST_SAMPLES = 2
MOST_SAMPLES = 100_000


@dataclass(frozen=True, slots=True)
class Exported:
    """What was written, in a line that can be quoted, and what the reader of the files must know."""

    files: tuple[Path, ...]
    summary: str
    notes: tuple[str, ...]


def export(
    source: str | Path,
    *,
    to: str | Path | None = None,
    motion: str | Path | None = None,
    sampled: int | None = None,
    subject: str | Path | None = None,
    up: str | None = None,
) -> Exported:
    """Write a subject as a URDF (`to`), or a solved trial as its motion (`motion`).

    Parameters
    ----------
    source : a sized subject or any model, or, with `motion`, the folder of one solved trial
    to : FILE.urdf
    motion : FILE.csv or FILE.parquet
    sampled : int, optional
        Samples of each function that a URDF cannot say, for a table beside it.
    subject : the subject that the trial was solved with, where it has moved
    up : the laboratory axis that points up, for joints that are turned upright

    Raises
    ------
    CondyleError
        If anything in the input is wrong; then nothing is written.
    """
    if (to is None) == (motion is None):
        raise CondyleError(
            "export wants one of --to FILE.urdf (a subject) and --motion FILE (a solved trial).\n"
            "  Run it once for each."
        )
    if to is not None:
        _refuse_idle({"--subject": subject}, "--to")
        return _export_urdf(source, Path(to), sampled, up)
    _refuse_idle({"--sampled": sampled, "--up": up}, "--motion")
    return _export_motion(Path(source), Path(str(motion)), subject)


def _refuse_idle(options: dict[str, Any], beside: str) -> None:
    for option, value in options.items():
        if value is not None:
            raise CondyleError(f"{option} says nothing beside {beside}.\n  Leave it out.")


def _export_urdf(source: str | Path, output: Path, sampled: int | None, up: str | None) -> Exported:
    _check_ending(output, (".urdf",))
    if sampled is not None and not FEWEST_SAMPLES <= sampled <= MOST_SAMPLES:
        raise CondyleError(
            f"--sampled {sampled}: a table needs {FEWEST_SAMPLES} to {MOST_SAMPLES} samples.\n"
            "  A hundred follow the shipped knee within a hundredth of a degree."
        )
    skeleton = load_skeleton(source)
    axis = up_axis(up or skeleton.up or "+Y")
    description = robot_description(skeleton, Upright(axis, "asked for").laboratory_from_upright)
    if sampled is None:
        refuse_curves(description)
    files = [output]
    with whole_file(output) as beside:
        beside.write_text(urdf_text(skeleton, description), encoding="utf-8")
        if sampled is not None and any(joint.is_tabulated for joint in description.joints):
            files.append(output.with_name(f"{output.stem}_functions.csv"))
            _write_csv(_function_table(description, skeleton, sampled), files[1])
    moving = sum(joint.kind != "fixed" for joint in description.joints)
    summary = (
        f"{skeleton.name}: {len(description.links)} links, {moving} moving joints, "
        f"{total_mass(sized_inertias(skeleton)):.3f} kg -> {output}"
    )
    return Exported(tuple(files), summary, _notes(skeleton, description, axis))


def _write_csv(table: pd.DataFrame, path: Path) -> None:
    """Every number so that it reads back to the same double."""
    with whole_file(path) as beside:
        table.to_csv(beside, index=False)


def _function_table(description: RobotDescription, skeleton: Skeleton, count: int) -> pd.DataFrame:
    """One row a joint and sample; rad and m."""
    tables = []
    for joint in description.joints:
        if joint.value is not None and joint.is_tabulated:
            driver, numbers = function_samples(joint, skeleton, count)
            columns = {"driver": joint.value.driver, "driver_value": driver, "value": numbers}
            tables.append(pd.DataFrame({"joint": joint.name, **columns}))
    return pd.concat(tables, ignore_index=True)


def _notes(skeleton: Skeleton, description: RobotDescription, up: str) -> tuple[str, ...]:
    """What the file cannot say, or says otherwise than one might think."""
    notes = []
    inertias = sized_inertias(skeleton)
    light = [s.name for s in skeleton.segments if s.name not in inertias]
    point = [s.name for s in skeleton.segments if s.name in inertias and s.gyration is None]
    balls = [joint.name for joint in skeleton.joints if isinstance(joint.motion, Spherical)]
    curves = [joint.name for joint in description.joints if joint.is_tabulated]
    if light:
        notes.append(f"without mass, because the model gives no mass or no centre: {_list(light)}")
    if point:
        notes.append(f"points of mass, because the model gives no radii: {_list(point)}")
    if inertias and _mass_is_unknown(skeleton):
        notes.append("the person's mass is unknown: masses are those of the model as written")
    if curves:
        notes.append(f"joints of their own, to be driven by the table or a motion: {_list(curves)}")
    if balls:
        notes.append(f"three turns in a row, singular where their angles are: {_list(balls)}")
    if skeleton.ties:
        tied = [tie.name for tie in skeleton.ties]
        notes.append(f"ties that a URDF cannot hold, though a motion keeps them: {_list(tied)}")
    if any(joint.turned == "upright" for joint in skeleton.joints):
        notes.append(f"joints turned upright take {up} for the laboratory's up")
    return tuple(notes)


def _mass_is_unknown(skeleton: Skeleton) -> bool:
    return skeleton.subject is None or not isfinite(skeleton.subject.mass)


def _list(names: list[str]) -> str:
    return ", ".join(names)


def _export_motion(folder: Path, output: Path, subject: str | Path | None) -> Exported:
    _check_ending(output, (".csv", ".parquet"))
    table = motion_table(folder, load_skeleton(subject_of(folder, subject)))
    if output.suffix.lower() == ".csv":
        _write_csv(table, output)
    else:
        with whole_file(output) as beside:
            table.to_parquet(beside, index=False)
    summary = f"{folder.name}: {len(table)} frames, {len(table.columns) - 1} columns -> {output}"
    return Exported((output,), summary, ())


def subject_of(folder: Path, given: str | Path | None) -> str:
    """The subject that a trial was solved with, if it is still the same."""
    recorded, sha256 = _recorded_subject(folder)
    if sha256 is None:  # a shipped model has no file to compare
        return str(given or recorded)
    file = Path(given or recorded)
    if not file.is_file():
        raise CondyleError(
            f"{folder}: its subject, {file}, is not there.\n"
            "  Give --subject FILE, or run the command where the trial was solved."
        )
    if file_hash(file) != sha256:
        raise CondyleError(
            f"{folder}: {file} is not the subject it was solved with, or has changed since.\n"
            "  Solve the trial again, or give --subject FILE, the one it was solved with."
        )
    return str(file)


def _recorded_subject(folder: Path) -> tuple[str, str | None]:
    """What `fit.json` says of the subject: its file and that file's hash."""
    try:
        content = json.loads((folder / "fit.json").read_text(encoding="utf-8"))
        subject = content["subject"]
        return str(subject["file"]), subject["sha256"]
    except FileNotFoundError as fault:
        several = sorted(path.parent.name for path in folder.glob("*/fit.json"))
        remedy = "Name the folder that condyle solve wrote for one trial."
        if several:
            remedy = f"Name one of the trials in it: {_list(several)}."
        raise CondyleError(f"{folder}: this is not one solved trial.\n  {remedy}") from fault
    except (OSError, ValueError, KeyError, TypeError) as fault:
        raise CondyleError(
            f"{folder}: fit.json is damaged ({fault}).\n  Solve the trial again."
        ) from fault


def _check_ending(output: Path, endings: tuple[str, ...]) -> None:
    if output.suffix.lower() not in endings:
        raise CondyleError(
            f"{output}: its ending says nothing that can be written here.\n"
            f"  Name a file that ends in {' or '.join(endings)}."
        )
