"""Which axes of which segments share one size factor.

Decided here: of a segment that lists only `along`, the other axes are across, and the reverse; one
that lists both must place every axis. A segment that lists neither has one factor for all its
axes, unless `with` joins it to one that lists them: then it takes that split over. `with` joins
along to along and across to across, and is the same whichever of the two says it.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from condyle.model.language import SizingSegmentEntry
from condyle.model.skeleton import SizeGroup
from condyle.model.tree import Mistakes, Node, node_at

_LETTERS = "xyz"


@dataclass(frozen=True, slots=True)
class _Split:
    """The axes along and across, as indices."""

    along: tuple[int, ...]
    across: tuple[int, ...]


def check_splits(
    entries: Mapping[str, SizingSegmentEntry], known: Iterable[str], tree: Node, mistakes: Mistakes
) -> None:
    """Tell unknown segments, and axes that stand nowhere or twice."""
    names = set(known)
    for name, entry in entries.items():
        node = node_at(tree, "sizing", "segments", name)
        if name not in names:
            mistakes.add_unknown(node, "segment", name, names, key=True)
        if entry.with_ is not None and entry.with_ not in names:
            mistakes.add_unknown(node_at(node, "with"), "segment", entry.with_, names)
        if entry.with_ == name:
            remedy = "Name the other segment, or remove `with`."
            mistakes.add(node_at(node, "with"), f"'{name}' is joined with itself.", remedy)
        listed = [*(entry.along or ()), *(entry.across or ())]
        for letter in _LETTERS:
            if listed.count(letter) > 1:
                problem = f"the axis {letter} of '{name}' is listed twice."
                mistakes.add(node, problem, "Write it once, in `along` or in `across`.", key=True)
            if entry.along is not None and entry.across is not None and letter not in listed:
                problem = f"the axis {letter} of '{name}' is neither along nor across."
                remedy = "Add it to one of them, or leave one list out: it takes the rest."
                mistakes.add(node, problem, remedy, key=True)


def size_groups(
    segments: Iterable[str], entries: Mapping[str, SizingSegmentEntry]
) -> tuple[SizeGroup, ...]:
    """The groups of a sound model: every axis of every segment exactly once.

    Parameters
    ----------
    segments : names
        All of them, in the order of the skeleton.
    entries : name -> SizingSegmentEntry
        What `sizing: segments` says.
    """
    order = {name: index for index, name in enumerate(segments)}
    partners: dict[str, list[str]] = {name: [] for name in order}
    for name, entry in entries.items():
        if entry.with_ is not None:
            partners[name].append(entry.with_)
            partners[entry.with_].append(name)
    groups: list[SizeGroup] = []
    settled: set[str] = set()
    for name in order:
        if name not in settled:
            together = _reached(name, partners)
            settled.update(together)
            splits = _splits(sorted(together, key=order.__getitem__), partners, entries)
            groups.extend(_groups_of(splits))
    return tuple(groups)


def _reached(start: str, partners: Mapping[str, list[str]]) -> list[str]:
    reached, front = {start: None}, [start]
    while front:
        for name in partners[front.pop()]:
            if name not in reached:
                reached[name] = None
                front.append(name)
    return list(reached)


def _splits(
    together: list[str],
    partners: Mapping[str, list[str]],
    entries: Mapping[str, SizingSegmentEntry],
) -> dict[str, _Split | None]:
    """The split of each joined segment; None for all where none of them lists its axes."""
    splits = {name: _own_split(entries.get(name)) for name in together}
    changed = True
    while changed and any(splits.values()):
        changed = False
        for name in together:
            if splits[name] is None:
                taken = next((splits[one] for one in partners[name] if splits[one]), None)
                splits[name], changed = taken, changed or taken is not None
    return splits


def _own_split(entry: SizingSegmentEntry | None) -> _Split | None:
    if entry is None or (entry.along is None and entry.across is None):
        return None
    along = entry.along if entry.along is not None else _rest_of(entry.across or [])
    across = entry.across if entry.across is not None else _rest_of(along)
    return _Split(
        tuple(sorted(_LETTERS.index(letter) for letter in along)),
        tuple(sorted(_LETTERS.index(letter) for letter in across)),
    )


def _rest_of(letters: Sequence[str]) -> Sequence[str]:
    return [letter for letter in _LETTERS if letter not in letters]


def _groups_of(splits: Mapping[str, _Split | None]) -> list[SizeGroup]:
    title = "+".join(splits)
    found: list[SizeGroup] = []
    first = next(iter(splits.values()))
    if first is None:
        return [SizeGroup(title, tuple((name, axis) for name in splits for axis in range(3)))]
    for word in ("along", "across"):
        axes = {name: getattr(split, word) for name, split in splits.items()}
        members = tuple((name, axis) for name, those in axes.items() for axis in those)
        if members:
            letters = "".join(_LETTERS[axis] for axis in next(a for a in axes.values() if a))
            found.append(SizeGroup(f"{title} {word} {letters}", members))
    return found
