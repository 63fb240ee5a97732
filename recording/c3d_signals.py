"""What a C3D file holds beside points: analog channels, force plates and events.

None of it is needed to fit markers, so a fault in it is a remark, never a refusal.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.recording.c3d_layout import Layout
from condyle.recording.c3d_texts import plain, texts
from condyle.recording.recording import AnalogSignals, Event, ForcePlate

FloatArray = NDArray[np.float64]

UNSPECIFIC = ("", "general")
"""Event contexts that say nothing about a side."""


def numbers(group: Mapping[str, Any], name: str) -> FloatArray:
    """A numeric parameter, in its shape; empty where it is absent or holds text."""
    value = group[name]["value"] if name in group else []
    if isinstance(value, list):
        return np.zeros(0)
    return np.asarray(value, dtype=np.float64)


def count(group: Mapping[str, Any], name: str) -> int:
    """A counting parameter; 0 where it is absent."""
    values = numbers(group, name).ravel()
    return int(values[0]) if len(values) and 0 < values[0] < 65536 else 0


def read_analog(content: Any, layout: Layout, rate: float) -> AnalogSignals | None:
    """The analog channels, scaled; None where there are none."""
    if not layout.channels or not layout.samples:
        return None
    group = content["parameters"]["ANALOG"]
    values = np.ascontiguousarray(content["data"]["analogs"][0].T, dtype=np.float64)
    unsigned = not layout.stored_as_reals and texts(group, "FORMAT")[:1] == ["UNSIGNED"]
    values = mend_offsets(values, group, unsigned=unsigned)
    labels = texts(group, "LABELS") + [""] * layout.channels
    units = texts(group, "UNITS") + [""] * layout.channels
    return AnalogSignals(
        labels=tuple(labels[: layout.channels]),
        units=tuple(units[: layout.channels]),
        rate=rate * layout.samples,
        values=values,
    )


def mend_offsets(values: FloatArray, group: Mapping[str, Any], *, unsigned: bool) -> FloatArray:
    """(raw - OFFSET) * SCALE * GEN_SCALE, as the standard has it.

    ezc3d gives (raw - |OFFSET|) * SCALE * GEN_SCALE and takes every raw integer as signed; where
    ANALOG:FORMAT is UNSIGNED both raw value and offset are unsigned 16-bit integers.
    """
    channels = values.shape[1]
    general = numbers(group, "GEN_SCALE").ravel()
    scale = numbered(group, "SCALE")[:channels] * (general[0] if len(general) else 1.0)
    offset = numbered(group, "OFFSET")[:channels]
    if not unsigned:
        return np.asarray(values + (np.abs(offset) - offset) * scale)
    with np.errstate(divide="ignore", invalid="ignore"):
        raw = np.rint(values / scale + np.abs(offset))
    return np.where(scale != 0, (np.mod(raw, 65536) - np.mod(offset, 65536)) * scale, values)


def numbered(group: Mapping[str, Any], name: str) -> FloatArray:
    """A numeric parameter followed by its continuations (SCALE, SCALE2, ...)."""
    found, key, number = [numbers(group, name).ravel()], f"{name}2", 2
    while key in group:
        found.append(numbers(group, key).ravel())
        number += 1
        key = f"{name}{number}"
    return np.concatenate(found)


def read_plates(
    parameters: Mapping[str, Any], metres: float, channels: int, remarks: list[str]
) -> tuple[ForcePlate, ...]:
    """Force plates, with corners and origin in metres.

    Parameters
    ----------
    metres : float
        Metres per file unit.
    channels : int
        How many analog channels exist; a plate that names others gets none.
    """
    group = parameters.get("FORCE_PLATFORM", {})
    used = count(group, "USED")
    if not used:
        return ()
    types = numbers(group, "TYPE").ravel()
    corners, origin = numbers(group, "CORNERS"), numbers(group, "ORIGIN")
    named, matrix = numbers(group, "CHANNEL"), numbers(group, "CAL_MATRIX")
    sound = len(types) >= used and corners.ndim == 3 and corners.shape[:2] == (3, 4)
    if not sound or corners.shape[2] < used or origin.shape[:1] != (3,) or origin.ndim != 2:
        remarks.append(f"{used} force plates are declared but not described: left out.")
        return ()
    if origin.shape[1] < used:
        remarks.append(f"{used} force plates are declared, {origin.shape[1]} have an origin.")
        used = origin.shape[1]
    plates = []
    for plate in range(used):
        wanted = named[:, plate] - 1 if named.ndim == 2 and plate < named.shape[1] else np.zeros(0)
        valid = len(wanted) > 0 and bool(((wanted >= 0) & (wanted < channels)).all())
        if not valid:
            remarks.append(f"Force plate {plate + 1} names analog channels that do not exist.")
        has_matrix = matrix.ndim == 3 and plate < matrix.shape[2]
        plates.append(
            ForcePlate(
                type=int(types[plate]),
                corners=corners[:, :, plate].T * metres,
                origin=origin[:, plate] * metres,
                channels=tuple(int(c) for c in wanted) if valid else (),
                calibration=matrix[:, :, plate] if has_matrix else None,
            )
        )
    return tuple(plates)


def read_events(content: Any, remarks: list[str]) -> tuple[Event, ...]:
    """Events in order of time: the EVENT group's (minutes and seconds), else the header's."""
    group = content["parameters"].get("EVENT", {})
    used = count(group, "USED")
    if used:
        labels = texts(group, "LABELS")
        contexts = texts(group, "CONTEXTS") + [""] * used
        times = event_times(group)
        events = [
            Event(float(time), label if context.lower() in UNSPECIFIC else f"{context} {label}")
            for time, label, context in zip(times, labels, contexts, strict=False)
        ][:used]
        if len(events) < used:
            remarks.append(f"{used} events are declared, {len(events)} are there.")
    else:
        header = content["header"]["events"]
        pairs = zip(header["events_time"], header["events_label"], strict=False)
        events = [Event(float(time), plain(label)) for time, label in pairs if plain(label)]
    timed = [event for event in events if np.isfinite(event.time)]
    if len(timed) < len(events):
        remarks.append(f"{len(events) - len(timed)} events have no time: left out.")
    return tuple(sorted(timed, key=lambda event: event.time))


def event_times(group: Mapping[str, Any]) -> FloatArray:
    """(events,) s; the file keeps minutes and seconds apart."""
    found, key, number = [], "TIMES", 1
    while key in group:
        value = numbers(group, key)
        if value.ndim == 2 and value.shape[0] == 2:
            found.append(60 * value[0] + value[1])
        number += 1
        key = f"TIMES{number}"
    return np.concatenate(found) if found else np.zeros(0)
