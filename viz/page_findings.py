"""What a reader of a page is told first, in words: what needs a look, where, and what to do about it.

`fit.json` says what is wrong over the whole trial; here it gets its places in time, so that a reader can
go there, and what is known only from the markers' errors over time is added: labels that look
exchanged, markers that are far off for a while, markers left out, and what limits the numbers.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from condyle.solver.results import FittedMotion
from condyle.viz.episodes import Episode, bridge_rows, exchanged, far_off, stretches
from condyle.viz.shown_trial import SIGMAS, ShownTrial

Level = Literal["look", "note", "good"]

MOST_PLACES = 4
"""Places that one finding names; how many more there are is said."""

MOST_FAR = 6
"""Markers that get a finding of their own for standing out; the error map shows the others."""

NO_CHOICE = frozenset({"", "missing", "no_place", "static_only", "not_in_model"})
"""Reasons for which nobody left a marker out: it was not there, or has no place."""

REASONS = {
    "spike": "jumped for a moment",
    "frozen": "stood still while its segment moved",
    "swapped": "carried another marker's name",
    "slid": "slid on the skin or came loose",
    "stray": "was no marker of the model",
    "outlier": "disagreed with all the others",
}
"""`why_not` of the markers' table in plain words."""

REMEDIES = {
    "calibration": "a static trial with more markers on the joints, and the person's mass and "
    "stature, would narrow it most",
    "markers, skin above all": "more markers on the segments beside that joint, on places where the "
    "skin moves little, would narrow it most",
    "white noise": "better views of the markers for the cameras would narrow it most",
}
"""What dominates a number's variance, and what would help."""


@dataclass(frozen=True, slots=True)
class Place:
    """Where to look: rows of the motion, the row to show first, and the markers it is about."""

    first: int
    last: int
    worst: int
    markers: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PageFinding:
    """One thing to say.

    Attributes
    ----------
    level : "look" needs a look; "note" is worth knowing; "good" says that nothing was found
    what, do : str
        What was found; what to do about it (may be empty).
    places : where it shows, the worst first
    more : int
        Places that are not named.
    """

    level: Level
    what: str
    do: str
    places: tuple[Place, ...] = ()
    more: int = 0


def page_findings(trial: ShownTrial) -> list[PageFinding]:
    """Everything worth saying about a trial, the gravest first."""
    swaps = exchanged(trial.motion)
    far = far_off(trial.motion)
    found = [
        *_exchanges(trial.motion, swaps, far),
        *_warnings(trial, swaps, far),
        *_far_markers(trial, swaps, far),
        *_left_out(trial),
        *_least_certain(trial),
        *_without_label(trial),
    ]
    found.sort(key=lambda finding: finding.level != "look")
    if not any(finding.level == "look" for finding in found):
        calm = "every frame converged, and no two labels look exchanged"
        calm = calm if far else f"no marker is far off, {calm}"
        found.insert(0, PageFinding("good", f"Nothing here needs a look: {calm}.", ""))
    return found


def span_text(motion: FittedMotion, first: int, last: int) -> str:
    """A stretch in seconds and in the recording's own frame numbers."""
    start, end = motion.time[first], motion.time[last]
    if first == last:
        return f"at {start:.2f} s (frame {motion.frame[first]})"
    return (
        f"from {start:.2f} s to {end:.2f} s (frames {motion.frame[first]} to {motion.frame[last]})"
    )


def listed(names: Sequence[str], most: int = 8) -> str:
    """Names in a sentence: `a, b and c`, or `a, b, c and 4 others`."""
    if len(names) > most:
        return f"{', '.join(names[: most - 1])} and {len(names) - most + 1} others"
    return " and ".join(filter(None, [", ".join(names[:-1]), names[-1]])) if names else ""


def _exchanges(
    motion: FittedMotion, swaps: Sequence[Episode], far: Sequence[Episode]
) -> Iterator[PageFinding]:
    for markers in dict.fromkeys(swap.markers for swap in swaps):
        episodes = [swap for swap in swaps if swap.markers == markers]
        spans = listed([span_text(motion, e.first, e.last) for e in episodes], MOST_PLACES)
        drawn = sorted(
            {
                e.markers[0]
                for e in far
                if e.markers[0] not in markers and any(_overlap(e, swap) for swap in episodes)
            }
        )
        also = (
            f" {listed(drawn)} {'is' if len(drawn) == 1 else 'are'} off at the same time, most "
            "likely because of it."
            if drawn
            else ""
        )
        yield PageFinding(
            "look",
            f"{markers[0]} and {markers[1]} look exchanged {spans}: each lies where the other "
            "should be.",
            "Exchange the two labels in the recording for these frames, or leave these frames out, "
            "and solve the trial again. Until then do not read the joints beside these markers "
            f"there.{also}",
            tuple(Place(e.first, e.last, e.worst, e.markers) for e in episodes[:MOST_PLACES]),
            max(len(episodes) - MOST_PLACES, 0),
        )


def _warnings(
    trial: ShownTrial, swaps: Sequence[Episode], far: Sequence[Episode]
) -> Iterator[PageFinding]:
    """The warnings of `fit.json`, each with its places; what an exchange explains is told there."""
    for warning in trial.report.get("warnings", []):
        what, do = str(warning["what"]), str(warning["do"])
        words = set(re.findall(r"[\w*.-]+", what))
        own = [e for e in far if e.markers[0] in words]
        if own and all(any(_overlap(e, swap) for swap in swaps) for e in own):
            continue
        places = [_place(e) for e in own] or list(_frames_named(trial, what))
        places = places or list(_limit_places(trial, words))
        if warning.get("needs_a_look") and not places:
            places = list(_worst_frame(trial.motion))
        yield PageFinding(
            "look" if warning.get("needs_a_look") else "note",
            _sentence(what),
            _sentence(do),
            tuple(places[:MOST_PLACES]),
            max(len(places) - MOST_PLACES, 0),
        )


def _frames_named(trial: ShownTrial, what: str) -> Iterator[Place]:
    frames = {int(f) for f in re.findall(r"\bframe (\d+)", what)}
    if "not converge" in what:
        frames |= set(trial.report.get("frames_not_converged", []))
    rows = np.isin(trial.motion.frame, sorted(frames))
    for first, last in stretches(rows, bridge_rows(trial.motion)):
        yield Place(first, last, first)


def _limit_places(trial: ShownTrial, words: Iterable[str]) -> Iterator[Place]:
    for column in trial.columns:
        if column.name in words and column.at_limit.any():
            for first, last in stretches(column.at_limit, bridge_rows(trial.motion)):
                yield Place(first, last, first)


def _worst_frame(motion: FittedMotion) -> Iterator[Place]:
    rms = np.nan_to_num(motion.rms_of_frames())
    if rms.max(initial=0.0) > 0.0:
        worst = int(rms.argmax())
        yield Place(worst, worst, worst)


def _far_markers(
    trial: ShownTrial, swaps: Sequence[Episode], far: Sequence[Episode]
) -> Iterator[PageFinding]:
    """Markers that stand out for a while without any warning naming them."""
    said = " ".join(str(warning["what"]) for warning in trial.report.get("warnings", []))
    named = set(re.findall(r"[\w*.-]+", said))
    alone = [
        e for e in far if e.markers[0] not in named and not any(_overlap(e, swap) for swap in swaps)
    ]
    for name in list(dict.fromkeys(e.markers[0] for e in alone))[:MOST_FAR]:
        own = [e for e in alone if e.markers[0] == name]
        yield PageFinding(
            "note",
            f"{name} stands out {span_text(trial.motion, own[0].first, own[0].last)}, up to "
            f"{1000 * own[0].largest:.0f} mm.",
            "Look there whether it slid, was knocked, or carries another marker's name.",
            tuple(_place(e) for e in own[:MOST_PLACES]),
            max(len(own) - MOST_PLACES, 0),
        )


def _left_out(trial: ShownTrial) -> Iterator[PageFinding]:
    counts = Counter(trial.why_not.ravel().tolist())
    for reason in sorted(set(counts) - NO_CHOICE):
        chosen = trial.why_not == reason
        names = [trial.motion.marker_names[i] for i in np.flatnonzero(chosen.any(axis=0))]
        places = [
            Place(first, last, first, tuple(names[:2]))
            for first, last in stretches(chosen.any(axis=1), bridge_rows(trial.motion))
        ]
        where = "marker-frame was" if counts[reason] == 1 else "marker-frames were"
        yield PageFinding(
            "note",
            f"{counts[reason]} {where} left out of the fit because a marker "
            f"{REASONS.get(reason, reason)}: {listed(names)}.",
            "Nothing needs doing if you agree; the error map shows them hatched.",
            tuple(places[:MOST_PLACES]),
            max(len(places) - MOST_PLACES, 0),
        )


def _least_certain(trial: ShownTrial) -> Iterator[PageFinding]:
    parts = trial.report.get("uncertainty", {}).get("parts", {})
    turns = [c for c in trial.columns if c.unit == "deg" and np.isfinite(c.sd).any()]
    if not turns:
        return
    widths = [SIGMAS * float(np.nanmedian(c.sd)) for c in turns]
    widest = int(np.argmax(widths))
    column, cause = turns[widest], parts.get(turns[widest].name, {}).get("dominated_by", "")
    why = f", mostly by {cause}" if cause else ""
    tally = Counter(str(part.get("dominated_by", "")) for part in parts.values())
    most = tally.most_common(1)[0] if tally else ("", 0)
    whole = (
        f" Of {sum(tally.values())} numbers {most[1]} are limited mostly by {most[0]}."
        if most[0]
        else ""
    )
    yield PageFinding(
        "note",
        f"The least certain angle is {column.name}: within ±{widths[widest]:.1f} degrees (95 %, median "
        f"over the trial){why}.{whole}",
        _sentence(REMEDIES.get(cause, "")),
    )


def _without_label(trial: ShownTrial) -> Iterator[PageFinding]:
    missing = [str(name) for name in trial.report.get("markers_without_label", [])]
    unknown = [str(name) for name in trial.report.get("labels_not_in_model", [])]
    if missing:
        yield PageFinding(
            "note",
            f"The recording never shows {len(missing)} markers of the model: {listed(missing)}.",
            "Nothing needs doing if they were left off on purpose; else give a map with --labels.",
        )
    if unknown:
        yield PageFinding(
            "note",
            f"The recording has points that the model does not know: {listed(unknown)}.",
            "Nothing needs doing if they belong to something else; else give a map with --labels.",
        )


def _overlap(one: Episode, other: Episode) -> bool:
    return one.first <= other.last and other.first <= one.last


def _place(episode: Episode) -> Place:
    return Place(episode.first, episode.last, episode.worst, episode.markers)


def _sentence(text: str) -> str:
    """A clause as a sentence: its full stop set, its first letter large unless it is a name."""
    if not text:
        return ""
    first = text.split()[0]
    head = text[0] if "_" in first else text[0].upper()
    return f"{head}{text[1:]}{'' if text.endswith(('.', ':', '!', '?')) else '.'}"
