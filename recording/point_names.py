"""From the labels in a file to one name for every column of a recording.

Decided here: which prefix is dropped, what happens to labels that occur twice, and which points
count as having no name.
"""

from __future__ import annotations

import re
from collections import Counter, defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

UNNAMED = re.compile(r"\*?\d*")
"""An empty label, or one that only counts: ``7``, ``*7``, ``*``."""

LISTED = 5
"""How many labels a remark spells out before it says how many more there are."""


@dataclass(frozen=True, slots=True)
class PointNames:
    """Which points of a file to keep, and under which names.

    Attributes
    ----------
    columns : (markers,) int
        Indices of the points kept, ascending.
    labels : (markers,) str
        Their names, each once.
    remarks : str
    """

    columns: NDArray[np.int64]
    labels: tuple[str, ...]
    remarks: tuple[str, ...]


def is_unnamed(label: str) -> bool:
    """Whether a label only counts a point instead of naming it."""
    return UNNAMED.fullmatch(label) is not None


def split_prefix(label: str) -> tuple[str, str]:
    """What stands before the last colon, and the name after it."""
    prefix, _, name = label.rpartition(":")
    return prefix.strip(), name.strip()


def listing(labels: Sequence[str]) -> str:
    """The labels in words, a long list cut short."""
    more = f" and {len(labels) - LISTED} more" if len(labels) > LISTED else ""
    return ", ".join(labels[:LISTED]) + more


def name_points(labels: Sequence[str], present: NDArray[np.bool_]) -> PointNames:
    """One name for each point that is kept.

    Parameters
    ----------
    labels : (points,) str
        As in the file.
    present : (frames, points) bool
        Where each point was seen.
    """
    samples = present.sum(axis=0)
    names, remarks = drop_prefixes(labels, samples)
    columns: list[int] = []
    places = defaultdict(list)
    for column, name in enumerate(names):
        places[name].append(column)
    for name, same in places.items():
        if is_unnamed(name) or len(same) == 1:
            columns += same
            continue
        best = max(same, key=lambda column: (samples[column], -column))
        columns.append(best)
        remarks.append(dropped_twin(name, best, same, present))
    columns.sort()
    kept = number_unnamed([(column, names[column]) for column in columns])
    return PointNames(np.array(columns, dtype=np.int64), tuple(kept), tuple(remarks))


def drop_prefixes(labels: Sequence[str], samples: NDArray[np.int64]) -> tuple[list[str], list[str]]:
    """Names without prefix; where two prefixes share names, only the most seen one is dropped.

    Two subjects in one file must not be mixed into one person, so the other's points that would
    clash keep their whole label.
    """
    parts = [split_prefix(label) for label in labels]
    prefixes = defaultdict(set)
    for prefix, name in parts:
        if not is_unnamed(name):
            prefixes[name].add(prefix)
    shared = {name for name, used in prefixes.items() if len(used) > 1}
    if not shared:
        return [name for _, name in parts], []
    seen: Counter[str] = Counter()
    for (prefix, name), count in zip(parts, samples, strict=True):
        if name in shared:
            seen[prefix] += int(count)
    first = max(seen, key=lambda prefix: seen[prefix])
    others = sorted(set(seen) - {first})
    names = [
        f"{prefix}:{name}" if name in shared and prefix != first and prefix else name
        for prefix, name in parts
    ]
    remark = (
        f"Points of {listing([first or '(no prefix)', *(o or '(no prefix)' for o in others)])} "
        f"share names; {first or 'those without a prefix'} was seen most and is taken, "
        "the others keep their prefix."
    )
    return names, [remark]


def dropped_twin(name: str, best: int, same: Sequence[int], present: NDArray[np.bool_]) -> str:
    """What to say about points that lost their name to a better seen one."""
    others = [column for column in same if column != best]
    only = int((present[:, others].any(axis=1) & ~present[:, best]).sum())
    where = (
        f" although they were seen in {only} frames where it was not"
        if only
        else ", which adds nothing to it"
    )
    return (
        f"{len(same)} points are called {name}: the one seen most "
        f"({int(present[:, best].sum())} frames) is kept, the rest dropped{where}."
    )


def number_unnamed(points: Sequence[tuple[int, str]]) -> list[str]:
    """Unnamed points whose label is empty or taken become ``*N``, N the point's place in the file."""
    taken = {name for _, name in points if not is_unnamed(name)}
    result = []
    for column, name in points:
        if is_unnamed(name) and (name in ("", "*") or name in taken):
            number = column + 1
            while f"*{number}" in taken:
                number += 1
            name = f"*{number}"
        taken.add(name)
        result.append(name)
    return result
