"""Files that appear whole or not at all.

A result is written beside its final place, forced to the disk and only then renamed, so that a full
disk, a crash or Ctrl-C leaves what was there before and never half a file. Every layer that
writes uses this; what the system refuses becomes a :class:`CondyleError` that names the path.
"""

from __future__ import annotations

import errno
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from uuid import uuid4

from condyle.model.errors import CondyleError

_REMEDIES = {
    errno.ENOSPC: "The disk is full: free some space, or write to another disk.",
    errno.EDQUOT: "Your share of the disk is used up: free some space, or write to another disk.",
    errno.EACCES: "You may not write there: choose another folder, or change its permissions.",
    errno.EPERM: "You may not write there: choose another folder, or change its permissions.",
    errno.EROFS: "That disk can only be read: choose another folder.",
    errno.ENOENT: "Its folder does not exist: make it first, or choose another.",
    errno.ENOTDIR: "Part of that path is a file, not a folder: choose another path.",
    errno.EISDIR: "That is a folder: name a file in it.",
    errno.ENAMETOOLONG: "That name is too long: choose a shorter one.",
}


@contextmanager
def whole_file(path: str | Path) -> Iterator[Path]:
    r"""Give a path beside `path` to write to; move it to `path` when the block ends well.

    Parameters
    ----------
    path : path
        Where the file shall appear; its folder must exist. What stood there is replaced.

    Yields
    ------
    Path
        A new name in the same folder, with the same ending (writers that choose the format by
        the ending work). Where the block raises, the file there is removed.

    Raises
    ------
    CondyleError
        Where the system refuses the path: no space, no permission, no such folder, a folder of
        that name. Other exceptions of the block pass through unchanged.

    Examples
    --------
    >>> from tempfile import mkdtemp
    >>> table = Path(mkdtemp()) / "table.csv"
    >>> with whole_file(table) as beside:
    ...     _ = beside.write_text("a,b\n1,2\n")
    >>> table.read_text()
    'a,b\n1,2\n'
    """
    final = Path(os.path.realpath(path))
    beside = final.with_name(f".{final.stem[:80]}-{uuid4().hex[:12]}{final.suffix}")
    try:
        if final.exists() and not final.is_file():
            raise IsADirectoryError(errno.EISDIR, "not a regular file", str(final))
        beside.touch(exist_ok=False)  # finds a missing folder or permission before the work is done
        yield beside
        _force_to_disk(beside)
        beside.replace(final)
    except OSError as fault:
        if fault.filename not in (None, str(beside), str(final), beside, final):
            raise
        raise cannot_write(path, fault) from fault
    finally:
        _remove(beside)


@contextmanager
def whole_folder(path: str | Path) -> Iterator[Path]:
    """Give a new folder beside `path` to fill; move its files into `path` when the block ends well.

    Files of the same names are replaced, others that stood in `path` stay. Where the block raises,
    `path` is as it was before.

    Raises
    ------
    CondyleError
        Where the system refuses the path.
    """
    final = Path(os.path.realpath(path))
    beside = final.with_name(f".{final.name[:80]}-{uuid4().hex[:12]}")
    try:
        beside.mkdir(parents=True)
        yield beside
        files = sorted(beside.iterdir())
        for file in files:
            _force_to_disk(file)
        final.mkdir(exist_ok=True)
        for file in files:
            file.replace(final / file.name)
    except OSError as fault:
        raise cannot_write(path, fault) from fault
    finally:
        shutil.rmtree(beside, ignore_errors=True)


def cannot_write(path: str | Path, fault: OSError) -> CondyleError:
    """What to tell the user when the system refuses to write `path`."""
    reason = fault.strerror or str(fault)
    remedy = _REMEDIES.get(fault.errno or 0, "Choose another place to write to.")
    return CondyleError(f"{path}: cannot be written: {reason}.\n  {remedy}")


def _force_to_disk(path: Path) -> None:
    with path.open("rb+") as file:
        os.fsync(file.fileno())


def _remove(path: Path) -> None:
    try:
        path.unlink(missing_ok=True)
    except OSError:  # an unreachable folder was reported already
        return
