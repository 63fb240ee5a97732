"""Mass, centre of mass and radii of gyration of every segment, by choice of a published table.

The table's shares of length meet the lengths of the skeleton's reference person; growth (model/growth.py) then
carries them to the sized one. Decided here:

- What a table does not say stays as the model has it: de Leva's centres lie on a line, and how far
  a segment's centre lies beside that line is the model's.
- The trunk is cut by de Leva at xiphoid and navel, which no joint marks: these cuts are the table's own mean
  lengths, scaled to the stature of the reference person.
- Where several segments share one part (talus, foot and toes; rib cage and lumbar spine), they keep
  the model's proportions, and are stretched about their common centre until together they have the
  table's mass, centre and radii.
- Products of inertia (Dumas) are left out: the language takes a segment's axes for principal ones.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, cast, get_args

import numpy as np
from numpy.typing import NDArray

from condyle.model.anatomy import Anatomy
from condyle.model.body_spans import AXES_PARTS, AXES_SPANS, LINE_PARTS, SIDES, line_span
from condyle.model.body_table_numbers import (
    DE_LEVA,
    DUMAS,
    TRUNK_LENGTHS,
    AxesPart,
    BodyTable,
    LinePart,
)
from condyle.model.errors import CondyleError
from condyle.model.skeleton import Person, Segment, Skeleton, Vector

FloatArray = NDArray[np.float64]

SOURCES = {
    "de_leva": "de Leva 1996, J Biomech 29:1223",
    "dumas": "Dumas, Cheze & Verriest 2007, J Biomech 40:543",
}


@dataclass(frozen=True, slots=True)
class RigidPart:
    """A body, or several as one: share of body mass, centre (3,) m, and mean squares (3,) m^2.

    The mean squares are of the distance from the centre along x, y and z: r_x^2 = s_y + s_z.
    """

    share: float
    centre: FloatArray
    spread: FloatArray


def with_body_table(skeleton: Skeleton, name: str) -> Skeleton:
    """The skeleton with the masses, centres and radii of a published table.

    Parameters
    ----------
    skeleton : of a reference person with stature and mass
    name : "de_leva_female", "de_leva_male", "dumas_female" or "dumas_male"

    Returns
    -------
    Skeleton
        Segments without an entry keep their numbers: :func:`kept_by_body_table` names them.

    Raises
    ------
    CondyleError
        If there is no such table, or the model describes nobody.
    """
    found = _numbers(skeleton, name)
    person = cast(Person, skeleton.person)
    segments = tuple(
        _with_part(segment, found[segment.name], person.mass) if segment.name in found else segment
        for segment in skeleton.segments
    )
    whom = name.rpartition("_")[2]
    source = f"{SOURCES[name.rpartition('_')[0]]}, {whom} (masses, centres, radii of gyration)"
    return replace(skeleton, segments=segments, sources=(*skeleton.sources, source))


def kept_by_body_table(skeleton: Skeleton, name: str) -> tuple[str, ...]:
    """The segments with a mass that a table leaves as they are: it has no entry, or no length to use."""
    found = _numbers(skeleton, name)
    return tuple(s.name for s in skeleton.segments if s.mass is not None and s.name not in found)


def tree_with_masses(tree: Mapping[str, Any], skeleton: Skeleton) -> dict[str, Any]:
    """A merged model tree with the masses, centres and radii of a skeleton, so that it can be written."""
    told = dict(cast("Mapping[str, Any]", tree.get("segments") or {}))
    for segment in skeleton.segments:
        if segment.mass_share is None or segment.centre_of_mass is None or segment.gyration is None:
            continue
        entry = {k: v for k, v in (told.get(segment.name) or {}).items() if k != "mass"}
        entry["mass_share"] = round(segment.mass_share, 8)
        entry["centre_of_mass"] = [round(x, 8) for x in segment.centre_of_mass]
        entry["gyration"] = [round(x, 8) for x in segment.gyration]
        told[segment.name] = entry
    return {**tree, "segments": told, "sources": list(skeleton.sources)}


def together(parts: list[RigidPart]) -> RigidPart:
    """Several bodies as one (parallel axes; products left out)."""
    shares = np.array([part.share for part in parts])
    weights = shares / shares.sum()
    centre = weights @ np.array([part.centre for part in parts])
    spreads = np.array([part.spread + (part.centre - centre) ** 2 for part in parts])
    return RigidPart(float(shares.sum()), centre, weights @ spreads)


def spread_of(radii: Vector | FloatArray) -> FloatArray:
    """(3,) m^2, mean squares along x, y, z from radii of gyration."""
    squares = np.square(radii)
    return np.asarray(squares.sum() / 2 - squares)


def radii_of(spread: FloatArray) -> Vector:
    """m, radii of gyration for turning about x, y, z."""
    x, y, z = np.sqrt(spread.sum() - spread)
    return (float(x), float(y), float(z))


def _numbers(skeleton: Skeleton, name: str) -> dict[str, RigidPart]:
    """Segment -> what a table says of it."""
    if name not in get_args(BodyTable):
        raise CondyleError(
            f"no table of body segments is called '{name}'.\n  There are: {', '.join(get_args(BodyTable))}."
        )
    if skeleton.person is None:
        raise CondyleError(
            f"{skeleton.name} describes nobody, so a table's shares of mass and length have no meaning.\n"
            "  Add person: {stature: ..., mass: ...} to the model."
        )
    table = cast(BodyTable, name)
    anatomy = Anatomy(skeleton)
    found: dict[str, RigidPart] = {}
    for part, stems in (LINE_PARTS if table in DE_LEVA else AXES_PARTS).items():
        for side in ("", *SIDES):
            members = [anatomy.segments.get(f"{stem}{side}") for stem in stems]
            base = members[0]
            if base is None:
                continue
            whole = (
                _on_a_line(anatomy, table, part, side, _model_whole(anatomy, members))
                if table in DE_LEVA
                else _in_axes(anatomy, DUMAS[table][part], part, side)
            )
            if whole is not None:
                found.update(_shared_out(anatomy, whole, members))
    return found


def _on_a_line(
    anatomy: Anatomy, table: BodyTable, part: str, side: str, own: RigidPart | None
) -> RigidPart | None:
    """A part by de Leva, in its first segment."""
    where = line_span(anatomy, TRUNK_LENGTHS[table], part, side)
    if where is None:
        return None
    entry: LinePart = DE_LEVA[table][part]
    along = where.end - where.start
    direction = along / np.linalg.norm(along)
    centre = where.start + entry.along * along
    if own is not None:  # beside the line, the model's
        beside = own.centre - where.start
        centre = centre + beside - (beside @ direction) * direction
    return RigidPart(entry.share, centre, spread_of(where.length * np.array(entry.radii)))


def _in_axes(anatomy: Anatomy, entry: AxesPart, part: str, side: str) -> RigidPart | None:
    """A part by Dumas, in its first segment; a segment without a side counts as a right one."""
    where = AXES_SPANS[part](anatomy, side)
    if where is None:
        return None
    axes = np.eye(3)
    if part not in ("pelvis", "foot"):  # those two keep the segment's own axes
        y = (where.end - where.start) / np.linalg.norm(where.end - where.start)
        y = y if part == "head and neck" else -y
        z = np.array([0.0, 0.0, 1.0]) - y[2] * y
        z = z / np.linalg.norm(z)
        axes = np.column_stack([np.cross(y, z), y, z])
    mirror = np.array([1.0, 1.0, -1.0 if side == "_left" else 1.0])
    centre = where.start + where.length * (axes @ (mirror * np.array(entry.centre)))
    return RigidPart(entry.share, centre, spread_of(where.length * np.array(entry.radii)))


def _model_parts(anatomy: Anatomy, members: list[Segment | None]) -> dict[str, RigidPart] | None:
    """Segment -> what the model says of it, all in the first one's axes; None where it does not."""
    parts = {}
    for segment in members:
        if segment is None:
            continue
        origin = anatomy.origin(segment.name, cast(Segment, members[0]).name)
        centre, radii = segment.centre_of_mass, segment.gyration
        if origin is None or segment.mass is None or centre is None or radii is None:
            return None
        parts[segment.name] = RigidPart(segment.mass, origin + np.array(centre), spread_of(radii))
    return parts


def _model_whole(anatomy: Anatomy, members: list[Segment | None]) -> RigidPart | None:
    parts = _model_parts(anatomy, members)
    return together(list(parts.values())) if parts else None


def _shared_out(
    anatomy: Anatomy, whole: RigidPart, members: list[Segment | None]
) -> dict[str, RigidPart]:
    """The whole given to its segments, each in its own axes; nothing where the model gives no proportions."""
    present = [segment.name for segment in members if segment is not None]
    if len(present) == 1:
        return {present[0]: whole}
    parts = _model_parts(anatomy, members)
    if parts is None:
        return {}
    own = together(list(parts.values()))
    stretch = np.sqrt(whole.spread / own.spread)
    shared = {}
    for name, part in parts.items():
        origin = cast(FloatArray, anatomy.origin(name, present[0]))
        centre = whole.centre + stretch * (part.centre - own.centre) - origin
        share = whole.share * part.share / own.share
        shared[name] = RigidPart(share, centre, stretch**2 * part.spread)
    return shared


def _with_part(segment: Segment, part: RigidPart, mass: float) -> Segment:
    x, y, z = part.centre
    return replace(
        segment,
        mass=part.share * mass,
        mass_share=part.share,
        centre_of_mass=(float(x), float(y), float(z)),
        gyration=radii_of(part.spread),
    )
