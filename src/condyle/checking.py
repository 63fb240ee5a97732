"""A model looked at before any recording: its tree, its coordinates, what its markers can tell.

What the markers tell is judged in `solver.telling`, with every marker of the model or with those that
a recording really has; where angles cannot be told apart at all, in `solver.singular_regions`.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_marker_at
from condyle.model.meshes import grown_shapes, mesh_remarks
from condyle.model.skeleton import (
    Coordinate,
    Fixed,
    Floating,
    Joint,
    Moves,
    Skeleton,
    Spherical,
)
from condyle.placement_sheet import MarkerPlacement, placement_sheet
from condyle.recording import read_label_map, read_recording
from condyle.recording.recording import is_seen
from condyle.solver.matching import match_markers
from condyle.solver.singular_regions import SingularRegion, said, singular_regions
from condyle.solver.telling import Telling, tell


@dataclass(frozen=True, slots=True)
class CoordinateReport:
    """One coordinate: unit ``deg`` or ``m``; range, rest and the sd that markers give it in that unit.

    ``sd`` is the median over postures, None where no marker tells the coordinate or it is held.
    """

    name: str
    joint: str
    unit: str
    lower: float | None
    upper: float | None
    rest: float
    role: str
    sd: float | None


@dataclass(frozen=True, slots=True)
class SingularReport:
    """Near `at` (deg) of `middle`, to `within` (deg), `first` and `third` cannot be told apart.

    `stays_told` is the reported number to read there, None where there is none; `said` all in words.
    """

    joint: str
    first: str
    third: str
    middle: str
    at: tuple[float, ...]
    within: float
    stays_told: str | None
    said: str


@dataclass(frozen=True, slots=True)
class ModelReport:
    """A model in short.

    Attributes
    ----------
    tree : (depth, segment, joint, kind of joint) in order
    coordinates : CoordinateReports
    angles : CoordinateReports
        The reported angles of floating and spherical joints, which have neither range nor rest.
    freedoms, taken_by_ties : int
    markers : segment -> marker names
    without_place : markers that only a static can place
    unseen : coordinates and angles that the markers cannot tell
    remedies : such a name -> the segment on which markers would tell it
    pairs : (name, name, correlation) of coordinates that are hardly told apart
    singular : where angles of a joint cannot be told apart, whatever the markers
    marker_list : the placement sheet, where asked for
    picture : the picture that was drawn, where asked for
    mesh_remarks : what is odd about the model's meshes
    """

    name: str
    about: str
    sources: tuple[str, ...]
    sized: bool
    tree: tuple[tuple[int, str, str, str], ...]
    coordinates: tuple[CoordinateReport, ...]
    angles: tuple[CoordinateReport, ...]
    freedoms: int
    taken_by_ties: int
    markers: dict[str, tuple[str, ...]]
    without_place: tuple[str, ...]
    unseen: tuple[str, ...]
    remedies: dict[str, str]
    pairs: tuple[tuple[str, str, float], ...]
    mesh_remarks: tuple[str, ...]
    singular: tuple[SingularReport, ...] = ()
    marker_list: tuple[MarkerPlacement, ...] | None = None
    picture: str | None = None

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self)


def check(
    model: str | Path,
    *,
    recording: str | Path | None = None,
    labels: str | Path | None = None,
    picture: str | Path | None = None,
    marker_list: bool = False,
) -> ModelReport:
    """Read a model and say what it holds and what its markers can tell.

    Parameters
    ----------
    recording : a file
        Only the markers that it has at any time count.
    labels : a file ``{model marker: label in the recording}``
    picture : a file ending in .png, .jpg or another kind of picture
        Draws the segments, the joint axes with their positive sense, landmarks and markers.
    marker_list : bool
        Whether to make the placement sheet too.

    Raises
    ------
    CondyleError
        With every mistake of the model, or what is wrong with the recording, or where no picture can
        be drawn here; nothing is written then.
    """
    skeleton = load_skeleton(model)
    present = _present(skeleton, recording, labels)
    told = tell(skeleton, present=present)
    if picture is not None:
        _draw(skeleton, Path(picture))
    return ModelReport(
        name=skeleton.name,
        about=skeleton.about,
        sources=skeleton.sources,
        sized=bool(skeleton.sizes),
        tree=_tree(skeleton),
        coordinates=tuple(_coordinate(skeleton, c, told) for c in skeleton.coordinates),
        angles=_angles(skeleton, told),
        freedoms=told.freedoms,
        taken_by_ties=told.taken_by_ties,
        markers={
            segment: tuple(m.name for m in skeleton.markers if m.segment == segment)
            for segment in skeleton.segment_names
        },
        without_place=tuple(
            m.name
            for m, place in zip(skeleton.markers, sized_marker_at(skeleton), strict=True)
            if np.isnan(place).any()
        ),
        unseen=told.unseen,
        remedies=dict(told.remedies),
        pairs=told.pairs,
        mesh_remarks=tuple(mesh_remarks(grown_shapes(skeleton))),
        singular=tuple(_singular(region) for region in singular_regions(skeleton)),
        marker_list=placement_sheet(skeleton, present=present) if marker_list else None,
        picture=None if picture is None else str(picture),
    )


def _draw(skeleton: Skeleton, path: Path) -> None:
    from condyle.viz import draw_model_sheet, picture_kind, save_picture  # only to draw

    picture_kind(path)
    save_picture(draw_model_sheet(skeleton), path)


def _singular(region: SingularRegion) -> SingularReport:
    return SingularReport(
        joint=region.joint,
        first=region.first,
        third=region.third,
        middle=region.middle,
        at=tuple(round(float(np.degrees(value)), 6) for value in region.at),
        within=round(float(np.degrees(region.within)), 6),
        stays_told=region.stays_told,
        said=said(region),
    )


def _tree(skeleton: Skeleton) -> tuple[tuple[int, str, str, str], ...]:
    """Depth first, so that a child stands under its parent."""
    rows: list[tuple[int, str, str, str]] = []

    def visit(parent: str, depth: int) -> None:
        for joint in skeleton.joints:
            if joint.parent == parent:
                rows.append((depth, joint.child, joint.name, kind_of(joint)))
                visit(joint.child, depth + 1)

    visit("laboratory", 0)
    return tuple(rows)


def kind_of(joint: Joint) -> str:
    """A joint's motion in words."""
    motion = joint.motion
    if isinstance(motion, Floating):
        return "floating"
    if isinstance(motion, Spherical):
        return "spherical"
    if isinstance(motion, Fixed):
        return "fixed"
    free = sum(1 for move in motion.moves if move.function is None)
    coupled = len(motion.moves) - free
    return f"{free} free move{'s' * (free != 1)}" + (f", {coupled} coupled" if coupled else "")


def _present(
    skeleton: Skeleton, recording: str | Path | None, labels: str | Path | None
) -> NDArray[np.bool_] | None:
    """(markers,) Which markers a recording has; None without one."""
    if recording is None:
        return None
    label_map = read_label_map(Path(labels)) if labels is not None else None
    matched = match_markers(skeleton, read_recording(Path(recording)), label_map)
    return np.asarray(is_seen(matched.positions).any(axis=0))


def _coordinate(skeleton: Skeleton, coordinate: Coordinate, told: Telling) -> CoordinateReport:
    factor = float(np.degrees(1.0)) if coordinate.unit == "rad" else 1.0

    def bound(value: float) -> float | None:
        return round(value * factor, 9) if np.isfinite(value) else None

    role = "free"
    if coordinate.held is not None:
        role = "held"
    elif coordinate.follows is not None:
        role = f"follows {coordinate.follows}"
    return CoordinateReport(
        name=coordinate.name,
        joint=_joint_of(skeleton, coordinate.name),
        unit="deg" if coordinate.unit == "rad" else "m",
        lower=bound(coordinate.lower),
        upper=bound(coordinate.upper),
        rest=round(coordinate.rest * factor, 9),
        role=role,
        sd=_told_sd(coordinate, told, factor),
    )


def _angles(skeleton: Skeleton, told: Telling) -> tuple[CoordinateReport, ...]:
    """What is reported of orientations, with the sd that the markers give it."""
    rows = []
    for joint in skeleton.joints:
        if isinstance(joint.motion, Floating | Spherical):
            for name in joint.motion.angles.names:
                sd = told.sd.get(name, float("nan"))
                shown = float(np.degrees(sd)) if np.isfinite(sd) else None
                rows.append(
                    CoordinateReport(name, joint.name, "deg", None, None, 0.0, "angle", shown)
                )
    return tuple(rows)


def _told_sd(coordinate: Coordinate, told: Telling, factor: float) -> float | None:
    sd = told.sd.get(coordinate.name, float("nan"))
    if coordinate.held is not None or not np.isfinite(sd):
        return None
    return float(sd * factor)


def _joint_of(skeleton: Skeleton, coordinate: str) -> str:
    for joint in skeleton.joints:
        motion = joint.motion
        if isinstance(motion, Floating) and coordinate in motion.position:
            return joint.name
        if isinstance(motion, Moves) and any(m.coordinate == coordinate for m in motion.moves):
            return joint.name
    return ""
