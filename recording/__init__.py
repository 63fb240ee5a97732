"""Recordings of marker positions, whatever file they came in."""

from condyle.recording.c3d import read_c3d
from condyle.recording.c3d_writing import write_c3d
from condyle.recording.describing import RecordingReport, describe, report_lines
from condyle.recording.labels import LabelMatch, match_labels, read_label_map
from condyle.recording.lengths import read_lengths
from condyle.recording.point_names import is_unnamed
from condyle.recording.reading import read_recording
from condyle.recording.recording import AnalogSignals, Event, ForcePlate, Recording
from condyle.recording.still import StillPart, still_part
from condyle.recording.tables import read_table
from condyle.recording.units import marker_spread, unlikely_spread

__all__ = [
    "AnalogSignals",
    "Event",
    "ForcePlate",
    "LabelMatch",
    "Recording",
    "RecordingReport",
    "StillPart",
    "describe",
    "is_unnamed",
    "marker_spread",
    "match_labels",
    "read_c3d",
    "read_label_map",
    "read_lengths",
    "read_recording",
    "read_table",
    "report_lines",
    "still_part",
    "unlikely_spread",
    "write_c3d",
]
