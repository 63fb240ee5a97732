"""The one door for recordings: a path in, a `Recording` out, or one line that says why not."""

from __future__ import annotations

from pathlib import Path

from condyle.recording.c3d import read_c3d
from condyle.recording.c3d_layout import SIGNATURE, refusal
from condyle.recording.parquet_tables import MAGIC
from condyle.recording.recording import Recording
from condyle.recording.tables import TABLE_SUFFIXES, read_table

C3D_SUFFIX = ".c3d"

PARAMETER_BLOCK = 32
"""A C3D's first byte is the block where its parameters start, in practice 2: no letter."""


def read_recording(path: Path, *, units: str | None = None) -> Recording:
    """Read a recording of marker positions.

    Parameters
    ----------
    path : Path
        A C3D file, or a wide table in Parquet or CSV; told by its content where that is certain,
        else by its name.
    units : str, optional
        The unit of length, ``mm`` or ``m`` (``cm``, ``dm``); wins over what the file declares.

    Returns
    -------
    Recording
        In metres and seconds, NaN where a marker was missing; `remarks` says what was decided.

    Raises
    ------
    RecordingError
        When the file cannot be read, is damaged, or holds no points or frames.
    """
    path = Path(path)
    try:
        start = first_bytes(path)
        if is_table(path, start):
            return read_table(path, units=units)
        if path.suffix.lower() != C3D_SUFFIX and start[1:2] != bytes([SIGNATURE]):
            kind = f"'{path.suffix}' files" if path.suffix else "files of this kind"
            raise refusal(path, f"{kind} cannot be read", "give a recording as C3D, Parquet or CSV")
        return read_c3d(path, units=units)
    except OSError as error:
        why = error.strerror or str(error)
        raise refusal(path, f"cannot be read ({why})", "check the file and its rights") from error


def is_table(path: Path, start: bytes) -> bool:
    """Whether a file is to be read as a table, from its name and its first bytes."""
    if start == MAGIC:
        return True
    is_c3d = start[1:2] == bytes([SIGNATURE]) and start[0] < PARAMETER_BLOCK
    return path.suffix.lower() in TABLE_SUFFIXES and not is_c3d


def first_bytes(path: Path) -> bytes:
    """The first four bytes of a regular file that is not empty."""
    if not path.exists():
        raise refusal(path, "there is no such file", "check the spelling of the path")
    if path.is_dir():
        raise refusal(path, "this is a folder", "give one recording inside it")
    if not path.is_file():
        raise refusal(path, "this is not a regular file", "give a recording as C3D, Parquet or CSV")
    with path.open("rb") as stream:
        start = stream.read(len(MAGIC))
    if not start:
        raise refusal(path, "the file is empty", "export or copy the recording again")
    return start
