"""What the columns of a wide table mean: `time`, `frame`, and `NAME.x`, `NAME.y`, `NAME.z`.

Decided here: how a heading is read, which unit of length it declares, and which tables are refused
because a marker lacks one of its three columns.
"""

from __future__ import annotations

import re
from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from condyle.recording.c3d_layout import refusal
from condyle.recording.point_names import listing
from condyle.recording.units import METRES_PER_UNIT

AXES = "xyz"

LONGEST_SHOWN = 60
"""Characters of a heading worth repeating."""

UNIT = r"(?:\s*[\[(]\s*(?P<{0}>[^\])]*?)\s*[\])])?"
"""A unit in brackets after a heading: ``time [s]``, ``heel.x (mm)``."""

POSITION = re.compile(r"(?P<name>.+)\.(?P<axis>[xyzXYZ])" + UNIT.format("unit"))

CLOCK = re.compile(r"(?P<kind>time|frame)" + UNIT.format("unit"), re.IGNORECASE)

WANTED = "a table needs 'time' and, for every marker, 'NAME.x', 'NAME.y' and 'NAME.z'"


@dataclass(frozen=True, slots=True)
class Headings:
    """Where things stand in a table.

    Attributes
    ----------
    time : int
        Column of the time in seconds.
    frame : int or None
        Column of the file's own frame number.
    labels : (markers,) str
    columns : (3 markers,) int
        Columns of x, y, z of each marker in turn.
    unit : str or None
        The unit of length that the headings declare.
    others : columns that mean nothing here, by their headings
    """

    time: int
    frame: int | None
    labels: tuple[str, ...]
    columns: tuple[int, ...]
    unit: str | None
    others: tuple[str, ...]


def read_headings(headings: Sequence[str], path: Path) -> Headings:
    """Tell the columns of a table apart.

    Raises
    ------
    RecordingError
        Where there is no time or no marker, a column occurs twice, or a marker is incomplete.
    """
    clock: dict[str, int] = {}
    triples: defaultdict[str, dict[str, int]] = defaultdict(dict)
    units: dict[str, str] = {}
    others: list[str] = []
    for column, heading in enumerate(text.strip() for text in headings):
        timed, placed = CLOCK.fullmatch(heading), POSITION.fullmatch(heading)
        if timed:
            kind = timed["kind"].lower()
            if kind == "time" and (timed["unit"] or "s").lower() not in ("s", "sec", "seconds"):
                raise refusal(
                    path, f"its times are in '{timed['unit']}'", "convert them to seconds"
                )
            put_once(clock, kind, column, heading, path)
        elif placed:
            label = placed["name"].strip()
            put_once(triples[label], placed["axis"].lower(), column, heading, path)
            if placed["unit"]:
                units.setdefault(placed["unit"].lower(), heading)
        else:
            others.append(heading[:LONGEST_SHOWN])
    if "time" not in clock:
        raise refusal(path, "it has no column 'time'", no_time_remedy(headings))
    if not triples:
        raise refusal(path, f"none of its {len(headings)} columns is a marker's", WANTED)
    check_whole(triples, path)
    labels = tuple(triples)
    return Headings(
        time=clock["time"],
        frame=clock.get("frame"),
        labels=labels,
        columns=tuple(triples[label][axis] for label in labels for axis in AXES),
        unit=declared_unit(units, path),
        others=tuple(others),
    )


def put_once(places: dict[str, int], key: str, column: int, heading: str, path: Path) -> None:
    """Remember a column, which may stand there once."""
    if key in places:
        where = f"columns {places[key] + 1} and {column + 1}"
        raise refusal(path, f"{where} are both '{heading[:LONGEST_SHOWN]}'", "rename one of them")
    places[key] = column


def no_time_remedy(headings: Sequence[str]) -> str:
    """What to do about a table whose time was not found."""
    if len(headings) == 1:
        return f"separate its columns by commas, semicolons or tabs; {WANTED}"
    if any(CLOCK.fullmatch(heading.strip()) for heading in headings):
        return "add the time of every frame in seconds: a frame number alone tells no rate"
    return f"{WANTED}, in its first line"


def check_whole(triples: Mapping[str, Mapping[str, int]], path: Path) -> None:
    """Refuse markers that have one or two of their three columns."""
    broken = {label: triple for label, triple in triples.items() if len(triple) < len(AXES)}
    if not broken:
        return
    lacking = [
        f"{label[:LONGEST_SHOWN]}.{axis}"
        for label, triple in broken.items()
        for axis in AXES
        if axis not in triple
    ]
    there = [
        f"{label[:LONGEST_SHOWN]}.{axis}" for label, triple in broken.items() for axis in triple
    ]
    raise refusal(
        path,
        f"{listing(there)} {'is' if len(there) == 1 else 'are'} there without {listing(lacking)}",
        "a marker needs all three columns, or none",
    )


def declared_unit(units: Mapping[str, str], path: Path) -> str | None:
    """The one unit that all headings with a unit agree on."""
    for unit, heading in units.items():
        if unit not in METRES_PER_UNIT:
            known = ", ".join(METRES_PER_UNIT)
            shown = heading[:LONGEST_SHOWN]
            raise refusal(path, f"'{shown}' is in a unit that is not known", f"use one of {known}")
    if len(units) > 1:
        first, second = list(units.values())[:2]
        raise refusal(path, f"'{first}' and '{second}' differ in unit", "use one unit throughout")
    return next(iter(units), None)
