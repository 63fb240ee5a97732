"""What a recording holds, as a value for programs and as lines for a person."""

from __future__ import annotations

from dataclasses import asdict, dataclass

import numpy as np

from condyle.recording.gaps import find_gaps
from condyle.recording.point_names import is_unnamed
from condyle.recording.recording import Recording
from condyle.recording.units import marker_spread

LISTED_EVENTS = 5
"""Events spelled out in the text; a treadmill trial has hundreds."""


@dataclass(frozen=True, slots=True)
class MarkerReport:
    """How well a marker was seen.

    Attributes
    ----------
    present : float
        Share of the frames, 0 to 1.
    gaps, longest_gap : int
        Runs of missing frames, and the frames in the longest.
    """

    label: str
    present: float
    gaps: int
    longest_gap: int


@dataclass(frozen=True, slots=True)
class PlateReport:
    """A force plate: its C3D type, whether channels exist, and its centre (m, laboratory)."""

    type: int
    channels: int
    centre: tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class EventReport:
    """A named instant (s)."""

    time: float
    label: str


@dataclass(frozen=True, slots=True)
class RecordingReport:
    """What a recording holds.

    Attributes
    ----------
    rate : Hz; duration, first_time : s
    first_frame : the file's own number
    units : the file's unit of length
    up : the declared up axis; None where none is declared
    spread : m, how far apart the markers of a frame are; None where nothing was seen
    unnamed : labels that only count a point
    analog_channels : how many; analog_rate : Hz, None without channels
    """

    name: str
    source: str
    rate: float
    frames: int
    first_frame: int
    duration: float
    units: str
    up: str | None
    spread: float | None
    markers: tuple[MarkerReport, ...]
    unnamed: tuple[str, ...]
    plates: tuple[PlateReport, ...]
    events: tuple[EventReport, ...]
    analog_channels: int
    analog_rate: float | None
    remarks: tuple[str, ...]

    def as_dict(self) -> dict[str, object]:
        """Plain values, ready for JSON."""
        return asdict(self)


def describe(recording: Recording) -> RecordingReport:
    """Count what a recording holds; nothing is changed or judged."""
    present = recording.present
    gaps = find_gaps(present)
    count = np.bincount(gaps.marker, minlength=len(recording.labels))
    longest = np.zeros(len(recording.labels), dtype=np.int64)
    np.maximum.at(longest, gaps.marker, gaps.length)
    share = present.mean(axis=0) if len(recording) else np.zeros(len(recording.labels))
    markers = zip(recording.labels, share, count, longest, strict=True)
    spread = marker_spread(recording.positions)
    return RecordingReport(
        name=recording.name,
        source=recording.source,
        rate=recording.rate,
        frames=len(recording),
        first_frame=recording.first_frame,
        duration=len(recording) / recording.rate,
        units=recording.units,
        up=recording.up,
        spread=spread if np.isfinite(spread) else None,
        markers=tuple(MarkerReport(n, float(p), int(c), int(g)) for n, p, c, g in markers),
        unnamed=tuple(label for label in recording.labels if is_unnamed(label)),
        plates=describe_plates(recording),
        events=tuple(EventReport(event.time, event.label) for event in recording.events),
        analog_channels=len(recording.analog.labels) if recording.analog else 0,
        analog_rate=recording.analog.rate if recording.analog else None,
        remarks=recording.remarks,
    )


def describe_plates(recording: Recording) -> tuple[PlateReport, ...]:
    """Type, channels and centre of every plate."""
    centres = [plate.corners.mean(axis=0) for plate in recording.plates]
    return tuple(
        PlateReport(plate.type, len(plate.channels), (float(x), float(y), float(z)))
        for plate, (x, y, z) in zip(recording.plates, centres, strict=True)
    )


def report_lines(report: RecordingReport) -> list[str]:
    """The report as plain text, one line each."""
    last = report.first_frame + report.frames - 1
    spread = "nothing seen" if report.spread is None else f"{report.spread:.2f} m"
    lines = [
        report.source,
        f"  frames       {report.frames}, numbered {report.first_frame} to {last}",
        f"  rate         {report.rate:g} Hz, {report.duration:.2f} s",
        f"  units        {report.units}; markers spread over {spread}",
        f"  up axis      {report.up or 'not declared'}",
        f"  analog       {analog_text(report)}",
        f"  force plates {plates_text(report)}",
        f"  events       {events_text(report)}",
        f"  markers      {len(report.markers)}, {len(report.unnamed)} without a name",
    ]
    width = max((len(marker.label) for marker in report.markers), default=0)
    for marker in report.markers:
        gaps = (
            ""
            if not marker.gaps
            else f"  {marker.gaps} gap{'s' if marker.gaps > 1 else ''}, longest {marker.longest_gap}"
        )
        lines.append(f"    {marker.label:<{width}}  {share_text(marker.present)}{gaps}")
    if report.unnamed:
        lines.append(f"  without a name: {', '.join(report.unnamed)}")
    return lines + [f"  note: {remark}" for remark in report.remarks]


def share_text(share: float) -> str:
    """Per cent; 100 only where nothing at all is missing."""
    percent = 100.0 * share
    return f"{percent if share == 1.0 else min(percent, 99.9):5.1f} %"


def analog_text(report: RecordingReport) -> str:
    """How many channels, at which rate."""
    if report.analog_rate is None:
        return "none"
    return f"{report.analog_channels} channels at {report.analog_rate:g} Hz"


def plates_text(report: RecordingReport) -> str:
    """How many plates, of which type."""
    if not report.plates:
        return "none"
    kinds = ", ".join(
        f"type {plate.type}{'' if plate.channels else ' (no channels)'}" for plate in report.plates
    )
    return f"{len(report.plates)} ({kinds})"


def events_text(report: RecordingReport) -> str:
    """How many events, and the first few."""
    if not report.events:
        return "none"
    shown = ", ".join(f"{e.label} {e.time:.2f} s" for e in report.events[:LISTED_EVENTS])
    return f"{len(report.events)} ({shown}{', ...' if len(report.events) > LISTED_EVENTS else ''})"
