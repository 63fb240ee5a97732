"""A C3D file built byte by byte from the public standard, so that no writer checks itself.

https://www.c3d.org/HTML/Documents/ (header words, parameter records, point and analog records).
"""

from __future__ import annotations

import os
import struct
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

INTEL, DEC, MIPS = 84, 85, 86
BLOCK = 512


def real(value: float, processor: int) -> bytes:
    """One 32-bit real as each processor stores it (DEC: VAX F, words swapped, exponent up by 2)."""
    if processor == MIPS:
        return struct.pack(">f", value)
    raw = struct.pack("<f", value * (4 if processor == DEC else 1))
    return raw[2:] + raw[:2] if processor == DEC else raw


def integer(value: int, processor: int) -> bytes:
    return struct.pack(">H" if processor == MIPS else "<H", value % 65536)


def parameter_data(value: Any, processor: int) -> tuple[int, list[int], bytes]:
    """Type, dimensions and bytes of a parameter: strings, integers, reals or an array."""
    if isinstance(value, str):
        return -1, [len(value)], value.encode("latin-1")
    if isinstance(value, list) and all(isinstance(item, str) for item in value):
        width = max((len(item) for item in value), default=0)
        text = "".join(item.ljust(width) for item in value)
        return -1, [width, len(value)], text.encode("latin-1")
    array = np.asarray(value)
    dims = list(array.shape)
    flat = array.ravel(order="F")
    if array.dtype.kind in "iu":
        return 2, dims, b"".join(integer(int(v), processor) for v in flat)
    return 4, dims, b"".join(real(float(v), processor) for v in flat)


def parameter_section(groups: Mapping[str, Mapping[str, Any]], processor: int) -> bytes:
    records = []
    for number, (group, parameters) in enumerate(groups.items(), start=1):
        head = struct.pack("bb", len(group), -number) + group.encode()
        records.append((head, b"\0"))
        for name, value in parameters.items():
            kind, dims, data = parameter_data(value, processor)
            head = struct.pack("bb", len(name), number) + name.encode()
            records.append((head, struct.pack("bB", kind, len(dims)) + bytes(dims) + data + b"\0"))
    body = b"".join(h + integer(len(rest) + 2, processor) + rest for h, rest in records) + b"\0\0"
    blocks = -(-(len(body) + 4) // BLOCK)
    return (bytes([1, 0x50, blocks, processor]) + body).ljust(blocks * BLOCK, b"\0")


def build_c3d(
    positions: Any,
    *,
    labels: list[str] | None = None,
    fourth: Any = 0,
    processor: int = INTEL,
    scale: float = -0.1,
    rate: float = 100.0,
    first: int = 1,
    last: int | None = None,
    units: str | None = "mm",
    point: Mapping[str, Any] | None = None,
    groups: Mapping[str, Mapping[str, Any]] | None = None,
    analog: Any = None,
    header_events: list[tuple[float, str]] | None = None,
) -> bytes:
    """A whole file. `positions` (frames, points, 3) in the file's unit; scale > 0 stores integers.

    `fourth` is the fourth word of every point; `analog` (frames, samples, channels).
    """
    positions = np.asarray(positions, dtype=float)
    frames, points = positions.shape[:2]
    fourth = np.broadcast_to(np.asarray(fourth), (frames, points))
    analog = np.zeros((frames, 0, 0)) if analog is None else np.asarray(analog, dtype=float)
    samples, channels = analog.shape[1:]
    last = first + frames - 1 if last is None else last
    labels = [f"m{i}" for i in range(points)] if labels is None else labels
    own: dict[str, Any] = {"USED": np.array([points]), "FRAMES": np.array([frames])}
    own |= {"SCALE": np.array([scale]), "RATE": np.array([rate]), "DATA_START": np.array([0])}
    for start in range(0, max(len(labels), 1), 255):
        own["LABELS" + (str(start // 255 + 1) if start else "")] = labels[start : start + 255]
    if units is not None:
        own["UNITS"] = [units]
    own |= point or {}
    own = {name: value for name, value in own.items() if value is not None}
    everything: dict[str, dict[str, Any]] = {"POINT": own}
    analogs: dict[str, Any] = {"USED": np.array([channels]), "RATE": np.array([rate * samples])}
    analogs |= {"LABELS": [f"a{i}" for i in range(channels)], "GEN_SCALE": np.array([1.0])}
    analogs |= {"SCALE": np.ones(channels), "OFFSET": np.zeros(channels, dtype=int)}
    everything["ANALOG"] = analogs
    everything["FORCE_PLATFORM"] = {"USED": np.array([0])}
    for name, members in (groups or {}).items():
        merged = everything.get(name, {}) | dict(members)
        everything[name] = {key: value for key, value in merged.items() if value is not None}
    start = 2 + len(parameter_section(everything, processor)) // BLOCK
    if "DATA_START" in own:
        own["DATA_START"] = np.array([start])
    section = parameter_section(everything, processor)

    def word(value: int) -> bytes:
        return integer(value, processor)

    head = b"\x02\x50" + b"".join(map(word, (points, samples * channels, first, last, 10)))
    head += real(scale, processor) + word(start) + word(samples) + real(rate, processor)
    head = head.ljust(BLOCK, b"\0")
    if header_events:
        area = bytearray(head)
        area[298:302] = word(12345) + word(len(header_events))
        for index, (time, name) in enumerate(header_events):
            area[304 + 4 * index : 308 + 4 * index] = real(time, processor)
            area[376 + index] = 1
            area[396 + 4 * index : 400 + 4 * index] = name.ljust(4)[:4].encode()
        head = bytes(area)

    def cell(value: float) -> bytes:
        return real(value, processor) if scale < 0 else word(int(np.rint(value)))

    data = bytearray()
    for f in range(frames):
        for p in range(points):
            stored = positions[f, p] if scale < 0 else positions[f, p] / scale
            data += b"".join(cell(v) for v in stored) + cell(float(fourth[f, p]))
        data += b"".join(cell(v) for v in analog[f].ravel())
    return head + section + bytes(data).ljust(-(-len(data) // BLOCK) * BLOCK, b"\0")


@pytest.fixture(scope="session")
def make_c3d() -> Callable[..., bytes]:
    return build_c3d


@pytest.fixture(scope="session")
def real_data() -> Path:
    """The folder of real recordings; tests that use it say so when it is absent."""
    default = Path(__file__).resolve().parents[3] / "shared" / "data"
    folder = Path(os.environ.get("CONDYLE_DATA", default))
    if not folder.is_dir():
        pytest.skip(f"NO REAL RECORDINGS at {folder}: set CONDYLE_DATA to check on them")
    return folder
