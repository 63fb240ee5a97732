"""The placement sheet of a model: where each marker goes, how closely, and what depends on it.

For the person who places the markers: one entry a marker, in the order of the segments, printable
on paper at 100 columns. What a millimetre does is judged in `solver.marker_influence`.
"""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import Floating, Marker, Skeleton
from condyle.solver.marker_influence import MarkerInfluence, marker_influence

PAPER_WIDTH = 100
"""Characters a line on paper has at most."""

MOST_NAMED = 3
"""Numbers that the print names for each marker; the JSON has all."""

WORTH_NAMING = 0.02
"""deg or mm per mm: a marker that is 10 mm off then moves the number by a fifth of a degree."""

GAP = "  "


@dataclass(frozen=True, slots=True)
class Influence:
    """What one millimetre of misplacement does to one coordinate or reported angle.

    `rate` is in `unit` (``deg`` or ``mm``) per millimetre, for the worst direction, median over
    postures; `along` is the axis of the marker's segment (x, y or z) along which it is largest.
    """

    name: str
    rate: float
    unit: str
    along: str


@dataclass(frozen=True, slots=True)
class MarkerPlacement:
    """One marker of the sheet.

    Attributes
    ----------
    landmark : the landmark's name in the model, None for a marker that is on none
    about : the place in plain words, else the landmark's name, else that it is a technical marker
    placed_within : m per axis, None where only a static tells the place
    takes_part : False where the marker has no place, or the recording does not have it
    moves : Influences on every number that is determined, the largest first
    moves_most : the few that matter, without those that follow others and the root's position
    """

    marker: str
    segment: str
    landmark: str | None
    about: str
    placed_within: float | None
    takes_part: bool
    moves: tuple[Influence, ...]
    moves_most: tuple[Influence, ...]


def placement_sheet(
    skeleton: Skeleton, *, present: NDArray[np.bool_] | None = None
) -> tuple[MarkerPlacement, ...]:
    """Every marker of a model, segment by segment.

    Parameters
    ----------
    present : (markers,) bool, optional
        Which markers there really are; by default all that have a place.
    """
    influence = marker_influence(skeleton, present=present)
    order = {segment: i for i, segment in enumerate(skeleton.segment_names)}
    rows = sorted(range(len(skeleton.markers)), key=lambda m: order[skeleton.markers[m].segment])
    return tuple(_placement(skeleton, influence, m) for m in rows)


def _placement(skeleton: Skeleton, influence: MarkerInfluence, row: int) -> MarkerPlacement:
    marker = skeleton.markers[row]
    moves = _moves(skeleton, influence, row)
    own = {name for name in influence.names if not name.endswith("_sum")}
    own -= {c.name for c in skeleton.coordinates if c.follows is not None}
    own -= _root_positions(skeleton)
    named = [one for one in moves if one.name in own and one.rate >= WORTH_NAMING]
    return MarkerPlacement(
        marker=marker.name,
        segment=marker.segment,
        landmark=marker.landmark,
        about=marker.about or _landmark_at(skeleton, marker) or "technical",
        placed_within=marker.placed_within if marker.at is not None else None,
        takes_part=bool(np.isfinite(influence.rate[row]).any()),
        moves=moves,
        moves_most=tuple(named[:MOST_NAMED]),
    )


def _root_positions(skeleton: Skeleton) -> set[str]:
    """Where a root stands in the laboratory: every marker shifts it, and nobody asks."""
    floating = [j.motion for j in skeleton.joints if isinstance(j.motion, Floating)]
    return {name for motion in floating for name in motion.position}


def _landmark_at(skeleton: Skeleton, marker: Marker) -> str:
    """The landmark that a marker names, or whose name it has."""
    landmarks = skeleton.segments[skeleton.segment_index(marker.segment)].landmarks
    return marker.landmark or (marker.name if marker.name in landmarks else "")


def _moves(skeleton: Skeleton, influence: MarkerInfluence, row: int) -> tuple[Influence, ...]:
    metres = {c.name for c in skeleton.coordinates if c.unit == "m"}
    found = []
    for column, name in enumerate(influence.names):
        rate = float(influence.rate[row, column])
        if np.isfinite(rate) and rate > 0:
            unit = "mm" if name in metres else "deg"
            shown = rate if unit == "mm" else float(np.degrees(rate)) / 1000
            found.append(Influence(name, shown, unit, "xyz"[influence.axis[row, column]]))
    return tuple(sorted(found, key=lambda one: -one.rate))


def sheet_lines(placements: Sequence[MarkerPlacement], *, model: str) -> list[str]:
    """The sheet as lines of at most `PAPER_WIDTH` characters."""
    lines = [*textwrap.wrap(f"placement sheet: {model}, {len(placements)} markers", PAPER_WIDTH)]
    lines += textwrap.wrap(
        "within: how far the centre of the marker is expected to be from its place in the model, "
        "sd per axis. moves most: what 1 mm beside that place does to the fitted numbers, in the "
        "direction that matters most (in brackets the axis of the segment nearest to it), median "
        "over postures; where the root stands is left out. Calibration takes up a part of it.",
        PAPER_WIDTH,
    )
    widths = _widths(placements)
    lines += ["", _line(("marker", "where it goes", "within", "moves most, per mm"), widths)]
    segment = None
    for one in placements:
        if one.segment != segment:
            segment = one.segment
            lines += ["", f"{segment}:"]
        lines += _entry(one, widths)
    return lines


def _widths(placements: Sequence[MarkerPlacement]) -> tuple[int, int, int, int]:
    """Characters of the four columns: names as long as they are, the words take what is left."""
    name = max([len("marker"), *(len(one.marker) for one in placements)])
    moves = max(
        [len("moves most, per mm"), *(len(_told(m)) for one in placements for m in one.moves_most)]
    )
    name, within, moves = min(name, 30), len("within"), min(moves, 44)
    return name, max(PAPER_WIDTH - name - within - moves - 3 * len(GAP), 12), within, moves


def _entry(one: MarkerPlacement, widths: tuple[int, int, int, int]) -> list[str]:
    within = "" if one.placed_within is None else f"{1000 * one.placed_within:.0f} mm"
    told = [_told(move) for move in one.moves_most]
    if not one.takes_part:
        told = ["takes no part"] if one.placed_within else ["place from the static"]
    columns = [
        textwrap.wrap(text, width) or [""]
        for text, width in ((one.marker, widths[0]), (one.about, widths[1]), (within, widths[2]))
    ]
    columns.append([line for text in told for line in textwrap.wrap(text, widths[3])] or ["little"])
    height = max(len(column) for column in columns)
    cells = [column + [""] * (height - len(column)) for column in columns]
    return [_line(row, widths) for row in zip(*cells, strict=True)]


def _told(move: Influence) -> str:
    return f"{move.name} {move.rate:.2f} {move.unit} ({move.along})"


def _line(cells: Sequence[str], widths: Sequence[int]) -> str:
    padded = [f"{cell:<{width}}" for cell, width in zip(cells, widths, strict=True)]
    return GAP.join(padded).rstrip()
