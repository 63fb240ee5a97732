"""Whether a file is laid out as a C3D can be, checked before a C3D library is let near it.

Decided here: what is refused as damaged, and why. The library trusts the counts that it reads, so
a count that the file cannot back makes it crash, or quietly return fewer frames than were
recorded. We read the 512-byte header and walk the parameter section by the public standard
(https://www.c3d.org/HTML/Documents/), and compare what both claim with the bytes that exist.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from math import inf, isnan, nan, prod
from pathlib import Path

from condyle.model.errors import RecordingError

BLOCK = 512
"""Bytes; a C3D file is counted in blocks of this size."""

SIGNATURE = 0x50
"""Second byte of every C3D file."""

INTEL, DEC, MIPS = 84, 85, 86
"""Fourth byte of the parameter section: in which order the bytes of a number are stored."""

MOST_FRAMES = 65535
"""Frame numbers are 16-bit words."""

SECTION_LIMIT = 255 * BLOCK
"""Bytes; the parameter section counts its blocks in one byte."""

MOST_TEXTS = 255 * 255
"""Texts in one parameter, empty ones too: without a bound a few bytes claim billions of them."""

MOST_EMPTY = 10_000_000
"""Samples the library may make room for where there are no channels; takes it a second."""

LONGEST_DESCRIPTION = 127
"""Characters; the length is a signed byte."""

ITEM_BYTES = {-1: 1, 1: 1, 2: 2, 4: 4}
"""Bytes an item takes, by parameter type: text, byte, integer, real."""


@dataclass(frozen=True, slots=True)
class Parameter:
    """One parameter as stored: type, dimensions, bytes."""

    type: int
    dimensions: tuple[int, ...]
    data: bytes
    processor: int

    @property
    def size(self) -> int:
        """How many items it holds; texts count once each, whatever their length."""
        if self.type == -1:
            return prod(self.dimensions[1:]) if self.dimensions else 1
        return prod(self.dimensions)

    def numbers(self) -> list[float]:
        """Its values; integers without sign, as counts are; none where it holds text."""
        if self.type == 4:
            pieces = range(0, len(self.data), 4)
            return [real(self.data[i : i + 4], self.processor) for i in pieces]
        if self.type == 2:
            return list(struct.unpack(f"<{len(self.data) // 2}H", self.data))
        return list(self.data) if self.type == 1 else []


@dataclass(frozen=True, slots=True)
class Layout:
    """What a sound file holds, as its header and parameters agree.

    Attributes
    ----------
    points, frames : int
        Points in every frame; frames stored and readable.
    claimed_frames : int
        Frames the file says it holds; more than `frames` only beyond 65535.
    first_frame : int
        The file's own number; 0 where it counts from 0.
    header_rate : float
        Frames per second by the header.
    channels, samples : int
        Analog channels, and their samples in every frame.
    stored_as_reals : bool
        Else as scaled 16-bit integers.
    scale : float
        Size of a step, of integer coordinates and of residuals, in the file's unit.
    processor : int
        Byte order, 84 or 85.
    data_offset : int
        Bytes before the first frame.
    """

    points: int
    frames: int
    claimed_frames: int
    first_frame: int
    header_rate: float
    channels: int
    samples: int
    stored_as_reals: bool
    scale: float
    processor: int
    data_offset: int

    @property
    def frame_words(self) -> int:
        """Numbers stored for every frame."""
        return 4 * self.points + self.channels * self.samples


def refusal(path: Path, problem: str, remedy: str) -> RecordingError:
    """One line: what is wrong, where, and what to do."""
    return RecordingError(f"{path}: {problem}; {remedy}.")


def damaged(path: Path, problem: str) -> RecordingError:
    """The refusal of a file that contradicts itself or the standard."""
    return refusal(path, f"damaged C3D, {problem}", "export or copy the recording again")


def real(data: bytes, processor: int) -> float:
    """A 32-bit real; DEC stores its two words swapped and four times the value."""
    if processor == DEC:
        return float(struct.unpack("<f", data[2:] + data[:2])[0]) / 4
    return float(struct.unpack("<f", data)[0])


def check_layout(path: Path) -> Layout:
    """Compare what a C3D file claims with what it holds.

    Raises
    ------
    RecordingError
        For anything that a C3D library could stumble over, with the reason.
    """
    size = path.stat().st_size
    with path.open("rb") as stream:
        header = stream.read(BLOCK)
        if len(header) < 2 or header[1] != SIGNATURE:
            raise refusal(path, "not a C3D file", "give a recording saved as C3D")
        if len(header) < BLOCK:
            raise damaged(path, f"cut off after {len(header)} bytes, inside its header")
        start = (header[0] - 1) * BLOCK
        if start < BLOCK:
            raise damaged(path, "the header names no parameter section")
        stream.seek(start)
        section = stream.read(SECTION_LIMIT)
    processor = check_processor(path, section)
    words = struct.unpack("<256H", header)
    data_start = words[8]
    if data_start * BLOCK <= start + BLOCK:
        raise damaged(path, "the header puts the data before the end of the parameters")
    room = (data_start - 1) * BLOCK - start
    if len(section) < min(room, SECTION_LIMIT):
        raise damaged(path, "cut off inside its parameters")
    parameters = read_parameters(path, section[:room], processor)
    layout = agree(path, header, words, parameters, processor)
    check_rates(path, parameters, layout)
    check_data(path, size - layout.data_offset, layout, parameters)
    return layout


def check_processor(path: Path, section: bytes) -> int:
    """The byte order, where it is one that can be read."""
    if len(section) < 4:
        raise damaged(path, "cut off before its parameters")
    processor = section[3]
    if processor == MIPS:
        raise refusal(
            path,
            "a C3D in MIPS (big-endian) byte order, which cannot be read",
            "save it again in Intel byte order",
        )
    if processor not in (INTEL, DEC):
        raise damaged(path, f"no byte order is numbered {processor} (84 Intel, 85 DEC, 86 MIPS)")
    return processor


def read_parameters(path: Path, section: bytes, processor: int) -> dict[str, Parameter]:
    """Walk the section; every record must lie inside it. Keys are ``GROUP:NAME``."""
    groups: dict[int, str] = {}
    found: list[tuple[int, str, Parameter]] = []
    for number, name, body in records(path, section):
        if number < 0:
            groups[-number] = name
            check_description(path, name, body)
        else:
            found.append((number, name, read_parameter(path, name, body, processor)))
    if "POINT" not in groups.values():
        raise damaged(path, "its parameters have no group POINT")
    return {f"{groups[n]}:{name}": value for n, name, value in found if n in groups}


def records(path: Path, section: bytes) -> Iterator[tuple[int, str, bytes]]:
    """Group or parameter number, upper-case name, and the bytes after the link, in file order."""
    here = 4
    while here + 2 <= len(section) and section[here] != 0:
        length, number = struct.unpack_from("bb", section, here)
        link = here + 2 + abs(length)
        if link + 2 > len(section):
            raise damaged(path, "a parameter's name runs past the end of the parameters")
        name = section[here + 2 : link].decode("latin-1").upper()
        step = struct.unpack_from("<H", section, link)[0]
        after = link + step if step else len(section)
        if step == 1 or after > len(section) or number == 0:
            raise damaged(path, f"the parameters after {name!r} cannot be followed")
        yield number, name, section[link + 2 : after]
        if not step:
            return
        here = after


def read_parameter(path: Path, name: str, body: bytes, processor: int) -> Parameter:
    """Type, dimensions and data, which must fit in the record."""
    kind = int.from_bytes(body[:1], signed=True)
    rank = body[1] if len(body) > 1 else 256
    dimensions = tuple(body[2 : 2 + rank])
    length = prod(dimensions) * ITEM_BYTES.get(kind, 0)
    if kind not in ITEM_BYTES or len(dimensions) != rank or 2 + rank + length > len(body):
        raise damaged(path, f"parameter {name!r} does not fit in its place")
    check_description(path, name, body[2 + rank + length :])
    if kind == -1 and (rank == 0 or prod(dimensions[1:]) > MOST_TEXTS):
        raise damaged(path, f"the dimensions of the text {name!r} make no sense")
    return Parameter(kind, dimensions, body[2 + rank : 2 + rank + length], processor)


def check_description(path: Path, name: str, rest: bytes) -> None:
    """A length of at most 127, and as many characters; longer ones crash the library."""
    if not rest or rest[0] > LONGEST_DESCRIPTION or rest[0] >= len(rest):
        raise damaged(path, f"the description of {name!r} does not fit in its place")


def agree(
    path: Path,
    header: bytes,
    words: tuple[int, ...],
    parameters: Mapping[str, Parameter],
    processor: int,
) -> Layout:
    """The counts, where header and parameters tell the same story."""

    def number(name: str, default: float) -> float:
        parameter = parameters.get(name)
        values = parameter.numbers() if parameter else []
        return values[0] if values else default

    points, per_frame, samples = words[1], words[2], words[9]
    if number("POINT:USED", points) != points:
        used = number("POINT:USED", points)
        raise damaged(path, f"{points} points a frame by its header but {used:g} by its parameters")
    scale = real(header[12:16], processor)
    if (number("POINT:SCALE", scale) < 0) != (scale < 0):
        raise damaged(path, "header and parameters disagree on whether points are integers")
    channels = int(number("ANALOG:USED", 0))
    ratio = samples if per_frame else 0
    if channels * ratio != per_frame or (channels and not per_frame):
        found = f"{channels} channels of {samples} samples but {per_frame} values a frame"
        raise damaged(path, f"its analog counts contradict each other: {found}")
    check_analog(path, parameters, channels)
    frames, claimed = count_frames(words, parameters)
    return Layout(
        points=points,
        frames=frames,
        claimed_frames=claimed,
        first_frame=first_frame(words, parameters),
        header_rate=real(header[20:24], processor),
        channels=channels,
        samples=ratio,
        stored_as_reals=scale < 0,
        scale=abs(number("POINT:SCALE", scale)),
        processor=processor,
        data_offset=(words[8] - 1) * BLOCK,
    )


def count_frames(words: tuple[int, ...], parameters: Mapping[str, Parameter]) -> tuple[int, int]:
    """Frames that can be read, and that are claimed: POINT:FRAMES counts them, else the header."""
    stated = parameters.get("POINT:FRAMES")
    values = stated.numbers() if stated else []
    frames = int(values[0]) if values and values[0] < 2**32 else words[4] - words[3] + 1
    first, last = (
        field_frame(parameters, name) for name in ("ACTUAL_START_FIELD", "ACTUAL_END_FIELD")
    )
    claimed = last - first + 1 if frames >= MOST_FRAMES and last > first > 0 else frames
    return min(frames, MOST_FRAMES), max(claimed, frames)


def field_frame(parameters: Mapping[str, Parameter], name: str) -> int:
    """A frame number kept as two words in the group TRIAL; 0 where there is none."""
    parameter = parameters.get(f"TRIAL:{name}")
    if parameter is None or parameter.type != 2 or parameter.size != 2:
        return 0
    low, high = parameter.numbers()
    return int(low + 65536 * high)


def first_frame(words: tuple[int, ...], parameters: Mapping[str, Parameter]) -> int:
    """The header's word, unless the number needs more than its 16 bits."""
    long = field_frame(parameters, "ACTUAL_START_FIELD")
    return long if MOST_FRAMES < long < 2**31 else words[3]


def check_analog(path: Path, parameters: Mapping[str, Parameter], channels: int) -> None:
    """Every channel needs its scale and offset; the library reads past the end of short ones."""
    for name in ("SCALE", "OFFSET"):
        numbered = (key for key in parameters if key.rstrip("0123456789") == f"ANALOG:{name}")
        held = sum(parameters[key].size for key in numbered)
        if held < channels:
            raise damaged(path, f"ANALOG:{name} has {held} values for {channels} channels")


def check_rates(path: Path, parameters: Mapping[str, Parameter], layout: Layout) -> None:
    """The library makes room for (analog rate / point rate) samples a frame: they must be there."""
    rates = {}
    for group in ("POINT", "ANALOG"):
        stated = parameters.get(f"{group}:RATE")
        values = stated.numbers() if stated else []
        rates[group] = values[0] if values else None
    point, analog = rates["POINT"] or layout.header_rate, rates["ANALOG"]
    if not 0 <= point < inf:
        raise refusal(path, "it has no frame rate", "export it again with its rate")
    ratio = analog / point if analog is not None and point > 0 else nan
    if layout.channels and not abs(ratio - layout.samples) < 0.5:
        said = "no rate" if analog is None else f"{analog:g} Hz"
        raise damaged(path, f"analog at {said} is not {layout.samples} times {point:g} Hz")
    if not layout.channels and not (isnan(ratio) or 0 <= ratio * layout.frames <= MOST_EMPTY):
        raise damaged(path, f"an analog rate of {analog:g} Hz makes no sense")


def check_data(path: Path, room: int, layout: Layout, parameters: Mapping[str, Parameter]) -> None:
    """The data section must hold every frame that is claimed."""
    if layout.points == 0:
        raise refusal(path, "it holds no points", "give a recording of markers")
    if layout.frames <= 0:
        raise refusal(path, "it holds no frames", "give a recording with at least one frame")
    frame_bytes = layout.frame_words * (4 if layout.stored_as_reals else 2)
    held = max(room, 0) // frame_bytes
    if held < layout.frames:
        missing = layout.frames - held
        problem = f"cut off: {missing} of {layout.frames} frames are missing from the end"
        raise refusal(path, problem, "export or copy the recording again")
    rotations = parameters.get("ROTATION:USED")
    if rotations is not None and any(rotations.numbers()):
        check_rotations(path, room - layout.frames * frame_bytes, layout, parameters)


def check_rotations(
    path: Path, room: int, layout: Layout, parameters: Mapping[str, Parameter]
) -> None:
    """Rotations (17 reals each) follow the points; the library reads them whether wanted or not."""
    used = int(parameters["ROTATION:USED"].numbers()[0])
    ratio = parameters.get("ROTATION:RATIO")
    times = int(max([*(ratio.numbers() if ratio else []), 1]))
    if used * times * layout.frames * 17 * 4 > room:
        raise damaged(path, f"it claims {used} rotations a frame that it does not hold")
