"""The one door for recordings: a path in, a `Recording` out, or one line that says why not."""

from __future__ import annotations

from pathlib import Path

from condyle.recording.c3d import read_c3d
from condyle.recording.c3d_layout import SIGNATURE, refusal
from condyle.recording.recording import Recording

C3D_SUFFIX = ".c3d"


def read_recording(path: Path) -> Recording:
    """Read a recording of marker positions.

    Parameters
    ----------
    path : Path
        A C3D file, told by its content rather than its name.

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
        if path.suffix.lower() != C3D_SUFFIX and start[1:2] != bytes([SIGNATURE]):
            kind = f"'{path.suffix}' files" if path.suffix else "files of this kind"
            raise refusal(path, f"{kind} cannot be read", "give a recording saved as C3D")
        return read_c3d(path)
    except OSError as error:
        why = error.strerror or str(error)
        raise refusal(path, f"cannot be read ({why})", "check the file and its rights") from error


def first_bytes(path: Path) -> bytes:
    """The first two bytes of a regular file that is not empty."""
    if not path.exists():
        raise refusal(path, "there is no such file", "check the spelling of the path")
    if path.is_dir():
        raise refusal(path, "this is a folder", "give one recording inside it")
    if not path.is_file():
        raise refusal(path, "this is not a regular file", "give a recording saved as C3D")
    with path.open("rb") as stream:
        start = stream.read(2)
    if not start:
        raise refusal(path, "the file is empty", "export or copy the recording again")
    return start
